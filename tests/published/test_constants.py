"""Derived constants against published figures (CODATA 2018 and 2022 agree in the digits tested)."""

from __future__ import annotations

import math

import pytest
from scipy import constants

from latticedip import units
from latticedip.particles import particle_named

# Source: P. J. Mohr, E. Tiesinga, D. B. Newell, B. N. Taylor, CODATA recommended values (2022), multiplied
# out apart from this program.
PUBLISHED = [
    ("µ0 µB/(4π Å³) in T", units.DIPOLE_T_A3_PER_MUB, 0.9274010, 5e-8),
    ("µ0 µB²/(4π Å³) in K", units.DIPOLE_EV_A3_PER_MUB2 * units.K_PER_EV, 0.622948, 5e-7),
    ("µ0 µB²/(4π Å³) in µeV", units.DIPOLE_EV_A3_PER_MUB2 * 1e6, 53.68151, 5e-6),
    (
        "µ0 µB²/(4π Å³) in GHz",
        units.DIPOLE_EV_A3_PER_MUB2 * constants.e / constants.h * 1e-9,
        12.98013,
        5e-6,
    ),
    ("muon γ/2π in MHz/T", particle_named("muon").MHz_per_T, 135.53881, 5e-6),
    ("proton γ/2π in MHz/T", particle_named("1H").MHz_per_T, 42.577478, 5e-7),
]


@pytest.mark.parametrize(("name", "value", "published", "tolerance"), PUBLISHED)
def test_derived_constants(name: str, value: float, published: float, tolerance: float) -> None:
    assert value == pytest.approx(published, abs=tolerance, rel=0), name


def test_two_free_electrons() -> None:
    # 52.041016 MHz nm³: the dipolar frequency of two free electrons, µ0 (g µB)²/(4π h).
    g = abs(constants.value("electron g factor"))
    frequency = g**2 * units.DIPOLE_EV_A3_PER_MUB2 * 1e-3 * constants.e / constants.h * 1e-6
    assert frequency == pytest.approx(52.041016, abs=5e-7, rel=0)


def test_magnetization_scale_is_four_pi_times_the_dipole_scale() -> None:
    assert pytest.approx(4 * math.pi * units.DIPOLE_T_A3_PER_MUB, rel=1e-15) == units.MU0_T_A3_PER_MUB
