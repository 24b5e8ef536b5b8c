"""How far orderings stand above the lowest dipolar mode."""

from __future__ import annotations

import numpy as np
import pytest

from latticedip import Crystal, Ordering, Sample, dipolar_energy
from latticedip.analysis.bounds import Bound
from latticedip.units import DIPOLE_EV_A3_PER_MUB2

CUBE = Crystal(4.0 * np.eye(3), [(0, 0, 0)], ("Mn",))
UNIT = DIPOLE_EV_A3_PER_MUB2 * 4 / 64
#: Luttinger and Tisza, Phys. Rev. 70, 954 (1946): the lowest energy of a simple cubic array.
RODS = -2.6767886844


def test_the_rods_reach_it() -> None:
    bound = Bound(CUBE, {"Mn": 2.0})
    rods = Ordering(CUBE, [[0, 0, 2]], (0.5, 0.5, 0))
    above = bound.above(rods, dipolar_energy(rods))
    assert above is not None
    assert above.scale == pytest.approx(1.0)
    assert above.bound_eV == pytest.approx(RODS * UNIT, rel=1e-9)
    assert abs(above.above_eV) < 1e-12 * UNIT + 2e-14
    up = Ordering(CUBE, [[0, 0, 2]])
    above = bound.above(up, dipolar_energy(up, sample=Sample(applied_T=(0, 0, 5))))
    assert above is not None
    # The energy in the field is left out on both sides.
    assert above.above_eV == pytest.approx((2 * np.pi * -1 / 3 - RODS) * UNIT, rel=1e-8)


def test_it_scales_with_the_mean_square_moment() -> None:
    bound = Bound(CUBE, {"Mn": 2.0})
    wave = Ordering(CUBE, [[0, 0, 1.4]], (0.21, 0.4, 0.3))
    above = bound.above(wave, dipolar_energy(wave))
    assert above is not None
    assert above.scale == pytest.approx(0.5 * 0.49)
    assert above.bound_eV == pytest.approx(0.5 * 0.49 * RODS * UNIT, rel=1e-9)
    assert above.above_eV > 0


@pytest.mark.parametrize("seed", range(6))
def test_nothing_lies_below(seed: int) -> None:
    rng = np.random.default_rng(seed)
    crystal = Crystal(np.diag([5.0, 6.0, 7.0]), rng.random((3, 3)), ("Mn", "Mn", "Fe"))
    bound = Bound(crystal, {"Mn": 3.0, "Fe": 1.5})
    for k in ((0, 0, 0), (0.5, 0, 0.5), (0, 0.5, 0)):
        vectors = rng.normal(size=(3, 3))
        moments = vectors / np.linalg.norm(vectors, axis=1)[:, None] * np.array([3, 3, 1.5])[:, None]
        ordering = Ordering(crystal, moments, k)
        above = bound.above(ordering, dipolar_energy(ordering))
        assert above is not None and above.above_eV > -1e-12
        # One site without a moment, another too small: the plain bound, for the ions that are left.
        fewer = Ordering(crystal, moments * np.array([1, 0, 0.3])[:, None], k)
        above = bound.above(fewer, dipolar_energy(fewer))
        assert above is not None and above.above_eV > -1e-12


def test_none_where_it_says_nothing() -> None:
    crystal = Crystal(np.diag([5.0, 6.0, 7.0]), [(0, 0, 0), (0.5, 0.5, 0.5)], ("Mn", "Fe"))
    bound = Bound(crystal, {"Mn": 3.0})
    both = Ordering(crystal, [[0, 0, 3], [0, 0, 1]])
    assert bound.above(both, dipolar_energy(both)) is None
    other = Ordering(CUBE, [[0, 0, 3]])
    assert bound.above(other, dipolar_energy(other)) is None
