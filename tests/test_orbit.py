"""Orbits of a position under the non-magnetic space group."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.crystal.symmetry import operations_of
from latticedip.errors import InputError

FCC = [[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]]
BCC = [[0, 0, 0], [0.5, 0.5, 0.5]]
HEXAGONAL = np.array([[3.2, 0, 0], [-1.6, 1.6 * np.sqrt(3), 0], [0, 0, 5.2]])


def crystal(name: str) -> ld.Crystal:
    if name == "fcc":
        return ld.Crystal(3.6 * np.eye(3), FCC, ["Ni"] * 4)
    if name == "bcc":
        return ld.Crystal(2.87 * np.eye(3), BCC, ["Fe"] * 2)
    if name == "hcp":
        return ld.Crystal(HEXAGONAL, [[1 / 3, 2 / 3, 0.25], [2 / 3, 1 / 3, 0.75]], ["Co"] * 2)
    if name == "rutile":
        u = 0.305
        sites = [[0, 0, 0], [0.5, 0.5, 0.5], [u, u, 0], [-u, -u, 0], [0.5 + u, 0.5 - u, 0.5], [0.5 - u, 0.5 + u, 0.5]]
        return ld.Crystal(np.diag([4.87, 4.87, 3.31]), sites, ["Mn"] * 2 + ["F"] * 4)
    assert name == "triclinic"
    cell = [[4.0, 0, 0], [0.7, 5.0, 0], [0.3, 0.9, 6.0]]
    return ld.Crystal(cell, [[0.1, 0.2, 0.3], [0.5, 0.55, 0.8], [0.8, 0.31, 0.47]], ["Mn", "O", "F"])


@pytest.mark.parametrize(
    ("name", "position", "multiplicity"),
    [
        # Multiplicities of Wyckoff positions, International Tables A: Fm-3m, Im-3m, P6_3/mmc, P4_2/mnm, P1.
        ("fcc", (0, 0, 0), 4),
        ("fcc", (0.5, 0.5, 0.5), 4),
        ("fcc", (0.25, 0.25, 0.25), 8),
        ("fcc", (0.25, 0.25, 0), 24),
        ("fcc", (0.1, 0.1, 0.1), 32),
        ("fcc", (0.1, 0.2, 0.33), 192),
        ("bcc", (0.5, 0.5, 0), 6),
        ("bcc", (0.5, 0.25, 0), 12),
        ("bcc", (0.07, 0.19, 0.33), 96),
        ("hcp", (0, 0, 0), 2),
        ("hcp", (2 / 3, 1 / 3, 0.25), 2),
        ("hcp", (1 / 3, 2 / 3, 0.6), 4),
        ("hcp", (0.11, 0.42, 0.07), 24),
        ("rutile", (0, 0.5, 0), 4),
        ("rutile", (0.305, 0.305, 0), 4),
        ("rutile", (0.1, 0.27, 0.4), 16),
        ("triclinic", (0.1, 0.27, 0.4), 1),
    ],
)
def test_multiplicities(name, position, multiplicity):
    found = ld.orbit(crystal(name), position)
    assert found.shape == (multiplicity, 3)
    assert found.min() >= 0
    assert found.max() < 1
    gap = found - np.asarray(position) % 1.0
    assert np.abs(gap - np.round(gap)).max(axis=1).min() == 0


def test_octahedral_sites_in_order():
    assert ld.orbit(crystal("bcc"), (0.5, 0.5, 0)) == pytest.approx(
        np.array([[0, 0, 0.5], [0, 0.5, 0], [0, 0.5, 0.5], [0.5, 0, 0], [0.5, 0, 0.5], [0.5, 0.5, 0]]), abs=1e-12
    )


@pytest.mark.parametrize("digits", [3, 4, 5, 8])
def test_thirds_typed_with_few_digits_are_one_position(digits):
    typed = (round(1 / 3, digits), round(2 / 3, digits), 0.6)
    found = ld.orbit(crystal("hcp"), typed)
    assert len(found) == 4
    assert typed in [tuple(row) for row in found.tolist()]


@pytest.mark.parametrize("offset_A", [0.001, 0.004, 0.006, 0.008, 0.02, 0.05])
def test_a_position_close_to_a_mirror_is_reached_evenly(offset_A):
    """Whether images near a symmetry element are joined or not, the multiplicity divides the number of operations."""
    fcc = crystal("fcc")
    for step in ([1, 0.3, 0.1], [1, 0, 0], [1, 1, 0.2]):
        position = np.array([0.25, 0.25, 0.25]) + offset_A / 3.6 * np.array(step)
        assert 192 % len(ld.orbit(fcc, position)) == 0


@settings(max_examples=25, deadline=None)
@given(
    name=st.sampled_from(["fcc", "bcc", "hcp", "rutile"]),
    position=st.tuples(*[st.integers(-40, 40)] * 3),
)
def test_an_orbit_is_closed_and_the_same_from_each_of_its_points(name, position):
    of = crystal(name)
    found = ld.orbit(of, np.array(position) / 24)
    operations = operations_of(of)
    assert len(operations.rotations) % len(found) == 0
    for point in found[:: max(1, len(found) // 4)]:
        again = ld.orbit(of, point)
        assert again == pytest.approx(found, abs=1e-6)


def test_a_supercell_holds_the_orbit_once_per_cell():
    small = crystal("rutile")
    big = ld.Crystal.from_ase(small.to_ase().repeat((2, 1, 1)))
    assert len(ld.orbit(big, (0.05, 0.27, 0.4))) == 2 * len(ld.orbit(small, (0.1, 0.27, 0.4)))


def test_operations_stated_by_a_file_win():
    from latticedip.crystal.model import Operations

    inversion = Operations([np.eye(3, dtype=int), -np.eye(3, dtype=int)], np.zeros((2, 3)))
    stated = ld.Crystal(3.6 * np.eye(3), FCC, ["Ni"] * 4, operations=inversion)
    assert ld.orbit(stated, (0.1, 0.2, 0.3)) == pytest.approx(np.array([[0.1, 0.2, 0.3], [0.9, 0.8, 0.7]]))


def test_without_three_periodic_directions_a_position_stands_for_itself():
    layer = ld.Crystal(3.6 * np.eye(3), FCC[:1], ["Ni"], pbc=(True, True, False))
    assert ld.orbit(layer, (1.25, -0.25, 1.5)) == pytest.approx(np.array([[0.25, 0.75, 1.5]]))


def test_a_tiny_negative_coordinate_is_zero():
    assert ld.orbit(crystal("triclinic"), (-1e-17, 0.5, 0.0)).tolist() == [[0.0, 0.5, 0.0]]


def test_bad_positions():
    with pytest.raises(InputError) as caught:
        ld.orbit(crystal("fcc"), (0.1, 0.2))
    assert str(caught.value) == "position must have shape (3), got (2,)."
    with pytest.raises(InputError) as caught:
        ld.orbit(crystal("fcc"), (0.1, float("nan"), 0.2))
    assert str(caught.value) == "position holds a value that is not finite: nan at index (1,)."
