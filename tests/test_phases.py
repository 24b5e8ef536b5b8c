"""Which phases the waves of an ordering take: relations between propagation vectors found and counted."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from latticedip.ordering.phases import nearly_commensurate, phase_space

#: Two irrational numbers without a relation between them, 1 and each other.
P, Q = np.sqrt(2) - 1, np.sqrt(3) - 1


@pytest.mark.parametrize(
    ("k", "listed", "n_free"),
    [
        ([[0, 0, 0.5]], 2, 0),
        ([[1 / 3, 0, 0.5]], 6, 0),
        ([[0.25, 0, 0], [0.5, 0.5, 0]], 8, 0),
        ([[0.213, 0, 0]], 1, 1),
        ([[P, 0, 0.5]], 1, 1),
        # The third harmonic follows its fundamental.
        ([[P, 0, 0], [3 * P, 0, 0]], 1, 1),
        ([[P, 0, 0], [0, P, 0]], 1, 2),
        ([[P, P, 0], [P, -P, 0]], 1, 2),
        ([[P, 0, 0], [0.5, 0, 0]], 2, 1),
        ([[P, 0, 0], [P + 0.5, 0, 0]], 2, 1),
        ([[P, Q, 0], [Q, P, 0], [P, 0, 0]], 1, 3),
    ],
)
def test_phases_that_occur_are_counted(k, listed, n_free):
    space = phase_space(np.array(k, dtype=float))
    assert (len(space.listed), space.n_free, space.complete) == (listed, n_free, True)


def test_every_cell_shows_a_phase_that_is_listed_and_no_other_phase_is():
    for k in ([[P, 0, 0], [P + 0.5, 0, 0], [2 * P, 0, 1 / 3]], [[0.25, 0, 0], [0.5, 0.5, 0]]):
        k = np.array(k)
        space = phase_space(k)
        rng = np.random.default_rng(3)
        for cell in rng.integers(-50, 50, (40, 3)):
            assert space.holds((k @ cell) % 1.0)
        wrong = sum(space.holds(rng.random(len(k)), 1e-3) for _ in range(200))
        assert wrong <= 5


@settings(max_examples=30, deadline=None)
@given(st.integers(1, 24), st.integers(0, 23), st.integers(0, 23))
def test_one_rational_vector_takes_as_many_phases_as_its_order(n, i, j):
    """The order of (i/n, j/n, 1/n) modulo whole numbers is n."""
    space = phase_space(np.array([[i / n, j / n, 1 / n]]))
    assert len(space.listed) == n
    assert np.sort(space.listed[:, 0]) == pytest.approx(np.arange(n) / n, abs=1e-12)


def test_harmonics_turn_as_many_times_as_their_order():
    space = phase_space(np.array([[P, 0, 0], [2 * P, 0, 0], [3 * P, 0, 0]]))
    assert np.abs(space.free).tolist() == [[1, 2, 3]]
    assert np.all(np.sign(space.free) == np.sign(space.free[0, 0]))


def test_very_many_incommensurate_vectors_are_sampled():
    space = phase_space(np.random.default_rng(0).random((9, 3)), samples=64)
    assert (space.complete, space.listed.shape) == (False, (64, 9))
    assert space.holds(np.random.default_rng(1).random(9))


def test_coordinates_near_a_simple_fraction_are_named():
    assert nearly_commensurate(np.array([[0.333, 0.5, 0.2505]])) == [(0.333, "1/3"), (0.2505, "1/4")]
    assert nearly_commensurate(np.array([[1 / 3, 0.213, 0.0]])) == []
