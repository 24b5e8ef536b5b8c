"""Crystals: what they hold, how sites are found and ordered, symmetry, ASE, and what is refused."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
from ase import Atoms
from ase.build import bulk, molecule
from ase.spacegroup import crystal as spacegroup_crystal
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.crystal.model import Operations, distinct_labels, site_order, wrap
from latticedip.crystal.symmetry import centrings_of, equivalent_sites, find_operations, operations_of
from latticedip.errors import InputError, LatticedipError, LimitError

CELL = np.array([[5.0, 0, 0], [0.8, 5.6, 0], [-0.6, 0.9, 6.1]])
PLACES = [[0.05, 0.1, 0.2], [0.55, 1.42, -0.3]]
CRYSTAL = ld.Crystal(CELL, PLACES, ["Mn", "Fe"], name="two")


def test_what_it_holds():
    assert CRYSTAL.n_sites == 2 and CRYSTAL.labels == ("Mn", "Fe") and CRYSTAL.pbc == (True, True, True)
    assert np.array_equal(CRYSTAL.positions, PLACES)  # as given, not wrapped
    assert np.allclose(CRYSTAL.positions_cart, np.array(PLACES) @ CELL)
    assert CRYSTAL.volume_A3 == pytest.approx(5 * 5.6 * 6.1)
    assert np.array_equal(CRYSTAL.occupancies, [1, 1])
    for array in (CRYSTAL.cell, CRYSTAL.positions, CRYSTAL.occupancies, CRYSTAL.positions_cart, CRYSTAL.places_cart):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0
    again = pickle.loads(pickle.dumps(CRYSTAL))
    assert np.array_equal(again.positions, CRYSTAL.positions) and again.name == "two"
    left = ld.Crystal(CELL * [1, 1, -1], PLACES, ["Mn", "Fe"])
    assert left.volume_A3 == pytest.approx(CRYSTAL.volume_A3)


def test_crystal_axis_components():
    # Along unit vectors parallel to a, b, c, as magCIF defines them: a hexagonal cell by hand.
    hexagonal = ld.Crystal([[3, 0, 0], [-1.5, 1.5 * np.sqrt(3), 0], [0, 0, 7]], [[0, 0, 0]], ["Mn"])
    assert np.allclose(hexagonal.to_cartesian([2, 0, 0]), [2, 0, 0])
    assert np.allclose(hexagonal.to_cartesian([[2, 2, 1]]), [[1, np.sqrt(3), 1]])
    assert np.allclose(hexagonal.to_crystal_axes([0, 0, 1.5]), [0, 0, 1.5])
    vectors = np.random.default_rng(0).normal(size=(4, 2, 3))
    assert np.allclose(CRYSTAL.to_crystal_axes(CRYSTAL.to_cartesian(vectors)), vectors)


def test_finding_sites():
    places = [[0.5, 0, 0], [0, 0.5, 0.99995], [0.00004, 0.5, 0], [0.25, 0, 0], [0.75, 0, 0]]
    symbols, labels = ["Mn", "Mn", "O", "N", "Fe"], ["Mn1", "Mn2", "O", "O", "Mn"]
    crystal = ld.Crystal(10 * np.eye(3), places, symbols, labels, np.full(5, 0.5))
    assert crystal.find("Mn1") == (0,) and crystal.find("Mn2") == (1,)
    assert crystal.find("Mn") == (4,)  # the label wins over the element
    assert crystal.find("O") == (2, 3)
    assert crystal.find("N") == (3,)  # no such label: the element
    with pytest.raises(InputError) as caught:
        crystal.find("mn1")
    assert str(caught.value) == (
        "no site has the label or element 'mn1'. Known are: Mn1, Mn2, O, Mn, N, Fe. Did you mean 'Mn1'?"
    )


def test_order_of_sites():
    # By wrapped x, y, z, with values closer than 1e-4 equal, also across the border of the cell.
    places = np.array([[0.5, 0, 0], [0.99995, 0.2, 0], [1.00003, 0.1, 0], [-0.00002, 0.3, 0.1], [0.3, 0, 0]])
    assert site_order(places) == [2, 1, 3, 4, 0]
    assert site_order(np.array([[0, 0.00005, 0.7], [0, 0, 0.2], [0.00009, 0.99999, 0.1]])) == [2, 1, 0]
    assert site_order(np.zeros((0, 3))) == []
    assert np.array_equal(wrap([0.99991, -0.25, 1.5]), [0, 0.75, 0.5])


@settings(max_examples=60, deadline=None)
@given(st.permutations(range(6)), st.lists(st.integers(-3, 3), min_size=18, max_size=18), st.integers(0, 10**6))
def test_order_does_not_depend_on_listing_or_images(order, shifts, seed):
    places = np.random.default_rng(seed).integers(0, 4, (6, 3)) / 4 + np.arange(6)[:, None] * 0.01
    noise = np.random.default_rng(seed + 1).uniform(-3e-5, 3e-5, (6, 3))
    moved = (places + np.reshape(shifts, (6, 3)) + noise)[list(order)]
    assert np.allclose(wrap(moved[site_order(moved)]), wrap(places[site_order(places)]), atol=1.01e-4)


def test_distinct_labels_count_per_element():
    assert distinct_labels(["Mn", "O", "Mn", "O", "Mn"], [0, 1, 0, 3, 4]) == ("Mn1", "O1", "Mn1", "O2", "Mn2")


# --- occupancy ---------------------------------------------------------------------------------------------------


def test_atoms_that_share_a_place():
    shared = ld.Crystal(CELL, [PLACES[0], PLACES[0], PLACES[1]], ["Mn", "Fe", "O"], occupancies=[0.3, 0.7, 1])
    assert np.array_equal(shared.places_cart[0], shared.places_cart[1])
    a = np.array(PLACES[0])
    near = ld.Crystal(CELL, [a, a + np.array([0.0001, 1, 0]), PLACES[1]], ["Mn", "Fe", "O"], occupancies=[0.3, 0.7, 1])
    assert np.allclose(near.places_cart[1], a @ CELL + CELL[1], atol=1e-12)
    assert np.allclose(near.positions_cart[1] - near.places_cart[1], 0.0001 * CELL[0])
    # 0.01 Å apart they keep their own places.
    apart = ld.Crystal(CELL, [a, a + np.array([0.002, 0, 0])], ["Mn", "Fe"], occupancies=[0.3, 0.7])
    assert np.array_equal(apart.places_cart, apart.positions_cart)


@pytest.mark.parametrize("occupancies", [[1, 1], [0.6, 0.5], None])
def test_overlapping_atoms_are_refused(occupancies):
    with pytest.raises(InputError) as caught:
        ld.Crystal(CELL, [[0, 0, 0], [0.01, 1, 0]], ["Mn", "Fe"], ["A", "B"], occupancies)
    assert str(caught.value) == (
        "atoms A (number 1) and B (number 2) are 0.0500 Å apart. Two atoms cannot share a place: remove one, or give "
        "occupancies that add up to at most 1."
    )


def test_three_atoms_on_one_place():
    places = [[0, 0, 0], [0, 0, 1], [0, 0, 0]]
    ld.Crystal(CELL, places, ["Mn", "Fe", "Co"], occupancies=[0.5, 0.3, 0.2])
    with pytest.raises(InputError, match=r"are 0\.0000 Å apart\. Two atoms cannot share a place"):
        ld.Crystal(CELL, places, ["Mn", "Fe", "Co"], occupancies=[0.5, 0.5, 0.5])


# --- symmetry ----------------------------------------------------------------------------------------------------


def rutile() -> ld.Crystal:
    places, cell = [(0, 0, 0), (0.305, 0.305, 0)], [4.87, 4.87, 3.31, 90, 90, 90]
    return ld.Crystal.from_ase(spacegroup_crystal(["Mn", "F"], places, spacegroup=136, cellpar=cell))


def test_labels_and_operations_of_a_structure():
    crystal = rutile()
    assert crystal.labels == ("Mn1",) * 2 + ("F1",) * 4
    assert crystal.operations is not None and len(crystal.operations.rotations) == 16
    assert np.allclose(centrings_of(crystal), [[0, 0, 0]])
    assert equivalent_sites(crystal) == [0, 0, 2, 2, 2, 2]


def test_centrings_of_a_face_centred_cell():
    crystal = ld.Crystal.from_ase(bulk("Ni", "fcc", a=3.52, cubic=True))
    assert np.allclose(centrings_of(crystal), [[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]], atol=1e-6)
    assert len(operations_of(crystal).rotations) == 192


def test_every_operation_maps_the_crystal_onto_itself():
    for crystal in (rutile(), ld.Crystal.from_ase(bulk("Gd", "hcp", a=3.636, c=5.783)), CRYSTAL):
        operations = operations_of(crystal)
        for r, t in zip(operations.rotations, operations.translations, strict=True):
            for symbol, position in zip(crystal.symbols, crystal.positions, strict=True):
                gap = crystal.positions - (r @ position + t)
                gap -= np.round(gap)
                hits = np.flatnonzero(np.linalg.norm(gap @ crystal.cell, axis=1) < 1e-3)
                assert any(crystal.symbols[i] == symbol for i in hits)


def test_mixed_sites_are_carried_onto_their_own_kind():
    # Mn and Fe share both corners of a body-centred cell.
    places = [[0, 0, 0], [0, 0, 0], [0.5, 0.5, 0.5], [0.5, 0.5, 0.5]]
    mixed = ld.Crystal(3 * np.eye(3), places, ["Mn", "Fe", "Mn", "Fe"], occupancies=[0.3, 0.7, 0.3, 0.7])
    stated = Operations(np.array([np.eye(3)] * 2), np.array([[0, 0, 0], [0.5, 0.5, 0.5]]))
    crystal = ld.Crystal(mixed.cell, places, mixed.symbols, (), mixed.occupancies, operations=stated)
    assert equivalent_sites(crystal) == [0, 1, 0, 1]
    assert np.allclose(centrings_of(crystal), [[0, 0, 0], [0.5, 0.5, 0.5]])


def test_operations_of_another_crystal():
    stated = Operations(np.array([np.eye(3)] * 2), np.array([[0, 0, 0], [0.5, 0, 0]]))
    crystal = ld.Crystal(CELL, PLACES, ["Mn", "Fe"], operations=stated)
    with pytest.raises(LatticedipError, match=r"^an operation of the crystal maps atom 1 onto no atom\.$"):
        equivalent_sites(crystal)


def test_occupancy_tells_sites_apart():
    places = [[0, 0, 0], [0.5, 0.5, 0.5]]
    alike = ld.Crystal(3 * np.eye(3), places, ["Mn", "Mn"])
    other = ld.Crystal(3 * np.eye(3), places, ["Mn", "Mn"], occupancies=[1, 0.5])
    assert find_operations(alike)[1] == [0, 0] and find_operations(other)[1] == [0, 1]
    slab = ld.Crystal(3 * np.eye(3), places, ["Mn", "Mn"], pbc=(True, True, False))
    assert find_operations(slab) == (None, [0, 1])
    assert len(operations_of(slab).rotations) == 1


# --- ASE ---------------------------------------------------------------------------------------------------------


def test_ase_and_back():
    crystal = ld.Crystal(CELL, PLACES, ["Mn", "Fe"], ["Mn1", "impurity"], [0.5, 1.0])
    atoms = crystal.to_ase()
    assert np.allclose(atoms.positions, crystal.positions_cart)
    again = ld.Crystal.from_ase(atoms)
    assert np.allclose(again.positions, PLACES, atol=1e-12) and np.array_equal(again.cell, CELL)
    assert again.labels == ("Mn1", "impurity") and np.array_equal(again.occupancies, [0.5, 1])


def test_molecules_and_slabs_come_without_all_vectors():
    water = ld.Crystal.from_ase(molecule("H2O"))
    assert water.pbc == (False, False, False) and water.labels == ("O1", "H1", "H2")
    assert np.allclose(water.positions_cart, molecule("H2O").positions)
    layer = Atoms("Mn", cell=[[3, 0, 0], [0, 3, 0], [0, 0, 0]], pbc=(True, True, False))
    assert ld.Crystal.from_ase(layer).pbc == (True, True, False)


def test_atoms_that_cannot_be_read():
    with pytest.raises(InputError) as caught:
        ld.Crystal.from_ase(Atoms("Mn", pbc=True))
    assert str(caught.value) == (
        "cell of the atoms: cell vectors must be 0.01 to 1e6 Å long, got lengths [0.0, 0.0, 0.0]."
    )
    atoms = Atoms("Mn", cell=CELL, pbc=True, info={"occupancy": {"0": {"Mn": 0.5, "Fe": 0.5}}})
    with pytest.raises(InputError) as caught:
        ld.Crystal.from_ase(atoms)
    assert str(caught.value) == (
        "the atoms carry ASE's occupancy table (0: {'Mn': 0.5, 'Fe': 0.5}), which does not say which atom it means. "
        "Set an array 'occupancies' on the atoms, or read the CIF with read_crystal."
    )
    atoms.info["occupancy"] = {"0": {"Mn": 1.0}}
    assert ld.Crystal.from_ase(atoms).occupancies[0] == 1


# --- refusals ----------------------------------------------------------------------------------------------------

REFUSED = {
    "flat cell": (
        ([[1, 0, 0], [2, 0, 0], [0, 0, 1]], [[0, 0, 0]], ["Mn"]),
        "cell: the cell vectors are linearly dependent (volume zero): [[1.0, 0.0, 0.0], [2.0, 0.0, 0.0], [0.0, 0.0, "
        "1.0]].",
    ),
    "zero vector": (
        ([[0, 0, 0], [2, 0, 0], [0, 0, 1]], [[0, 0, 0]], ["Mn"]),
        "cell: cell vectors must be 0.01 to 1e6 Å long, got lengths [0.0, 2.0, 1.0].",
    ),
    "nan": (
        (CELL, [[0, 0, np.nan]], ["Mn"]),
        "positions holds a value that is not finite: nan at index (0, 2).",
    ),
    "words": ((CELL, [["0", "0", "0"]], ["Mn"]), "positions must hold real numbers, got [['0', '0', '0']]."),
    "ragged": ((CELL, [[0, 0, 0], [0, 0]], ["Mn", "Mn"]), "positions is not a rectangular array of numbers"),
    "flat list": ((CELL, [0, 0, 0, 0.5, 0.5, 0.5], ["Mn", "Mn"]), "positions must have shape (n, 3), got (6,)."),
    "symbols": ((CELL, PLACES, ["Mn"]), "2 positions but 1 symbols."),
    "a word as symbols": (
        (CELL, PLACES, "Mn"),
        "symbols must be a list with one name per site, got the one text 'Mn'.",
    ),
    "labels": ((CELL, PLACES, ["Mn", "Fe"], ["A"]), "2 positions but 1 labels."),
    "occupancy": (
        (CELL, PLACES, ["Mn", "Fe"], (), [1, 0]),
        "occupancy of Fe must lie in (0, 1], got 0.0.",
    ),
    "occupancies": ((CELL, PLACES, ["Mn", "Fe"], (), [1]), "occupancies must have shape (2), got (1,)."),
    "pbc": ((CELL, PLACES, ["Mn", "Fe"], (), None, True), "pbc must be three bools, got True."),
    "own image": (
        (np.diag([0.07, 3, 3]), [[0, 0, 0]], ["Mn"]),
        "atoms Mn (number 1) and Mn (number 1) are 0.0700 Å apart. Two atoms cannot share a place: remove one, or give "
        "occupancies that add up to at most 1.",
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refusals(name):
    arguments, message = REFUSED[name]
    with pytest.raises(InputError) as caught:
        ld.Crystal(*arguments)
    assert str(caught.value).startswith(message)


def test_a_cell_that_is_almost_flat():
    with pytest.raises(LimitError, match=r"^neighbours within 0\.1 Å would need .* images of atoms in the cell"):
        ld.Crystal([[5, 0, 0], [5, 1e-6, 0], [0, 0, 5]], [[0, 0, 0]], ["Mn"])


def test_an_empty_crystal():
    empty = ld.Crystal(CELL, [], [])
    assert empty.n_sites == 0 and empty.positions.shape == (0, 3)
    assert ld.Crystal.from_ase(Atoms(cell=CELL, pbc=True)).n_sites == 0
