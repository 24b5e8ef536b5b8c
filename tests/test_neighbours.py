"""Neighbours against a plain search over many cells."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.crystal.neighbours import close_pairs, image_shifts, neighbours_of
from latticedip.errors import LimitError

STEPS = np.array(list(itertools.product(range(-9, 10), repeat=3)))
CELLS = {
    "cubic": 4 * np.eye(3),
    "triclinic": np.array([[4.0, 0, 0], [1.6, 4.2, 0], [-1.2, 1.9, 4.4]]),
    "skewed": np.array([[4.0, 0, 0], [7.0, 3.5, 0], [3.0, -2, 4]]),
    "left-handed": np.array([[0, 4.0, 0], [3.8, 0.5, 0], [0.3, 0.2, 5]]),
}


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from(sorted(CELLS)),
    st.lists(st.floats(-3, 3), min_size=9, max_size=9),
    st.lists(st.floats(-2, 2), min_size=3, max_size=3),
    st.floats(0.5, 8),
    st.tuples(st.booleans(), st.booleans(), st.booleans()),
)
def test_neighbours_of_a_point(name, places, point, radius, pbc):
    places, point, cell = np.reshape(places, (3, 3)), np.array(point), CELLS[name]
    try:
        crystal = ld.Crystal(cell, places, ["Mn", "Fe", "Mn"], pbc=pbc)
    except ld.LatticedipError:
        return
    sites, cells, vectors = neighbours_of(crystal, point, radius, (0, 2))
    steps = STEPS[np.all((STEPS == 0) | np.array(pbc), axis=1)]
    expected = set()
    borderline = set()
    for j in (0, 2):
        distance = np.linalg.norm((point - places[j] - steps) @ cell, axis=1)
        expected |= {(j, *steps[i]) for i in np.flatnonzero(distance <= radius)}
        borderline |= {(j, *steps[i]) for i in np.flatnonzero(np.abs(distance - radius) < 1e-9)}
    found = {(int(j), *map(int, c)) for j, c in zip(sites, cells, strict=True)}
    assert len(found) == len(sites) and found ^ expected <= borderline
    assert np.allclose(vectors, (point - places[sites] - cells) @ cell, atol=1e-9)
    assert np.all(np.diff(np.linalg.norm(vectors, axis=1)) >= 0)


@pytest.mark.parametrize("name", CELLS)
def test_pairs(name):
    rng = np.random.default_rng(3)
    places = np.array([[0.1, 0.1, 0.1], [1.6, -0.4, 0.6], [0.2, 0.7, 2.3]]) + rng.uniform(0, 0.05, (3, 3))
    crystal = ld.Crystal(CELLS[name], places, ["Mn"] * 3)
    radius = 6.5
    expected = []
    for i, j in itertools.combinations_with_replacement(range(3), 2):
        distance = np.linalg.norm((places[i] - places[j] - STEPS) @ CELLS[name], axis=1)
        near = distance[(distance <= radius) & (distance > 1e-9)]
        expected += [(i, j, round(float(d), 9)) for d in near]
    assert sorted((i, j, round(d, 9)) for i, j, d in close_pairs(crystal, radius)) == sorted(expected)


def test_only_periodic_directions_repeat():
    chain = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"], pbc=(False, False, True))
    assert np.array_equal(np.unique(image_shifts(chain, 9.0)[:, :2]), [0])
    assert [d for _, _, d in close_pairs(chain, 4.1)] == [4.0, 4.0]
    # Outside the cell along a direction that does not repeat, the atom is where it is.
    sites, cells, vectors = neighbours_of(chain, np.array([1.0, 0, 0.1]), 4.1)
    assert len(sites) == 1 and np.array_equal(cells, [[0, 0, 0]]) and np.allclose(vectors, [[4.0, 0, 0.4]])


def test_too_many_images():
    crystal = ld.Crystal(3 * np.eye(3), [[0, 0, 0]], ["Mn"])
    with pytest.raises(LimitError) as caught:
        image_shifts(crystal, 1000.0)
    assert str(caught.value) == (
        "neighbours within 1000 Å would need 2.99e+08 images of atoms in the cell [[3.0, 0.0, 0.0], [0.0, 3.0, 0.0], "
        "[0.0, 0.0, 3.0]], more than 20000000. Use a less skewed cell or a smaller radius."
    )
