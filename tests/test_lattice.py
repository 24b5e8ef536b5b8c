"""Reduction of a basis: shortest vectors, whole-number steps, and no digit lost on the way."""

from __future__ import annotations

import itertools
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from latticedip.errors import AccuracyError
from latticedip.sums.lattice import reduce_cell, reduce_k, stable_inverse
from tests.reference.cells import random_cell, random_rotation
from tests.reference.mpmath_sum import points_within

COMBINATIONS = np.array([c for c in itertools.product((-1, 0, 1), repeat=3) if any(c)])


def exact(rows: np.ndarray) -> list[list[Fraction]]:
    return [[Fraction(float(x)) for x in row] for row in rows]


def exact_determinant(steps: np.ndarray) -> int:
    a = [[int(x) for x in row] for row in steps]
    return (
        a[0][0] * (a[1][1] * a[2][2] - a[1][2] * a[2][1])
        - a[0][1] * (a[1][0] * a[2][2] - a[1][2] * a[2][0])
        + a[0][2] * (a[1][0] * a[2][1] - a[1][1] * a[2][0])
    )


def unimodular(rng: np.random.Generator, largest: int) -> np.ndarray:
    matrix = np.eye(3, dtype=int)
    for _ in range(12):
        i, j = rng.permutation(3)[:2]
        step = np.eye(3, dtype=int)
        step[i, j] = rng.integers(-4, 5)
        if np.abs(step @ matrix).max() <= largest:
            matrix = step @ matrix
    return matrix


def check(cell: np.ndarray) -> np.ndarray:
    lattice = reduce_cell(cell)
    assert abs(exact_determinant(lattice.steps)) == 1
    assert np.array_equal(lattice.steps, np.round(lattice.steps))
    # Each element is the exact product rounded once.
    given = exact(cell)
    for row, found in zip(lattice.steps, lattice.cell, strict=True):
        for c in range(3):
            assert found[c] == float(sum(int(step) * given[i][c] for i, step in enumerate(row)))
    assert np.linalg.det(lattice.cell) > 0
    lengths = np.linalg.norm(lattice.cell, axis=1)
    assert np.all(np.diff(lengths) >= -1e-9 * lengths[1:])
    # Minkowski: no combination with coefficients −1, 0, 1 is shorter than its longest member.
    for combination in COMBINATIONS:
        longest = lengths[np.flatnonzero(combination).max()]
        assert np.linalg.norm(combination @ lattice.cell) >= longest * (1 - 1e-9)
    # The first is the shortest of all vectors of the lattice.
    whole = points_within(lattice.cell, np.zeros(3), lengths[0] * 1.1)
    whole = whole[np.any(whole != 0, axis=1)]
    assert np.linalg.norm(whole @ lattice.cell, axis=1).min() >= lengths[0] * (1 - 1e-9)
    return lattice.steps


@pytest.mark.parametrize("seed", range(40))
def test_random_cells(seed):
    check(random_cell(np.random.default_rng(seed)))


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10**6))
def test_badly_chosen_cells_of_one_lattice(seed):
    rng = np.random.default_rng(seed)
    base = rng.uniform(2, 12, (3, 1)) * random_rotation(rng) + rng.normal(size=(3, 3)) * 0.3
    lattice = reduce_cell(base)
    other = reduce_cell(unimodular(rng, 2000) @ base)
    lengths = [np.sort(np.linalg.norm(one.cell, axis=1)) for one in (lattice, other)]
    assert np.allclose(*lengths, rtol=1e-9)
    assert other.volume == pytest.approx(lattice.volume, rel=1e-9)
    check(unimodular(rng, 200) @ base)


@pytest.mark.parametrize(
    "cell",
    [
        4 * np.eye(3),
        [[0, 2, 2], [2, 0, 2], [2, 2, 0]],
        [[-2, 2, 2], [2, -2, 2], [2, 2, -2]],
        [[3, 0, 0], [-1.5, 1.5 * 3**0.5, 0], [0, 0, 7]],
        [[3, 0, 0], [1.5, 1.5 * 3**0.5, 0], [0, 0, -7]],
        [[5, 0, 0], [500, 5, 0], [0, 0, 5]],
        [[1, 0, 0], [0, 100, 0], [0.5, 50, 100]],
    ],
)
def test_cells_with_ties_and_extremes(cell):
    check(np.array(cell, dtype=float))


def test_a_reduced_cell_is_left_alone():
    cell = np.diag([3.0, 4.0, 5.0])
    lattice = reduce_cell(cell)
    assert np.array_equal(lattice.cell, cell) and np.array_equal(lattice.steps, np.eye(3))
    assert np.allclose(lattice.layer_distances, [3, 4, 5]) and lattice.volume == 60
    assert np.allclose(lattice.waves @ cell.T, 2 * np.pi * np.eye(3))


def test_layer_distances_multiply_to_the_volume():
    for seed in range(10):
        lattice = reduce_cell(random_cell(np.random.default_rng(seed)))
        assert np.prod(lattice.layer_distances) == pytest.approx(lattice.volume, rel=1e-12)
        assert lattice.layer_distances[0] == pytest.approx(np.linalg.norm(lattice.cell[0]))


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10**6))
def test_wave_vectors_follow_exactly(seed):
    rng = np.random.default_rng(seed)
    steps = unimodular(rng, 10**6).astype(float)
    k = rng.choice([0.0, 0.5, 0.25, 1 / 3, 1e-9, 0.1]) + rng.integers(-3, 4, 3) * rng.choice([0.0, 1.0, 1e-4])
    found = reduce_k(steps, k)
    assert np.all(np.abs(found) <= 0.5)
    for row, value in zip(steps, found, strict=True):
        turn = sum(int(step) * Fraction(float(x)) for step, x in zip(row, k, strict=True))
        gap = turn - Fraction(float(value))
        assert abs(gap - round(gap)) < Fraction(1, 2**54)


def test_inverse_keeps_relative_accuracy():
    cell = np.array([[1e-2, 3e-3, 0], [100, 5000, 10], [2e5, 1e4, 9e5]])
    columns = exact(cell)
    found = stable_inverse(cell)
    for i in range(3):
        for j in range(3):
            value = sum(columns[i][c] * Fraction(float(found[c, j])) for c in range(3))
            size = sum(abs(columns[i][c] * Fraction(float(found[c, j]))) for c in range(3))
            assert abs(value - (i == j)) < Fraction(1, 10**14) * size


def test_cells_that_are_no_structure():
    with pytest.raises(AccuracyError) as caught:
        reduce_cell(np.array([[5.0, 0, 0], [5e7, 5, 0], [0, 0, 5]]))
    assert str(caught.value) == (
        "the cell [[5.0, 0.0, 0.0], [50000000.0, 5.0, 0.0], [0.0, 0.0, 5.0]] is too skewed: its vectors are almost "
        "dependent."
    )
