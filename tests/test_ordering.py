"""Orderings: phases, merging and snapping of k, hands of helices, carried positions, ASE and back."""

from __future__ import annotations

import itertools
import pickle

import numpy as np
import pytest
from ase import Atoms
from ase.calculators.singlepoint import SinglePointCalculator
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.errors import InputError
from latticedip.ordering.model import K_SNAP, ParentTransform, Reference, is_self_conjugate, snap_k
from tests.reference.magnets import waves

CELL = np.array([[5.0, 0, 0], [0.8, 5.6, 0], [-0.6, 0.9, 6.1]])
PLACES = [[0.05, 0.1, 0.2], [0.55, 0.42, 0.7]]
CRYSTAL = ld.Crystal(CELL, PLACES, ["Mn", "Fe"], ["Mn1", "Fe1"])
S = np.random.default_rng(0).normal(size=(3, 2, 3)) + 1j * np.random.default_rng(1).normal(size=(3, 2, 3))
CELLS = np.array(list(itertools.product(range(-2, 3), repeat=3)))


def test_moments_follow_the_phase_of_their_cell():
    k = [(0.21, -0.34, 0.11), (0, 0, 0), (0.5, 0, -0.5)]
    parts = np.array([S[0], S[1].real, S[2].real])
    ordering = ld.Ordering(CRYSTAL, parts, k)
    assert ordering.k.shape == (3, 3) and ordering.components.shape == (3, 2, 3)
    assert np.allclose(ordering.moments(CELLS), waves(k, parts)(CELLS), atol=1e-13)
    assert np.array_equal(ordering.moments(), ordering.moments([[0, 0, 0]]))
    # Far away the phase is taken modulo one first: no digits are lost.
    far = ld.Ordering(CRYSTAL, S[0], (0.25, 0, 0)).moments([[4_000_001, 0, 0], [1, 0, 0]])
    assert np.allclose(far[0], far[1], atol=1e-15)


def test_a_helix_turns_from_u_towards_v():
    # S = m (u + i v): moment m (u cos 2πk·R + v sin 2πk·R), turning from u towards v along k.
    u, v, k = np.array([1.0, 0, 0]), np.array([0, 1.0, 0]), 0.1
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    right = ld.Ordering(crystal, [2 * (u + 1j * v)], (0, 0, k)).moments([[0, 0, n] for n in range(10)])[:, 0]
    angle = 2 * np.pi * k * np.arange(10)
    assert np.allclose(right, 2 * (np.cos(angle)[:, None] * u + np.sin(angle)[:, None] * v))
    for one, other in itertools.pairwise(right):
        assert np.cross(one, other)[2] > 0
    left = ld.Ordering(crystal, [2 * (u - 1j * v)], (0, 0, k)).moments([[0, 0, n] for n in range(10)])[:, 0]
    assert np.allclose(left[1:], right[1:] * [1, -1, 1])
    opposite = ld.Ordering(crystal, [2 * (u - 1j * v)], (0, 0, -k)).moments([[0, 0, n] for n in range(10)])[:, 0]
    assert np.allclose(opposite, right)


@settings(max_examples=100, deadline=None)
@given(
    st.lists(st.sampled_from([0, 0.5, 0.25, -0.3, 0.75]), min_size=3, max_size=3),
    st.lists(st.integers(-2, 2), min_size=3, max_size=3),
    st.booleans(),
)
def test_equal_and_opposite_k_are_merged(k, shift, opposite):
    first = np.array(k)
    second = (-first if opposite else first) + shift
    own = bool(np.all(2 * first == np.round(2 * first)))
    a, b = (S[0].real, S[1].real) if own else (S[0], S[1])
    ordering = ld.Ordering(CRYSTAL, [a, b], [first, second])
    assert len(ordering.k) == 1 and np.array_equal(ordering.k[0], first)
    assert np.allclose(ordering.components[0], a + (b.conj() if opposite else b))
    assert np.allclose(ordering.moments(CELLS), waves([first, second], np.array([a, b]))(CELLS), atol=1e-12)


def test_components_that_cancel_leave_nothing():
    ordering = ld.Ordering(CRYSTAL, [S[0], -S[0].conj()], [(0.2, 0, 0), (-0.2, 0, 1)])
    assert not np.any(ordering.is_magnetic) and ordering.n_ions == 0


def test_snapping():
    near = np.array([0.5 + 0.9 * K_SNAP, -0.9 * K_SNAP, 1 - 0.9 * K_SNAP])
    assert np.array_equal(snap_k(near[None])[0], [0.5, 0, 1])
    off = np.array([0.5 + 1.1e-9, 1.1e-9, 0.25 + 1e-12])
    assert np.array_equal(snap_k(off[None])[0], off)
    assert np.array_equal(ld.Ordering(CRYSTAL, S[0].real, near).k[0], [0.5, 0, 1])
    assert list(is_self_conjugate(np.array([[0.5, 0, 1], [0.25, 0, 0], [0.5, 0.5, -1.5]]))) == [True, False, True]
    # Snapped to the zone boundary, so an imaginary part has no meaning.
    with pytest.raises(InputError):
        ld.Ordering(CRYSTAL, S[0], near)
    assert ld.Ordering(CRYSTAL, S[0], off).components.dtype == complex


@pytest.mark.parametrize("k", [(0, 0, 0), (0.5, 0, -0.5), (1, 0, 0.5)])
def test_an_imaginary_part_without_meaning_is_refused(k):
    parts = S[0].real.astype(complex)
    parts[1, 2] += 0.25j
    with pytest.raises(InputError) as caught:
        ld.Ordering(CRYSTAL, parts, k)
    assert str(caught.value) == (
        f"at k = {[float(x) for x in k]} (k and −k are the same vector) the component of site 2 (Fe1) has an imaginary "
        "part of 0.25 µB, which has no meaning there. Give real components."
    )
    # Rounding left by a product of phases is dropped.
    parts[1, 2] = parts[1, 2].real + 1e-12j
    assert np.all(ld.Ordering(CRYSTAL, parts, k).components.imag == 0)


def test_net_moment_and_ions_take_the_occupancy():
    crystal = ld.Crystal(CELL, PLACES, ["Mn", "Fe"], occupancies=[1.0, 0.25])
    ordering = ld.Ordering(crystal, [[[0, 0, 1], [0, 0, 4]], [[3, 0, 0], [0, 0, 0]]], [(0, 0, 0), (0, 0, 0.5)])
    assert np.allclose(ordering.net_moment, [0, 0, 2])
    assert ordering.n_ions == 1.25
    assert np.allclose(ordering.moments()[0], [[3, 0, 1], [0, 0, 4]])  # of the ions
    assert np.allclose(ordering.mean_components[0, 1], [0, 0, 1])
    one = ld.Ordering(crystal, [[0, 0, 0], [0, 0, 4]])
    assert list(one.is_magnetic) == [False, True] and one.n_ions == 0.25
    # An integer k other than zero is a uniform wave: it counts cells.
    assert np.allclose(ld.Ordering(crystal, [[0, 0, 1], [0, 0, 0]], (0, 0, 1)).net_moment, [0, 0, 1])


def test_rotated():
    turn = np.array([[0, -1.0, 0], [1, 0, 0], [0, 0, 1]])
    reference = Reference(CRYSTAL, ParentTransform(np.eye(3), np.zeros(3)), "itself")
    ordering = ld.Ordering(CRYSTAL, S[0], (0.2, 0, 0), "pattern", reference=reference, notes=("a note",))
    turned = ordering.rotated(turn)
    assert np.allclose(turned.moments(CELLS), ordering.moments(CELLS) @ turn.T)
    assert turned.name == "pattern" and turned.reference is reference and turned.notes == ("a note",)
    assert ordering.rotated(turn, "new").name == "new"
    for wrong in (2 * np.eye(3), -np.eye(3)):
        with pytest.raises(InputError) as caught:
            ordering.rotated(wrong)
        assert str(caught.value) == f"rotation must be a proper rotation matrix, got {wrong.tolist()}."


# --- positions carried from a reference cell ---------------------------------------------------------------------


def carried(P, p, position) -> np.ndarray:
    return Reference(CRYSTAL, ParentTransform(np.asarray(P, dtype=float), np.asarray(p, dtype=float))).carry(position)


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.integers(-2, 3), min_size=9, max_size=9),
    st.lists(st.sampled_from([0, 0.25, 0.5, 1 / 3]), min_size=3, max_size=3),
    st.lists(st.floats(-2, 2), min_size=3, max_size=3),
)
def test_one_position_becomes_as_many_as_cells_fit(entries, p, position):
    P = np.array(entries, dtype=float).reshape(3, 3)
    volume = abs(np.linalg.det(P))
    if not 0.5 < volume < 13:
        return
    points = carried(P, p, position)
    assert len(points) == round(volume)
    assert np.all((points >= 0) & (points < 1))
    # Each is the position again, up to a whole reference cell; no two are the same.
    back = points @ P.T + p - position
    assert np.abs(back - np.round(back)).max() < 1e-9
    for one, other in itertools.combinations(points, 2):
        gap = one - other
        assert np.abs(gap - np.round(gap)).max() > 1e-3


@pytest.mark.parametrize("x", [0.1234565, 0.0000005, 1 / 3, 0.9999995, 0.99995, 0.5])
def test_no_rounding_edge_doubles_or_moves_a_point(x):
    points = carried(np.diag([2, 1, 1]), (0, 0, 0), (x, x, x))
    assert len(points) == 2
    expected = np.array([[x / 2, x, x], [(x + 1) / 2, x, x]])
    assert np.abs(points[np.argsort(points[:, 0])] - expected).max() < 1e-15


def test_a_smaller_child_cell_holds_one_point():
    # The primitive cell of a body-centred one: P = ½ (−1 1 1; 1 −1 1; 1 1 −1).
    P = 0.5 * np.array([[-1, 1, 1], [1, -1, 1], [1, 1, -1]])
    points = carried(P, (0, 0, 0), (0.1, 0.2, 0.3))
    assert len(points) == 1
    back = P @ points[0] - [0.1, 0.2, 0.3]
    assert np.allclose(back * 2, np.round(back * 2))


# --- ASE ---------------------------------------------------------------------------------------------------------


def test_to_ase_and_back():
    ordering = ld.Ordering(CRYSTAL, [S[0], S[1].real], [(0.25, 0, 1 / 3), (0, 0, 0)])
    atoms = ordering.to_ase((4, 1, 3))
    assert len(atoms) == 24 and np.allclose(atoms.cell.array, np.diag([4, 1, 3]) @ CELL)
    again = ld.Ordering.from_ase(atoms)
    assert again.crystal.labels == ("Mn1", "Fe1") * 12
    positions = atoms.get_scaled_positions(wrap=False)
    for i, (position, moment) in enumerate(zip(positions, again.moments()[0], strict=True)):
        where = position * [4, 1, 3] - PLACES[i % 2]
        cell = np.round(where)
        assert np.allclose(where, cell, atol=1e-12)
        assert np.allclose(moment, ordering.moments([cell])[0, i % 2], atol=1e-12)


def test_scalar_moments_lie_along_z_and_it_is_said():
    atoms = Atoms("MnFe", cell=CELL, scaled_positions=PLACES, pbc=True, magmoms=[2.0, -1.0])
    ordering = ld.Ordering.from_ase(atoms)
    assert np.allclose(ordering.moments()[0], [[0, 0, 2], [0, 0, -1]])
    assert ordering.notes == ("the file gives scalar moments; they are taken along Cartesian z",)
    assert ordering.notes[0] in ld.dipolar_energy(ordering).notes


def test_moments_of_a_calculation():
    atoms = Atoms("MnFe", cell=CELL, scaled_positions=PLACES, pbc=True)
    atoms.calc = SinglePointCalculator(atoms, magmoms=[3.0, 0.5])
    assert np.allclose(ld.Ordering.from_ase(atoms, "run").moments()[0, :, 2], [3.0, 0.5])
    atoms.set_initial_magnetic_moments([[0, 1, 0], [0, 0, 0]])
    assert np.allclose(ld.Ordering.from_ase(atoms).moments()[0, 0], [0, 1, 0])
    with pytest.raises(InputError) as caught:
        ld.Ordering.from_ase(Atoms("Mn", cell=CELL, pbc=True))
    assert str(caught.value) == (
        "the structure carries no magnetic moments. Give them in the study, or use a file that has them."
    )


# --- refusals ----------------------------------------------------------------------------------------------------

REFUSED = {
    "no crystal": ((CELL, S[0]), "an Ordering needs a Crystal, got ndarray."),
    "short list": ((CRYSTAL, [[0, 0, 1]]), "components must have shape (2, 3), got (1, 3)."),
    "ragged": ((CRYSTAL, [[0, 0, 1], [0, 0]]), "components is not a rectangular array of numbers"),
    "words": ((CRYSTAL, [["0", "0", "1"], ["0", "0", "1"]]), "components must hold numbers, got [['0', '0', '1'], "),
    "nan": (
        (CRYSTAL, [[0, 0, np.nan], [0, 0, 1]]),
        "components holds a value that is not finite: (nan+0j) at index (0, 2).",
    ),
    "two k, one set": (
        (CRYSTAL, [[0, 0, 1], [0, 0, 1]], [(0, 0, 0), (0, 0, 0.5)]),
        "components must have shape (2, 2, 3), got (2, 3).",
    ),
    "one k, two sets": ((CRYSTAL, S[:2], (0.2, 0, 0)), "components must have shape (1, 2, 3), got (2, 2, 3)."),
    "a number as k": ((CRYSTAL, S[0], 0.5), "k must have shape (n, 3), got ()."),
    "k of two": ((CRYSTAL, S[0], (0.5, 0)), "k must have shape (3), got (2,)."),
    "complex k": ((CRYSTAL, S[0], (0.5j, 0, 0)), "k must hold real numbers, got (0.5j, 0, 0)."),
    "no k": ((CRYSTAL, np.zeros((0, 2, 3)), np.zeros((0, 3))), "an Ordering needs at least one propagation vector."),
    "wrong uncertainties": (
        (CRYSTAL, S[0].real, (0, 0, 0), "", [[0.1, 0.1, 0.1]]),
        "moment_su must hold numbers of at least 0 or NaN in shape (2, 3).",
    ),
    "negative uncertainties": (
        (CRYSTAL, S[0].real, (0, 0, 0), "", -np.ones((2, 3))),
        "moment_su must hold numbers of at least 0 or NaN in shape (2, 3).",
    ),
    "slab": (
        (ld.Crystal(CELL, PLACES, ["Mn", "Fe"], pbc=(True, True, False)), S[0], (0.2, 0, 0.1)),
        "k has a component along direction 3, in which the crystal is not periodic.",
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refusals(name):
    arguments, message = REFUSED[name]
    with pytest.raises(InputError) as caught:
        ld.Ordering(*arguments)
    assert str(caught.value).startswith(message)


def test_refused_cells_and_repeats():
    ordering = ld.Ordering(CRYSTAL, S[0], (0.2, 0, 0))
    with pytest.raises(InputError, match=r"^cells must be whole numbers: they count lattice vectors\.$"):
        ordering.moments([[0.5, 0, 0]])
    with pytest.raises(InputError, match=r"^cells must have shape \(n, 3\), got \(3,\)\.$"):
        ordering.moments((1, 0, 0))
    for repeat in ((0, 1, 1), (1.5, 1, 1), (2, 2)):
        with pytest.raises(InputError) as caught:
            ordering.to_ase(repeat)
        assert str(caught.value) == f"repeat must be three whole numbers of at least 1, got {repeat!r}."


def test_frozen_and_pickled():
    ordering = ld.Ordering(CRYSTAL, S[0], (0.2, 0, 0), "wave", [[0.1, np.nan, 0], [0, 0, 0]])
    for array in (ordering.components, ordering.k, ordering.moment_su, ordering.net_moment, ordering.is_magnetic):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0
    with pytest.raises(AttributeError):
        ordering.name = "other"
    again = pickle.loads(pickle.dumps(ordering))
    assert np.array_equal(again.moments(CELLS), ordering.moments(CELLS)) and again.name == "wave"
    given = S[0].copy()
    kept = ld.Ordering(CRYSTAL, given, (0.2, 0, 0))
    given[:] = 0
    assert np.array_equal(kept.components[0], S[0])


def test_moments_that_cancel_leave_no_rounding():
    moments = [[0.1, 0.2, 0.3], [0.2, -0.2, 0.6], [-0.3, 0, -0.9]]
    crystal = ld.Crystal(CELL, [*PLACES, [0.1, 0.8, 0.4]], ["Mn"] * 3)
    assert 0.1 + 0.2 - 0.3 != 0
    assert np.array_equal(ld.Ordering(crystal, moments).net_moment, [0, 0, 0])
    # What is small but larger than the rounding stays.
    moments[0][2] += 1e-11
    assert ld.Ordering(crystal, moments).net_moment[2] == pytest.approx(1e-11, rel=1e-4)


def test_moments_beyond_any_unit_are_refused():
    with pytest.raises(InputError, match=r"^a moment of 1e\+200 µB is beyond 1e\+06 µB. Give Bohr magnetons.$"):
        ld.Ordering(CRYSTAL, [[0, 0, 1e200], [0, 0, 1]])


def test_two_sets_of_moments_in_atoms_are_told():
    atoms = Atoms("Mn2", positions=[[0, 0, 0], [0, 0, 2]], cell=[4, 4, 4], pbc=True, magmoms=[1, 1])
    atoms.calc = SinglePointCalculator(atoms, magmoms=[3.0, -3.0])
    ordering = ld.Ordering.from_ase(atoms)
    assert np.array_equal(ordering.moments()[0], [[0, 0, 1], [0, 0, 1]])
    assert ordering.notes[1:] == (
        "the file holds initial magnetic moments and other ones as the result of a calculation; the initial ones are "
        "taken",
    )
    atoms.calc = SinglePointCalculator(atoms, magmoms=[1.0, 1.0])
    assert ld.Ordering.from_ase(atoms).notes == ("the file gives scalar moments; they are taken along Cartesian z",)
