"""Orderings with a cell of their own come to lie on the crystal of the study, and their domains are counted."""

from __future__ import annotations

import dataclasses
import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from latticedip.crystal.lattice import box_of, hermite_basis, primitive_basis, reduced_basis
from latticedip.crystal.match import check_transform, match_structures
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering, ParentTransform
from latticedip.study.frames import place_in_frame, transform_words

TETRAGONAL = Crystal(
    np.diag([4.2, 4.2, 6.8]),
    [[0, 0, 0.25], [0, 0, 0.75], [0.5, 0.5, 0], [0.5, 0, 0.25], [0, 0.5, 0.25], [0.5, 0, 0.75], [0, 0.5, 0.75]],
    ("Mn", "Mn", "F", "O", "O", "O", "O"),
    ("Mn1", "Mn1", "F1", "O1", "O1", "O1", "O1"),
)
TRICLINIC = Crystal(
    np.array([[4.1, 0, 0], [0.9, 5.2, 0], [-0.6, 1.1, 6.3]]),
    [[0.1, 0.2, 0.3], [0.65, 0.7, 0.1], [0.35, 0.15, 0.8], [0.8, 0.45, 0.55]],
    ("Fe", "O", "O", "Cl"),
)
HEXAGONAL = Crystal(
    np.array([[5.0, 0, 0], [-2.5, 2.5 * 3**0.5, 0], [0, 0, 7.0]]),
    [[0, 0, 0], [1 / 3, 2 / 3, 0.5], [2 / 3, 1 / 3, 0.5]],
    ("Ni", "I", "I"),
)
FCC = Crystal(
    np.eye(3) * 4.4,
    [[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0], [0.5, 0.5, 0.5], [0.5, 0, 0], [0, 0.5, 0], [0, 0, 0.5]],
    ("Mn",) * 4 + ("O",) * 4,
)


def child_of(parent, P, p=(0, 0, 0), *, rotation=None, stretch=None, seed=0, keep=None):
    """The same structure in the cell P with its origin at p, turned, stretched, its atoms shuffled and wrapped."""
    P = np.array(P, dtype=float)
    reach = int(np.abs(P).sum()) + 1
    steps = np.array(list(itertools.product(range(-reach, reach + 1), repeat=3)))
    inside, symbols = [], []
    for position, symbol in zip(parent.positions, parent.symbols, strict=True):
        points = (position + steps - np.array(p)) @ np.linalg.inv(P).T
        points = points[np.all((points > -1e-9) & (points < 1 - 1e-9), axis=1)]
        inside += list(points)
        symbols += [symbol] * len(points)
    order = [i for i in np.random.default_rng(seed).permutation(len(inside)) if keep is None or symbols[i] in keep]
    cell = P.T @ parent.cell
    if stretch is not None:
        cell = cell @ np.array(stretch)
    if rotation is not None:
        cell = cell @ np.array(rotation)  # rows: v_child = R^T v_parent
    return Crystal(cell, np.array(inside)[order], tuple(symbols[i] for i in order))


def moments_on(parent, child, P, p, rule):
    """Moments in the parent frame from a rule of the absolute fractional parent position and the element."""
    places = child.positions @ np.array(P, dtype=float).T + np.array(p, dtype=float)
    return np.array([rule(x, s) for x, s in zip(places, child.symbols, strict=True)])


def test_hermite_basis_and_its_box():
    basis = hermite_basis(np.array([[4, 2, 0], [2, 4, 2], [0, 6, 3]]))
    assert np.all(np.tril(basis, -1) == 0)
    assert len(box_of(basis)) == abs(round(np.linalg.det([[4, 2, 0], [2, 4, 2], [0, 6, 3]])))
    with pytest.raises(InputError):
        hermite_basis(np.array([[1, 0, 0], [2, 0, 0], [0, 1, 0]]))


def test_primitive_basis_of_a_centred_cell():
    fcc = primitive_basis(np.array([[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]]))
    assert abs(np.linalg.det(fcc)) == pytest.approx(0.25)


@given(st.lists(st.integers(-3, 3), min_size=9, max_size=9), st.integers(0, 1000))
@settings(max_examples=60, deadline=None)
def test_reduced_basis_holds_the_shortest_vectors(entries, seed):
    matrix = np.array(entries).reshape(3, 3)
    if abs(round(np.linalg.det(matrix))) != 1:
        return
    start = np.random.default_rng(seed).uniform(-1, 1, (3, 3)) + 3 * np.eye(3)
    short, steps = reduced_basis(matrix @ start)
    assert abs(round(np.linalg.det(steps))) == 1
    np.testing.assert_allclose(steps @ matrix @ start, short, atol=1e-9)
    grid = np.array([n for n in itertools.product(range(-4, 5), repeat=3) if any(n)])
    lengths = np.sort(np.linalg.norm(grid @ start, axis=1))
    assert np.linalg.norm(short, axis=1)[0] == pytest.approx(lengths[0])
    assert np.linalg.norm(short, axis=1)[1] == pytest.approx(lengths[2])


# By the stated transformation


DOUBLING = ParentTransform(np.diag([1, 1, 2.0]), np.array([0, 0, 0.5]))


def doubled(moments_along=(4.5, 0, 0), parent=DOUBLING, rotation=None):
    """Layers of opposite moments in a cell doubled along c, its origin at z = ½ of the parent."""
    P, p = np.diag([1, 1, 2]), (0, 0, 0.5)
    child = child_of(TETRAGONAL, P, p, rotation=rotation)

    def rule(x, symbol):
        # z = 0.25, 0.75 belong to one pair of layers, 1.25, 1.75 to the next: up, down, down, up.
        sign = (1, -1, -1, 1)[round((x[2] - 0.25) * 2) % 4]
        return np.array(moments_along) * sign * (symbol == "Mn")

    moments = moments_on(TETRAGONAL, child, P, p, rule)
    turned = moments if rotation is None else moments @ np.array(rotation)
    return Ordering(child, turned, name="doubled", parent=parent), moments


def test_the_stated_transformation_is_used_and_carries_positions():
    ordering, moments = doubled(rotation=Rotation.from_euler("xyz", [0.3, 1.0, -0.7]).as_matrix())
    placed = place_in_frame(ordering, TETRAGONAL)
    np.testing.assert_allclose(placed.crystal.cell, np.diag([4.2, 4.2, 13.6]), atol=1e-12)
    np.testing.assert_allclose(placed.components[0].real, moments, atol=1e-12)
    assert placed.reference.crystal is TETRAGONAL
    assert placed.reference.how == "by the parent transformation that its file states (a,b,2c;0,0,1/2)"
    assert placed.notes == ()
    # z = 0.12 of the parent is (0.12 − ½)/2 = 0.81 and 0.31 of the doubled cell.
    np.testing.assert_allclose(placed.reference.carry([0.5, 0.5, 0.12]), [[0.5, 0.5, 0.31], [0.5, 0.5, 0.81]])


def test_the_domains_beside_the_stated_one_can_be_named():
    ordering, _ = doubled()
    assert place_in_frame(ordering, TETRAGONAL, 1).reference.how.startswith("by the parent transformation")
    other = place_in_frame(ordering, TETRAGONAL, 2)
    magnetic = np.abs(other.components[0].real).max(axis=0)
    np.testing.assert_allclose(magnetic, [0, 4.5, 0], atol=1e-12)
    assert other.notes == (
        "domain 2 of 2 (named in the study, 90° from the axes of its file); `domain` in the study names another",
    )
    with pytest.raises(InputError, match=r"^there is no domain 3: the ordering has 2 domains\.$"):
        place_in_frame(ordering, TETRAGONAL, 3)


def test_a_stated_transformation_that_does_not_fit_is_named_and_the_structures_are_matched():
    ordering, _ = doubled(parent=ParentTransform(np.diag([1, 1, 2.0]), np.array([0, 0, 0.25])))
    placed = place_in_frame(ordering, TETRAGONAL)
    assert placed.notes[0].startswith(
        "the parent transformation its file states does not fit [crystal] and is not used: its atom "
    )
    assert placed.notes[0].endswith("of the parent (at most 0.2 Å is taken).")
    assert placed.notes[1] == (
        "domain 1 of 2 (the smallest rotation, 0° from the axes of its file); `domain` in the study names another"
    )
    # The origin may sit on z = 0 or ½ alike: both differ by a turn of the moments about c, or by a translation.
    np.testing.assert_allclose(placed.reference.transform.P, np.diag([1, 1, 2]))


@pytest.mark.parametrize(
    ("P", "p", "message"),
    [
        (np.diag([1, 1, 0.0]), (0, 0, 0), "its matrix has no inverse."),
        (
            np.diag([1, 1, 3.0]),
            (0, 0, 0),
            "its cell differs from that of the parent, so transformed, by 50 % in a length (at most 2 % is taken).",
        ),
        (np.diag([1, 1, -2.0]), (0, 0, 0.5), "it turns a right-handed cell into a left-handed one."),
    ],
)
def test_what_is_wrong_with_a_transformation(P, p, message):
    with pytest.raises(InputError) as caught:
        check_transform(TETRAGONAL, doubled()[0].crystal, P, p)
    assert str(caught.value) == message


# By matching


@given(
    angles=st.tuples(*[st.floats(-3, 3)] * 3),
    p=st.tuples(*[st.floats(0, 1)] * 3),
    P=st.sampled_from(
        [np.eye(3), np.diag([1, 2, 1]), [[1, 0, 1], [0, 1, 1], [-1, 0, 1]], [[0, 0, 1], [1, 0, 0], [0, 1, 0]]]
    ),
    seed=st.integers(0, 100),
)
@settings(max_examples=30, deadline=None)
def test_without_symmetry_the_match_gives_back_the_moments_exactly(angles, p, P, seed):
    rotation = Rotation.from_euler("xyz", angles).as_matrix()
    child = child_of(TRICLINIC, P, p, rotation=rotation, seed=seed)
    moments = np.random.default_rng(seed).normal(size=(child.n_sites, 3))
    placed = place_in_frame(Ordering(child, moments @ rotation), TRICLINIC)
    np.testing.assert_allclose(placed.components[0].real, moments, atol=1e-9)
    np.testing.assert_allclose(placed.crystal.cell, np.array(P).T @ TRICLINIC.cell, atol=1e-9)
    np.testing.assert_allclose(placed.reference.transform.P, P, atol=1e-9)
    shift = placed.reference.transform.p - np.array(p)
    np.testing.assert_allclose(shift, np.round(shift), atol=1e-9)
    assert placed.notes == ()


def test_the_same_cell_and_sites_keep_their_axes():
    moments = np.zeros((7, 3))
    moments[:2] = [[0, 0, 4.0], [0, 0, -4.0]]
    placed = place_in_frame(Ordering(TETRAGONAL, moments), TETRAGONAL)
    np.testing.assert_array_equal(placed.crystal.cell, TETRAGONAL.cell)
    np.testing.assert_array_equal(placed.components[0].real, moments)
    np.testing.assert_array_equal(placed.reference.transform.P, np.eye(3))
    np.testing.assert_array_equal(placed.reference.transform.p, np.zeros(3))


@pytest.mark.parametrize(
    ("up", "down", "count"),
    [
        ((0, 0, 1), (0, 0, 1), 2),  # ferromagnet along c: up and down
        ((1, 0, 0), (1, 0, 0), 4),  # in the plane along an axis: ±a, ±b
        ((1, 0.3, 0), (1, 0.3, 0), 8),  # in the plane, general
        ((1, 0.3, 0.2), (1, 0.3, 0.2), 8),  # general: as many as there are turns in 4/mmm
        ((0, 0, 1), (0, 0, -1), 1),  # antiferromagnet along c: a turn about a exchanges the layers and reverses c
    ],
)
def test_domains_are_counted(up, down, count):
    moments = np.zeros((7, 3))
    moments[:2] = [up, down]
    placed = [place_in_frame(Ordering(TETRAGONAL, moments), TETRAGONAL, n) for n in range(1, count + 1)]
    with pytest.raises(InputError, match=f"there is no domain {count + 1}: the ordering has {count} domain"):
        place_in_frame(Ordering(TETRAGONAL, moments), TETRAGONAL, count + 1)
    notes = place_in_frame(Ordering(TETRAGONAL, moments), TETRAGONAL).notes
    assert [note.split(" (")[0] for note in notes] == ([f"domain 1 of {count}"] if count > 1 else [])
    assert all(ordering.reference is not None for ordering in placed)


def test_primitive_magnetic_cell_on_a_conventional_face_centred_cell():
    """Type II: the cell (2 primitive cells) has its own vectors; moments alternate along [111] in four domains."""
    P = np.array([[1, 0.5, 0.5], [0.5, 1, 0.5], [0.5, 0.5, 1]])
    turn = Rotation.from_euler("zyx", [0.4, -0.2, 0.1]).as_matrix()
    child = child_of(FCC, P, rotation=turn)
    axis = np.array([1, -1, 0]) / 2**0.5

    def rule(x, symbol):
        return axis * (-1.0) ** round(float(x.sum())) * (symbol == "Mn")

    moments = moments_on(FCC, child, P, (0, 0, 0), rule)
    ordering = Ordering(child, moments @ turn)
    found = [place_in_frame(ordering, FCC, n) for n in range(1, 13)]
    # 4 stacks times 3 directions in the plane; opposite moments are translations of one another.
    with pytest.raises(InputError, match="the ordering has 12 domains"):
        place_in_frame(ordering, FCC, 13)
    for placed in found:
        transform = placed.reference.transform
        places = placed.crystal.positions @ transform.P.T + transform.p
        values = placed.components[0].real
        magnetic = np.abs(values).max(axis=1) > 0.5
        signs = np.sign(values[magnetic] @ values[magnetic][0])
        stacks = [
            normal
            for normal in ((1, 1, 1), (-1, 1, 1), (1, -1, 1), (1, 1, -1))
            if np.all(signs * signs[0] == (-1.0) ** np.round((places[magnetic] - places[magnetic][0]) @ normal))
            and np.all(np.round(normal @ transform.P) % 2 == 0)
        ]
        assert len(stacks) == 1
        np.testing.assert_allclose(values @ np.array(stacks[0]), 0, atol=1e-9)


def test_hexagonal_to_orthohexagonal():
    P = np.array([[1, 1, 0], [0, 2, 0], [0, 0, 1]])  # a, a + 2b, c
    p = (0, 0, 0.5)
    child = child_of(HEXAGONAL, P, p)
    rows = {"up": np.array([0, 0, 2.0])}

    def rule(x, symbol):
        # Ni at x = n1 a + n2 b: stripes along a, alternating along b.
        return rows["up"] * (-1.0) ** round(float(x[1])) * (symbol == "Ni")

    ordering = Ordering(child, moments_on(HEXAGONAL, child, P, p, rule))
    placed = place_in_frame(ordering, HEXAGONAL)
    assert "domain 1 of 3 (the smallest rotation, 0°" in placed.notes[-1]
    np.testing.assert_allclose(placed.reference.transform.P, P)
    parent = ParentTransform(P.astype(float), np.array(p))
    stated = place_in_frame(dataclasses.replace(ordering, parent=parent), HEXAGONAL)
    assert stated.reference.how == "by the parent transformation that its file states (a,a+2b,c;0,0,1/2)"
    # (1/3, 2/3, 0.1): solving x = u + v, y = 2v gives v = 1/3, u = 0, z = 0.1 − ½; then v + ½ and u ± ½ for the next b.
    carried = stated.reference.carry([1 / 3, 2 / 3, 0.1])
    np.testing.assert_allclose(carried, [[0, 1 / 3, 0.6], [0.5, 5 / 6, 0.6]], atol=1e-12)


def test_a_small_strain_is_taken_and_told():
    child = child_of(TRICLINIC, np.eye(3), stretch=np.diag([1.01, 1, 1]))
    placed = place_in_frame(Ordering(child, np.ones((4, 3))), TRICLINIC)
    np.testing.assert_allclose(placed.crystal.cell @ placed.crystal.cell.T, child.cell @ child.cell.T, atol=1e-12)
    assert placed.notes == ("its cell differs from that of [crystal] by up to 0.99 % in a length and is kept",)


def test_a_pseudo_cubic_child_is_not_laid_across():
    """A cell 1 % longer along a fits an orthorhombic parent in one way, though others are within the tolerance."""
    parent = Crystal(np.diag([5.0, 5.05, 4.96]), [[0, 0, 0], [0.5, 0.5, 0.5]], ("Cs", "Cl"))
    child = child_of(parent, [[0, 0, 1], [1, 0, 0], [0, 1, 0]])
    moments = np.zeros((2, 3))
    moments[[s == "Cs" for s in child.symbols]] = [1, 0, 0]
    placed = place_in_frame(Ordering(child, moments), parent)
    np.testing.assert_allclose(np.abs(placed.reference.transform.P), [[0, 0, 1], [1, 0, 0], [0, 1, 0]])


def test_a_file_with_magnetic_atoms_alone_is_placed_where_symmetry_leaves_no_question():
    child = child_of(TETRAGONAL, np.eye(3), keep=("Mn", "O"))
    moments = np.array([[0, 0, 1.0] if s == "Mn" else [0, 0, 0] for s in child.symbols])
    placed = place_in_frame(Ordering(child, moments), TETRAGONAL)
    assert "domain 1 of 2" in placed.notes[-1]


def test_a_bare_sublattice_that_fits_in_unrelated_ways_is_refused():
    """Cubic Mn in a tetragonal compound: c of the file may be any of its three axes."""
    parent = Crystal(np.eye(3) * 4.0, [[0, 0, 0], [0.5, 0.5, 0]], ("Mn", "F"))
    bare = Ordering(Crystal(np.eye(3) * 4.0, [[0, 0, 0]], ("Mn",)), [[0, 0, 1.0]])
    with pytest.raises(InputError) as caught:
        place_in_frame(bare, parent)
    assert str(caught.value) == (
        "the file lists only Mn, which can be placed in [crystal] in 6 ways that its symmetry does not relate. List "
        "all atoms in the file, or name a placement: domain = 1 to 6."
    )
    np.testing.assert_allclose(place_in_frame(bare, parent, 1).components[0].real, [[0, 0, 1]])


def replaced(crystal, **changes):
    return dataclasses.replace(crystal, **changes)


@pytest.mark.parametrize(
    ("child", "message"),
    [
        (replaced(TETRAGONAL, symbols=("Fe", *TETRAGONAL.symbols[1:])), "it has Fe, which the parent has not."),
        (
            replaced(TETRAGONAL, cell=np.diag([4.2, 4.5, 6.8])),
            "no lattice vectors of the parent have the lengths 4.2, 4.5, 6.8 Å and the angles of its cell within 2 %.",
        ),
        (
            Crystal(TETRAGONAL.cell, TETRAGONAL.positions[1:], TETRAGONAL.symbols[1:]),
            "its cell holds 1 Mn where the same volume of the parent holds 2.",
        ),
        (
            replaced(TETRAGONAL, positions=[*TETRAGONAL.positions[:6], [0, 0.5, 0.6]]),
            "its atom 7 (O1) lies 0.874 Å from the nearest O of the parent (at most 0.2 Å is taken).",
        ),
        (
            replaced(TETRAGONAL, pbc=(True, True, False)),
            "its periodic directions (True, True, False) are not those of the parent, (True, True, True).",
        ),
    ],
)
def test_what_does_not_match_is_refused(child, message):
    with pytest.raises(InputError) as caught:
        place_in_frame(Ordering(child, np.ones((child.n_sites, 3))), TETRAGONAL)
    start = "the structure of this ordering does not match that of [crystal], its parent: "
    assert str(caught.value) == start + message


def test_layers_match_in_the_same_cell_alone():
    layer = replaced(TETRAGONAL, pbc=(True, True, False))
    placed = place_in_frame(Ordering(layer, np.ones((7, 3))), layer)
    np.testing.assert_array_equal(placed.reference.transform.P, np.eye(3))
    with pytest.raises(InputError, match="are matched only in the same cell"):
        match_structures(layer, replaced(layer, cell=np.diag([4.2, 4.2, 9.0])))


def test_an_ordering_with_a_wave_vector_of_its_own():
    """k of the file is that of its own cell: a cell with permuted axes has its k permuted with them."""
    P = [[0, 0, 1], [1, 0, 0], [0, 1, 0]]
    child = child_of(TRICLINIC, P)
    components = np.zeros((4, 3), dtype=complex)
    components[[s == "Fe" for s in child.symbols]] = [1, 1j, 0]
    placed = place_in_frame(Ordering(child, components, (0.2, 0, 0)), TRICLINIC)
    np.testing.assert_allclose(placed.components[0], components, atol=1e-12)
    np.testing.assert_array_equal(placed.k, [[0.2, 0, 0]])


def test_transformations_in_words():
    P = np.array([[0.5, 1, 0], [-0.5, 0, 1 / 3], [0, -1, 2]])
    assert transform_words(P, np.array([0, 1 / 3, 0.1234567])) == "1/2a-1/2b,a-c,1/3b+2c;0,1/3,0.12346"
