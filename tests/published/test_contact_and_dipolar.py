"""Relations of the trade between moments, distances and frequencies, from the sources named at each (from memory)."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import constants

import latticedip as ld
from latticedip.particles import particle_named
from tests.reference.constants import DIPOLE_T

BOHR_A = constants.value("Bohr radius") * 1e10
#: Moment of a free electron in µB.
ELECTRON = abs(constants.value("electron g factor")) / 2
EDGE = 4000.0


@pytest.mark.parametrize(
    ("particle", "heavy", "splitting_MHz"),
    [
        # Ramsey, Molecular Beams (1956), and any table of constants: the 21 cm line of hydrogen.
        ("1H", constants.m_p, 1420.4058),
        # Hughes and Kinoshita, Rev. Mod. Phys. 71, S133 (1999): muonium in its ground state.
        ("muon", constants.value("muon mass"), 4463.3028),
    ],
)
def test_fermi_contact_field_in_the_hydrogen_atom(particle, heavy, splitting_MHz):
    """B = (2/3) µ0 m |ψ(0)|², |ψ(0)|² = 1/(π a³) with the reduced mass; the splitting is A = 2 B γ/2π (0.1 %, QED)."""
    reduced = heavy / (heavy + constants.m_e)
    density = ELECTRON * reduced**3 / (np.pi * BOHR_A**3)
    empty = ld.Crystal(EDGE * np.eye(3), [[0, 0, 0]], ["Mn"])
    probe = ld.Probe((0.5, 0.5, 0.5), particle=particle, contact=ld.Contact(moment_density_muB_per_A3=[0, 0, density]))
    found = ld.local_field(ld.Ordering(empty, [[0, 0, 1e-9]]), probe)
    assert 2 * found.frequency_MHz[0] == pytest.approx(splitting_MHz, rel=1e-3)


@pytest.mark.parametrize("theta_deg", [0.0, 30.0, 54.7356103, 90.0, 125.2643897, 180.0])
def test_the_field_of_one_dipole_goes_as_three_cosine_squared_less_one(theta_deg):
    """Slichter, Principles of Magnetic Resonance, ch. 3: B along the moment is (µ0/4π) m (3cos²θ − 1)/r³."""
    distance, theta = 2.5, np.radians(theta_deg)
    place = distance * np.array([np.sin(theta), 0, np.cos(theta)]) / EDGE
    one = ld.Crystal(EDGE * np.eye(3), [[0, 0, 0]], ["Mn"])
    field = ld.local_field(ld.Ordering(one, [[0, 0, 3.0]]), place[None]).total[0, 2]
    expected = DIPOLE_T * 3.0 / distance**3 * (3 * np.cos(theta) ** 2 - 1)
    assert field == pytest.approx(expected, abs=1e-7)


def test_two_free_electrons_a_nanometre_apart():
    """Jeschke, Annu. Rev. Phys. Chem. 63, 419 (2012): ω_dd/2π = 52.04 MHz nm³ (1 − 3cos²θ)/r³."""
    pair = ld.Crystal(EDGE * np.eye(3), [[0, 0, 0], [10 / EDGE, 0, 0]], ["Fe", "O"])
    coupling = ld.coupling_tensor(pair, (10 / EDGE, 0, 0), magnetic="Fe")
    # The moment of one spin of a half in the field of the other, with g µB/h for the precession.
    per_tesla = 2 * ELECTRON * constants.value("Bohr magneton") / constants.h * 1e-6
    frequency = 2 * ELECTRON * per_tesla * coupling.dipolar
    np.testing.assert_allclose(np.diag(frequency), 52.04 * np.array([2, -1, -1]), rtol=1e-4)


def test_dipolar_splitting_of_two_protons():
    """Pake, J. Chem. Phys. 16, 327 (1948); Abragam, ch. VII: d/2π = 120.12 kHz Å³/r³ for two protons."""
    proton = particle_named("1H")
    # (µ0/4π) γ² ħ/2π with γ/2π and the moment of the table.
    per_magneton = constants.value("nuclear magneton") / constants.value("Bohr magneton")
    moment_muB = proton.moment_nuclear_magnetons * per_magneton
    pair = ld.Crystal(EDGE * np.eye(3), [[0, 0, 0], [0, 0, 1.58 / EDGE]], ["H", "O"])
    field = ld.coupling_tensor(pair, (0, 0, 1.58 / EDGE), magnetic="H").dipolar[2, 2] * moment_muB
    # The local field of a neighbour up or down along the bond: 2 µ/r³, that is d/2π = γ/2π µ/r³ · 2.
    assert 1e3 * field * proton.MHz_per_T * 1.58**3 == pytest.approx(120.12, rel=1e-3)
