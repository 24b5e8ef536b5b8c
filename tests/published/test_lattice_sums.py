"""The Lorentz field of cubic lattices and metals.

Lorentz, The Theory of Electrons (1909); Kittel, Introduction to Solid State Physics, ch. 16: at the points of a cubic
lattice the sphere sum vanishes, so the N = 0 field is µ0 M/3. From memory.
"""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from tests.published.helpers import CENTRINGS, CUBIC, ordering, reduced_field

A = 4.1


@pytest.mark.parametrize("lattice", CUBIC)
@pytest.mark.parametrize("primitive", [True, False])
def test_sphere_sum_vanishes_at_cubic_sites(lattice, primitive):
    vectors, per_cube = CUBIC[lattice]
    cell, sites = (A * vectors, np.zeros((1, 3))) if primitive else (A * np.eye(3), CENTRINGS[lattice])
    moment = np.array([0.3, -0.5, 0.8])
    field = ld.local_field(ordering(cell, sites, moment), sites)
    assert np.abs(field.dipolar).max() < 1e-10
    assert reduced_field(field.lorentz, A) == pytest.approx(
        np.tile(4 * np.pi / 3 * per_cube * moment, (len(sites), 1)), rel=1e-9
    )


@pytest.mark.parametrize(
    ("lattice", "a", "moment", "magnetization_T", "lorentz_T", "printed"),
    [
        # Schenck, Muon Spin Rotation Spectroscopy (1985), ch. 4: about 0.73 T in iron, 0.22 T in nickel; from memory.
        # The four-digit values follow from moment and lattice constant.
        ("bcc", 2.8665, 2.22, 2.1969, 0.7323, 0.73),
        ("fcc", 3.5238, 0.616, 0.6564, 0.2188, 0.22),
    ],
)
def test_lorentz_field_of_iron_and_nickel(lattice, a, moment, magnetization_T, lorentz_T, printed):
    found = ld.local_field(
        ordering(a * np.eye(3), CENTRINGS[lattice], [0, 0, moment]),
        [[0.5, 0.5, 0.0]] if lattice == "bcc" else [[0.5, 0.5, 0.5]],
    )
    assert found.lorentz[0] == pytest.approx([0, 0, lorentz_T], abs=5e-5)
    assert 3 * found.lorentz[0, 2] == pytest.approx(magnetization_T, abs=1.5e-4)
    assert round(found.lorentz[0, 2], 2) == printed


def test_sphere_sample_cancels_the_lorentz_field():
    """In a sphere the demagnetizing field is −µ0 M/3, so a cubic site feels nothing (Lorentz 1909)."""
    cell = A * np.eye(3)
    found = ld.local_field(ordering(cell, CENTRINGS["fcc"], [0, 0, 2.0]), [[0, 0, 0]], sample=ld.Sample.sphere())
    assert np.abs(found.total).max() < 1e-10
