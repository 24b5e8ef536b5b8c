"""Neighbours that a probe moves: the pair terms exchanged inside the infinite sum, by hand."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError
from latticedip.ordering.model import ParentTransform, Reference
from tests.reference.constants import DIPOLE_T
from tests.refusals import refusal
from tests.test_spread import CASES, CELL, PLACES, STUDY, S
from tests.test_study import study_of

POINT = np.array([0.5, 0.15, 0.2])
WIDE = np.array([[0.2, 0.05, 0], [0.05, 0.3, 0], [0, 0, 0.15]])


def pair(vector: np.ndarray) -> np.ndarray:
    """Dipole tensor in T/µB, typed out."""
    r = np.linalg.norm(vector)
    return DIPOLE_T * (3 * np.outer(vector, vector) - r * r * np.eye(3)) / r**5


def crystal() -> ld.Crystal:
    return ld.Crystal(CELL, PLACES, ["Mn", "Fe", "O"], occupancies=[1.0, 0.6, 1.0])


def ordering_of(name: str) -> ld.Ordering:
    k, components = CASES[name]
    return ld.Ordering(crystal(), components, k, name)


def neighbours(point: np.ndarray, within: float, sites=(0, 1, 2)) -> list[tuple[int, np.ndarray, np.ndarray]]:
    """Site, cell and vector from atom to point of all atoms within a distance, by trying every cell near."""
    found = []
    for n in np.ndindex(7, 7, 7):
        cell = np.array(n) - 3
        for site in sites:
            vector = (point - PLACES[site] - cell) @ CELL
            if 0.05 < np.linalg.norm(vector) <= within:
                found.append((site, cell, vector))
    return found


def mean_moment(ordering: ld.Ordering, site: int, cell: np.ndarray) -> np.ndarray:
    phases = np.exp(-2j * np.pi * ordering.k @ cell)
    return ordering.crystal.occupancies[site] * (phases @ ordering.components[:, site]).real


WAYS = {
    "factor": ({"factor": 1.07}, lambda v: 1.07 * v),
    "outward": ({"outward_A": -0.2}, lambda v: v * (1 - 0.2 / np.linalg.norm(v))),
    "vector": ({"vector_A": [0.1, -0.2, 0.05]}, lambda v: v - np.array([0.1, -0.2, 0.05])),
}


@pytest.mark.parametrize("way", WAYS)
@pytest.mark.parametrize("name", CASES)
def test_pairs_are_exchanged_in_the_sum(name, way):
    ordering = ordering_of(name)
    options, moved = WAYS[way]
    term = ld.Displaced(within=3.6, **options)
    for point in (POINT, POINT + np.array([2, -1, 0])):
        still = ld.local_field(ordering, ld.Probe(point))
        found = ld.local_field(ordering, ld.Probe(point, displaced=term))
        expected = np.zeros(3)
        chosen = [(s, c + np.round(point - POINT).astype(int), v) for s, c, v in neighbours(POINT, 3.6)]
        assert len(chosen) > 3
        for site, cell, vector in chosen:
            expected += (pair(moved(vector)) - pair(vector)) @ mean_moment(ordering, site, cell)
        assert np.abs(found.dipolar - still.dipolar - expected).max() < 1e-13
        for part in ("lorentz", "demagnetizing", "contact", "applied"):
            assert np.array_equal(getattr(found, part), getattr(still, part))
        assert np.array_equal(found.error_bound_T, still.error_bound_T)
    assert found.notes[-1] == f"muon at (2.5, -0.85, 0.2): displaced {term.words()}"


def test_one_named_atom_and_its_element_alone():
    ordering = ordering_of("generic")
    still = ld.local_field(ordering, POINT[None]).total
    one = ld.Displaced(atom=(1, (0, -1, 0)), vector_A=(0.3, 0, 0))
    vector = (POINT - PLACES[1] + [0, 1, 0]) @ CELL
    expected = (pair(vector - [0.3, 0, 0]) - pair(vector)) @ mean_moment(ordering, 1, np.array([0, -1, 0]))
    found = ld.local_field(ordering, ld.Probe(POINT, displaced=[one]))
    assert np.abs(found.total - still - expected).max() < 1e-14
    # Atoms without a moment move without a trace.
    bare = ld.Ordering(crystal(), [[1.0, 0, 2], [0, 0, 0], [0, 0, 0]])
    oxygen = ld.Displaced(within=4.0, of="O", factor=1.3)
    assert np.array_equal(
        ld.local_field(bare, ld.Probe(POINT, displaced=oxygen)).total, ld.local_field(bare, POINT[None]).total
    )


def test_atoms_put_back_where_they_were():
    """One atom of a supercell sits elsewhere and is put back for the probe: the opposite of moving it."""
    ordering = ordering_of("uniform")
    shift = np.array([0.15, 0.1, -0.2])
    repeat = np.array([3, 3, 3])
    cell = repeat[:, None] * CELL
    cells = np.array(list(np.ndindex(3, 3, 3)))
    places = ((PLACES[None] + cells[:, None]) / repeat).reshape(-1, 3)
    there = np.flatnonzero(np.all(cells == 1, axis=1))[0] * 3 + 1
    moved = places.copy()
    moved[there] += shift @ np.linalg.inv(cell)
    labels = ["Mn", "Fe", "O"] * 27
    moments = np.tile(S.real, (27, 1))
    big = ld.Ordering(ld.Crystal(cell, moved, labels, occupancies=[1, 0.6, 1] * 27), moments)
    whole = ld.local_field(big, ((POINT + 1) / 3)[None]).total[0]
    probe = ld.Probe((POINT + 1) / 3, displaced=ld.Displaced(atom=(int(there), (0, 0, 0)), vector_A=-shift))
    restored = ld.local_field(big, probe).total[0]
    expected = ld.local_field(
        ordering, ld.Probe(POINT + 1, displaced=ld.Displaced(atom=(1, (1, 1, 1)), vector_A=shift))
    ).total[0]
    still = ld.local_field(ordering, POINT[None]).total[0]
    assert np.abs((whole - restored) - (expected - still)).max() < 1e-12


def test_a_probe_on_a_site_and_shells():
    """Simple cubic, antiferromagnetic planes: the six nearest of a site go outward, by hand."""
    a = 4.0
    cubic = ld.Crystal(a * np.eye(3), [[0, 0, 0]], ["Mn"])
    ordering = ld.Ordering(cubic, [[0, 0, 2.0]], (0, 0, 0.5))
    probe = ld.Probe(site="Mn", particle="55Mn", displaced=ld.Displaced(shell=1, outward_A=0.1))
    found = ld.local_field(ordering, probe)
    still = ld.local_field(ordering, ld.Probe(site="Mn", particle="55Mn"))
    # Four neighbours with moment up across, two with moment down along z: −4 − 4 in units of (µ0/4π) m/r³.
    change = -8 * 2.0 * DIPOLE_T * (1 / 4.1**3 - 1 / a**3)
    np.testing.assert_allclose(found.total - still.total, [[0, 0, change]], atol=1e-13)
    assert len(found.moved[0]) == 6


@pytest.mark.parametrize("spread", [None, 0.1, 0.7, WIDE], ids=["point", "ball", "wide ball", "tilted"])
def test_displaced_pairs_are_averaged_too(spread):
    """The exchanged pair against one ion in a cell so large that its images do not matter, moved against the probe."""
    ordering = ordering_of("generic")
    shift = np.array([0.4, -0.3, 0.2])
    term = ld.Displaced(atom=(0, (0, 0, 0)), vector_A=shift)
    still = ld.local_field(ordering, ld.Probe(POINT, spread=spread))
    found = ld.local_field(ordering, ld.Probe(POINT, spread=spread, displaced=term))
    # By hand: the probe shifted the other way feels the pair in its new place.
    pair_only = np.zeros((1, 3, 3), complex)
    pair_only[0, 0] = ordering.components[0, 0]
    large = ld.Crystal(CELL * 40, PLACES / 40, ["Mn", "Fe", "O"])
    alone = ld.Ordering(large, np.real(pair_only[0]))
    old = ld.local_field(alone, ld.Probe(POINT / 40, spread=spread)).total
    new = ld.local_field(alone, ld.Probe(POINT / 40 - shift @ np.linalg.inv(CELL * 40), spread=spread)).total
    # The images of the large cell add a nearly uniform field: its change over the shift is below 1e-7 T.
    assert np.abs((found.total - still.total) - (new - old)).max() < 1e-6


@pytest.mark.parametrize("spread", [None, 0.1, WIDE], ids=["point", "ball", "tilted"])
def test_gradient_holds_all_atoms(spread):
    ordering = ordering_of("two waves")
    term = ld.Displaced(atom=(0, (0, 0, 0)), vector_A=(0.3, 0.2, -0.1))
    found = ld.local_field(ordering, ld.Probe(POINT, displaced=term, spread=spread))
    still = ld.local_field(ordering, ld.Probe(POINT, spread=spread))
    assert np.abs(found.gradient_T_per_A - still.gradient_T_per_A).max() > 1e-3
    for axis in range(3):
        step = 1e-4 * np.eye(3)[axis] @ np.linalg.inv(CELL)
        sizes = [
            ld.local_field(ordering, ld.Probe(POINT + sign * step, displaced=term, spread=spread), tol=1e-12).size_T[0]
            for sign in (1, -1)
        ]
        assert abs((sizes[0] - sizes[1]) / 2e-4 - found.gradient_T_per_A[0, axis]) < 1e-6


def test_an_ordering_in_a_cell_of_its_own():
    """Shells and atoms mean those of the crystal that the probe is given in."""
    home = ld.Crystal(CELL, PLACES, ["Mn", "Fe", "O"], labels=["Mn1", "Fe1", "O1"])
    one = ld.Ordering(home, S.real, (0.5, 0, 0))
    double = np.diag([2.0, 1, 1])
    places = np.vstack([(PLACES + np.array([n, 0, 0])) @ np.linalg.inv(double) for n in (0, 1)])
    big = ld.Crystal(double @ CELL, places, ["Mn", "Fe", "O"] * 2, labels=["A", "B", "C", "D", "E", "F"])
    two = ld.Ordering(
        big,
        np.vstack([S.real, -S.real]),
        reference=Reference(home, ParentTransform(double.T, np.zeros(3)), "twice along a"),
    )
    for terms in (
        ld.Displaced(shell=1, of="Mn1", factor=1.1),
        [ld.Displaced(atom=(1, (0, -1, 0)), vector_A=(0.1, 0.2, 0)), ld.Displaced(within=3.5, of="O", outward_A=0.2)],
    ):
        probe = ld.Probe(POINT, displaced=terms)
        found, expected = ld.local_field(two, probe), ld.local_field(one, probe)
        assert np.abs(found.total[0] - expected.total[0]).max() < 1e-9
        assert np.abs(found.total[1] + expected.total[0]).max() < 1e-9
        assert np.abs(expected.total - ld.local_field(one, POINT[None]).total).max() > 1e-4
    other = ld.Crystal(double @ CELL, places, ["Mn", "Fe", "N"] * 2)
    three = ld.Ordering(other, np.vstack([S.real, -S.real]), name="nitride", reference=two.reference)
    with pytest.raises(InputError) as caught:
        ld.local_field(three, ld.Probe(POINT, name="A", displaced=ld.Displaced(shell=1, of="O", factor=1.1)))
    distance = min(np.linalg.norm(v) for _, _, v in neighbours(POINT, 8, (2,)))
    assert str(caught.value) == (
        "A: displaced: the ordering 'nitride' has no O within 0.2 Å of the place of atom O1, "
        f"{distance:.4f} Å from the probe."
    )


def test_contact_shells_stay_those_of_the_crystal():
    ordering = ordering_of("uniform")
    contact = ld.Contact(0.1, shell=1)
    still = ld.local_field(ordering, ld.Probe(POINT, contact=contact))
    found = ld.local_field(ordering, ld.Probe(POINT, contact=contact, displaced=ld.Displaced(shell=1, factor=3.0)))
    assert np.array_equal(found.contact, still.contact) and np.any(found.contact)


BAD = {
    "no object": (
        lambda: ld.Probe(POINT, displaced=[1.05]),
        "displaced must hold Displaced objects, got 1.05.",
    ),
    "twice": (
        lambda: ld.local_field(
            ordering_of("uniform"),
            ld.Probe(POINT, name="A", displaced=[ld.Displaced(shell=1, factor=1.1), ld.Displaced(shell=1, factor=1.2)]),
        ),
        "A: displaced: atom Mn in cell (0, 0, 0) is moved twice.",
    ),
    "flat": (
        lambda: ld.local_field(
            ordering_of("uniform"),
            ld.Probe(
                POINT,
                name="A",
                spread=np.diag([0.01, 0, 0]),
                displaced=ld.Displaced(atom=(0, (0, 0, 0)), vector_A=(POINT - PLACES[0]) @ CELL - [0.3, 0, 0]),
            ),
        ),
        "A: its spread is flat (less than 0.001 Å along one direction) and reaches atom Mn, where the average of a "
        "dipole field over a plane or a line has no finite value. Give the spread an extent along every direction.",
    ),
}


@pytest.mark.parametrize("case", BAD)
def test_refused(case):
    call, message = BAD[case]
    assert refusal(call) == message


def test_study_keys(tmp_path):
    text = """displaced = [{ shell = 1, of = "F", factor = 1.05 }, { within = 2.5, of = "Co1", outward_A = -0.1 },
    { atom = { site = "Co1", number = 2, cell = [0, 0, -1] }, vector_A = [0.1, 0, 0] }]"""
    study = study_of(tmp_path, STUDY + text)
    first, second, third = study.probes[0].displaced
    assert (first.shell, first.of, first.factor) == (1, "F", 1.05)
    assert (second.within, second.of, second.outward_A) == (2.5, "Co1", -0.1)
    assert third.atom == (study.crystal.find("Co1")[1], (0, 0, -1)) and list(third.vector_A) == [0.1, 0, 0]


STUDY_BAD = {
    "displaced = 3": "`probe[1].displaced`: got 3, expected a list of neighbours that move, such as "
    "[{ shell = 1, factor = 1.05 }].",
    "displaced = [{ shell = 1 }]": "`probe[1].displaced[1]`: a Displaced needs exactly one of factor, outward_A (Å) "
    "and vector_A (Cartesian, Å).",
    'displaced = [{ shell = 1, of = "Mn", factor = 2 }]': "`probe[1].displaced[1].of`: no site has the label or "
    "element 'Mn'. Known are: Co1, Co2, F1, Co, F.",
    "displaced = [{ atom = { number = 1 }, factor = 2 }]": "`probe[1].displaced[1].atom.site`: missing, expected a "
    "site label or element.",
    'displaced = [{ atom = { site = "Co1", number = 99 }, factor = 2 }]': "`probe[1].displaced[1].atom.number`: got "
    "99, but Co1 has 4 atoms in the cell.",
    'displaced = [{ atom = { site = "Co1", cell = [0.5, 0, 0] }, factor = 2 }]': "`probe[1].displaced[1].atom.cell[1]`"
    ": got 0.5, expected a whole number.",
    "displaced = [{ shel = 1 }]": "`probe[1].displaced[1].shel`: unknown key; known here are shell, within, atom, of, "
    "factor, outward_A, vector_A. Did you mean 'shell'?",
}


@pytest.mark.parametrize("text", STUDY_BAD)
def test_study_refuses(tmp_path, text):
    with pytest.raises(InputError) as caught:
        study_of(tmp_path, STUDY + text)
    assert str(caught.value) == f"{tmp_path / 'study.toml'}: {STUDY_BAD[text]}"
