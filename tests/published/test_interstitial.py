"""Dipolar fields at the interstitial sites of cubic and hexagonal metals, sphere sums.

Fields in iron: µSR reviews by Schenck, Muon Spin Rotation Spectroscopy (1985), and Seeger, in Hydrogen in Metals I
(1978): ±0.26/0.52 T tetrahedral, 1.86/0.93 T octahedral; from memory. Reduced tensors recomputed by Ewald and planewise
sums; b in units of µ0µ/(4πa³).
"""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from tests.published.helpers import CENTRINGS, ordering, reduced_field

A = 3.3


def sphere_tensor(lattice: str, point) -> np.ndarray:
    columns = [
        reduced_field(ld.local_field(ordering(A * np.eye(3), CENTRINGS[lattice], m), [point]).dipolar[0], A)
        for m in np.eye(3)
    ]
    return np.array(columns).T


@pytest.mark.parametrize(
    ("lattice", "point", "diagonal"),
    [
        ("bcc", (0.5, 0.5, 0.0), (-10.70715474, -10.70715474, 21.41430947)),
        ("bcc", (0.0, 0.0, 0.5), (-10.70715474, -10.70715474, 21.41430947)),
        ("bcc", (0.5, 0.25, 0.0), (3.03634525, -6.07269050, 3.03634525)),
        ("bcc", (0.5, 0.0, 0.25), (3.03634525, 3.03634525, -6.07269050)),
        ("fcc", (0.5, 0.5, 0.5), (0, 0, 0)),
        ("fcc", (0.25, 0.25, 0.25), (0, 0, 0)),
    ],
)
def test_reduced_tensor(lattice, point, diagonal):
    assert sphere_tensor(lattice, point) == pytest.approx(np.diag(diagonal), abs=6e-9)


@pytest.mark.parametrize(
    ("points", "field_T", "printed"),
    [
        ([(0.5, 0.25, 0), (0.25, 0.5, 0), (0.5, 0, 0.25)], (0.263, 0.263, -0.526), (0.52, 0.26)),
        ([(0.5, 0.5, 0), (0.5, 0, 0), (0, 0.5, 0)], (1.856, -0.928, -0.928), (1.86, 0.93)),
    ],
)
def test_iron(points, field_T, printed):
    """bcc Fe, 2.2 µB along [001], a = 2.866 Å: a third of the sites feel twice the opposite of the other two thirds."""
    iron = ordering(2.866 * np.eye(3), CENTRINGS["bcc"], [0, 0, 2.2])
    found = ld.local_field(iron, points).dipolar
    assert found[:, 2] == pytest.approx(field_T, abs=5e-4)
    assert np.abs(found[:, :2]).max() < 1e-10
    for value in np.abs(found[:, 2]):
        assert min(abs(value - p) for p in printed) < 0.008


def test_ideal_hexagonal_close_packing_does_not_vanish_at_its_sites():
    """c/a = √(8/3): b_z = +0.00676132, b_x = −0.00338066 at a lattice site (recomputed; a sharp test of precision)."""
    cell = A * np.array([[1, 0, 0], [-0.5, np.sqrt(0.75), 0], [0, 0, np.sqrt(8 / 3)]])
    sites = np.array([[1 / 3, 2 / 3, 0.25], [2 / 3, 1 / 3, 0.75]])
    along_c = ld.local_field(ordering(cell, sites, [0, 0, 1]), sites).dipolar
    along_a = ld.local_field(ordering(cell, sites, [1, 0, 0]), sites).dipolar
    assert reduced_field(along_c, A) == pytest.approx(np.tile([0, 0, 0.00676132], (2, 1)), abs=6e-9)
    assert reduced_field(along_a, A) == pytest.approx(np.tile([-0.00338066, 0, 0], (2, 1)), abs=6e-9)
