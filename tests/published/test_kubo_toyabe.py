"""Static Kubo–Toyabe functions and distributions of incommensurate magnets as they stand in print."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.observables.polarization import kubo_toyabe, kubo_toyabe_along


def test_the_minimum_of_the_static_function():
    """Kubo and Toyabe (1967): minimum at t = √3/Δ of 1/3 − (4/3) exp(−3/2), then recovery to 1/3 (from memory)."""
    delta = 0.389
    time = np.linspace(0, 60, 600_001)
    values = kubo_toyabe(time, delta)
    assert time[np.argmin(values)] == pytest.approx(np.sqrt(3) / delta, abs=2e-4)
    assert values.min() == pytest.approx(1 / 3 - 4 / 3 * np.exp(-1.5), abs=1e-9)
    assert values[-1] == pytest.approx(1 / 3, abs=1e-9)


def test_the_start_is_a_parabola():
    """G = 1 − Δ² t² at short times (Hayano et al., Phys. Rev. B 20, 850 (1979); from memory)."""
    assert kubo_toyabe(np.array([1e-3]), 0.5) == pytest.approx([1 - 0.25e-6], abs=1e-12)


def test_a_longitudinal_field_lifts_the_tail():
    """Hayano et al. (1979): with ω = 2Δ the tail lies well above 1/3, with ω = 10Δ near 1 (figure, from memory)."""
    tails = [kubo_toyabe_along(np.array([80.0]), 0.4, ratio * 0.4)[0] for ratio in (0.0, 1.0, 2.0, 5.0, 10.0)]
    assert tails[0] == pytest.approx(1 / 3, abs=1e-6)
    assert np.all(np.diff(tails) > 0)
    assert 0.6 < tails[2] < 0.75
    assert tails[4] > 0.97


def test_a_powder_of_one_field_with_a_gaussian_width():
    """1/3 + 2/3 (cos ωt − (Δ²t/ω) sin ωt) exp(−Δ²t²/2): Kornilov and Pomjakushin, Phys. Lett. A 153, 364 (1991)
    (from memory)."""
    crystal = ld.Crystal(4.0 * np.eye(3), [[0, 0, 0]], ["Mn"])
    probe = ld.Probe([0.5, 0.5, 0.5])
    ordering = ld.Ordering(crystal, [[0, 0, 0.05]])
    found = ld.spectrum(ordering, probe, powder=True)
    omega = 2 * np.pi * probe.MHz_per_T * float(np.linalg.norm(ld.local_field(ordering, probe).total))
    time, delta = np.linspace(0, 6, 121), 0.7
    expected = 1 / 3 + 2 / 3 * np.exp(-((delta * time) ** 2) / 2) * (
        np.cos(omega * time) - delta**2 * time / omega * np.sin(omega * time)
    )
    assert ld.polarization(found, time, nuclear_width_per_us=delta).values == pytest.approx(expected, abs=1e-12)
