"""Contact fields by hand on a simple cubic crystal, and the rule that shells stay whole."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError
from latticedip.observables.orbits import orbit_field
from latticedip.physics.contact import contact_field, shell_neighbours
from latticedip.study.points import points_of
from latticedip.units import MU0_T_A3_PER_MUB

A = 4.0
M = np.array([0.3, -0.5, 2.0])
CUBE = ld.Crystal(A * np.eye(3), [[0, 0, 0]], ["Mn"])
CENTRE = np.array([0.5, 0.5, 0.5])


def cubic(k=(0, 0, 0), moment=M) -> ld.Ordering:
    return ld.Ordering(CUBE, [moment], k, "cube")


def contact(ordering: ld.Ordering, point, *terms: ld.Contact) -> np.ndarray:
    return contact_field(ordering, np.asarray(point, dtype=float), terms)


# Shells around the middle of the cube: (n + ½) vectors; around a corner: whole vectors.
SHELLS = {
    "centre": (CENTRE, [(np.sqrt(3) / 2, 8), (np.sqrt(11) / 2, 24), (np.sqrt(19) / 2, 24), (np.sqrt(27) / 2, 32)]),
    "site": (np.zeros(3), [(1.0, 6), (np.sqrt(2), 12), (np.sqrt(3), 8), (2.0, 6), (np.sqrt(5), 24)]),
    "edge": (np.array([0.5, 0, 0]), [(0.5, 2), (np.sqrt(5) / 2, 8), (1.5, 10)]),
}


@pytest.mark.parametrize("name", SHELLS)
def test_shells_of_a_cube(name):
    point, shells = SHELLS[name]
    for number, (distance, count) in enumerate(shells, start=1):
        sites, cells, found = shell_neighbours(cubic(), point, ld.Contact(0.1, shell=number))
        assert len(sites) == len(cells) == count
        assert np.allclose(found, A * distance)
        assert np.allclose(contact(cubic(), point, ld.Contact(0.1, shell=number)), 0.1 * count * M)
        inside = sum(n for _, n in shells[:number])
        assert np.allclose(contact(cubic(), point, ld.Contact(0.1, within=A * distance + 1e-6)), 0.1 * inside * M)


def test_phases_count_the_cells_of_the_neighbours():
    k = np.array([0.5, 0.5, 0.5])
    assert np.allclose(contact(cubic(k), CENTRE, ld.Contact(1.0, shell=1)), 0)
    # Around a site all six neighbours are opposite, in the home cell and in the next.
    assert np.allclose(contact(cubic(k), [0, 0, 0], ld.Contact(1.0, shell=1)), -6 * M)
    assert np.allclose(contact(cubic(k), [1, 0, 0], ld.Contact(1.0, shell=1)), 6 * M)
    # On the edge half way to the next atom along x: m(0) + m(1) at k = (1/4, 0, 0), complex component.
    s = np.array([1, 1j, 0])
    turning = ld.Ordering(CUBE, [s], (0.25, 0, 0))
    for cell in range(-3, 4):
        expected = sum(np.real(s * np.exp(-0.5j * np.pi * (cell + step))) for step in (0, 1))
        assert np.allclose(contact(turning, [cell + 0.5, 0, 0], ld.Contact(1.0, shell=1)), expected, atol=1e-14)


def test_an_ion_whose_moment_vanishes_is_a_neighbour_all_the_same():
    # m, 0, −m, 0 along x; the nearest neighbour of the point is one of the nodes.
    wave = ld.Ordering(CUBE, [[0, 0, 2.0]], (0.25, 0, 0))
    assert np.allclose(wave.moments([[1, 0, 0]]), 0, atol=1e-15)
    assert np.allclose(contact(wave, [1.2, 0, 0], ld.Contact(1.0, shell=1)), 0, atol=1e-15)
    assert np.allclose(contact(wave, [1.7, 0, 0], ld.Contact(1.0, shell=1)), [0, 0, -2])


def test_tensor_couplings_and_several_terms():
    tensor = np.array([[0.1, 0.2, 0], [0, 0.3, -0.1], [0.5, 0, 0.4]])
    density = np.array([0.001, 0.002, -0.003])
    terms = (ld.Contact(tensor, shell=1), ld.Contact(-0.05, shell=2), ld.Contact(moment_density_muB_per_A3=density))
    expected = tensor @ (8 * M) - 0.05 * 24 * M + 2 / 3 * MU0_T_A3_PER_MUB * density
    assert np.allclose(contact(cubic(), CENTRE, *terms), expected, rtol=1e-13)
    found = ld.local_field(cubic(), ld.Probe(CENTRE, contact=terms))
    assert np.allclose(found.contact[0], expected, rtol=1e-13)
    assert np.allclose(contact(cubic(), CENTRE), 0)


def test_neighbours_at_equal_distance_are_never_split():
    # 0.005 Å off the centre the eight distances spread over less than 0.01 Å: one shell. 0.05 Å off they are several.
    near, far = (CENTRE + np.array([d / A, 0, 0]) for d in (0.004, 0.05))
    assert np.allclose(contact(cubic(), near, ld.Contact(1.0, shell=1)), 8 * M)
    assert np.allclose(contact(cubic(), near, ld.Contact(1.0, within=A * np.sqrt(3) / 2 - 0.001)), 8 * M)
    assert np.allclose(contact(cubic(), far, ld.Contact(1.0, shell=1)), 4 * M)
    assert np.allclose(contact(cubic(), far, ld.Contact(1.0, shell=2)), 4 * M)
    assert np.allclose(contact(cubic(), far, ld.Contact(1.0, within=A * np.sqrt(3) / 2)), 4 * M)


def test_only_ions_count_and_with_their_mean_moment():
    crystal = ld.Crystal(
        A * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5], [0.5, 0.5, 0]], ["Mn", "O", "Fe"], occupancies=[0.25, 1, 1]
    )
    ordering = ld.Ordering(crystal, [M, [0, 0, 0], [0, 0, 0]])
    assert np.allclose(contact(ordering, CENTRE, ld.Contact(1.0, shell=1)), 8 * 0.25 * M)


def test_a_far_shell_of_a_skewed_cell():
    skewed = ld.Crystal(A * np.array([[1.0, 0, 0], [7, 1, 0], [-3, 5, 1]]), [[3.0, -2, 0]], ["Mn"])
    ordering = ld.Ordering(skewed, [M])
    point = np.array([0.5, 0.5, 0.5]) * A @ np.linalg.inv(skewed.cell) + [4, 0, 1]
    assert np.allclose(contact(ordering, point, ld.Contact(1.0, shell=4)), 32 * M)


def test_refusals():
    with pytest.raises(InputError) as caught:
        contact(cubic(), CENTRE, ld.Contact(1.0, within=3.0))
    assert str(caught.value) == "contact: no magnetic ion lies within 3 Å of the probe."
    with pytest.raises(InputError) as caught:
        contact(cubic(moment=[0, 0, 0]), CENTRE, ld.Contact(1.0, shell=1))
    assert str(caught.value) == "ordering 'cube' has no magnetic ions for a contact coupling to act on."
    sparse = ld.Ordering(ld.Crystal(150 * np.eye(3), [[0, 0, 0]], ["Mn"]), [M])
    with pytest.raises(InputError) as caught:
        contact(sparse, CENTRE, ld.Contact(1.0, shell=2))
    assert str(caught.value) == "contact: shell 2 lies farther than 200 Å from the probe."


def test_a_radius_at_which_no_shell_ends():
    cell = np.array([[3.0, 0, 0], [0.43, 3.3, 0], [-0.31, 0.57, 3.6]])
    crowded = ld.Ordering(ld.Crystal(cell, [[0, 0, 0]], ["Mn"]), [M])
    with pytest.raises(InputError) as caught:
        contact(crowded, [0.31, 0.12, 0.44], ld.Contact(1.0, within=95.0))
    assert str(caught.value) == (
        "contact: beyond 95 Å the neighbours follow each other so closely that no shell ends within 200 Å. Use a "
        "smaller radius."
    )


def test_a_field_names_the_probe_and_the_ordering_of_a_term_that_finds_nothing():
    probe = ld.Probe([0.5, 0.5, 0.5], name="muon A", contact=ld.Contact(0.1, within=0.2))
    with pytest.raises(InputError) as caught:
        ld.local_field(cubic(), probe)
    assert str(caught.value) == (
        f"muon A, ordering {cubic().name!r}: contact: no magnetic ion lies within 0.2 Å of the probe."
    )


#: Metal atoms at the corners of a cube, fluorine in the middle of its edges: one site of three atoms.
EDGES = ld.Crystal(A * np.eye(3), [[0, 0, 0], [0, 0, 0.5], [0, 0.5, 0], [0.5, 0, 0]], ["Mn", "F", "F", "F"])
#: Along the bond of the first fluorine atom, which is c, and across it.
BOND, ACROSS = 0.07, -0.02


def test_a_tensor_of_a_site_turns_with_its_atoms():
    term = ld.Contact(np.diag([ACROSS, ACROSS, BOND]), shell=1)
    ordering = ld.Ordering(EDGES, [M, [0, 0, 0], [0, 0, 0], [0, 0, 0]], name="edges")
    probe = ld.Probe(site="F", particle="19F", contact=term)
    found = ld.local_field(ordering, probe).contact
    # Two metal neighbours each; the bond of the second and third atom lies along b and a.
    tensors = [np.diag(d) for d in ([ACROSS, ACROSS, BOND], [ACROSS, BOND, ACROSS], [BOND, ACROSS, ACROSS])]
    assert np.allclose(found, [2 * tensor @ M for tensor in tensors], atol=1e-14)
    points = points_of(EDGES, [probe])
    assert [np.allclose(p.contact[0].coupling_T_per_muB, t) for p, t in zip(points, tensors, strict=True)] == [True] * 3
    # At a position of its own the tensor is that of the position, whichever atom is there.
    alone = ld.Probe(EDGES.positions[3], particle="19F", contact=term)
    assert np.allclose(ld.local_field(ordering, alone).contact[0], 2 * tensors[0] @ M, atol=1e-14)


def test_a_tensor_without_the_symmetry_of_its_site_is_refused():
    ordering = ld.Ordering(EDGES, [M, [0, 0, 0], [0, 0, 0], [0, 0, 0]], name="edges")
    probe = ld.Probe(site="F", particle="19F", name="fluorine", contact=ld.Contact(np.diag([0.1, 0.2, 0.3]), shell=1))
    message = (
        "fluorine: its contact tensor is stated for the first atom and does not have the symmetry of that site, so "
        "that the other atoms have none of their own. Symmetrize it, or give a number."
    )
    for call in (lambda: ld.local_field(ordering, probe), lambda: points_of(EDGES, [probe])):
        with pytest.raises(InputError) as caught:
            call()
        assert str(caught.value) == message


def test_a_tensor_that_no_operation_carries_to_the_other_atoms_is_refused():
    cell = np.diag([4.0, 5.0, 6.0])
    crystal = ld.Crystal(cell, [[0, 0, 0], [0.5, 0.5, 0.3], [0.1, 0.2, 0.5]], ["Mn", "O", "O"])
    ordering = ld.Ordering(crystal, [M, [0, 0, 0], [0, 0, 0]], name="two kinds")
    probe = ld.Probe(site="O", particle="17O", name="oxygen", contact=ld.Contact(np.diag([0.1, 0.2, 0.3]), shell=1))
    with pytest.raises(InputError) as caught:
        ld.local_field(ordering, probe)
    assert str(caught.value) == (
        "oxygen: its contact tensor is stated for the first atom, and no operation of the crystal carries it to all "
        "the others. Give each kind of atom a probe of its own, or give a number."
    )


def test_one_atom_keeps_a_tensor_without_its_symmetry():
    crystal = ld.Crystal(A * np.eye(3), [[0, 0, 0], CENTRE], ["Mn", "O"])
    ordering = ld.Ordering(crystal, [M, [0, 0, 0]], name="cube")
    tensor = np.diag([0.1, 0.2, 0.3])
    probe = ld.Probe(site="O", particle="17O", contact=ld.Contact(tensor, shell=1))
    found = ld.local_field(ordering, probe)
    assert np.allclose(found.contact, [8 * tensor @ M])
    assert np.allclose(orbit_field(ordering, probe, equivalent=False).fields([[0, 0, 0]])[:, 0], found.total)
