"""Physical constants in the units of this program: Å, Bohr magneton (µB), tesla, eV, kelvin, MHz.

All values come from ``scipy.constants`` (CODATA); none is typed in.
"""

from __future__ import annotations

import math

from scipy import constants as _c

BOHR_MAGNETON_J_PER_T: float = _c.value("Bohr magneton")
NUCLEAR_MAGNETON_J_PER_T: float = _c.value("nuclear magneton")

#: µ0 µB/(4π Å³) in T: the field scale of one Bohr magneton at 1 Å.
DIPOLE_T_A3_PER_MUB: float = _c.mu_0 / (4 * math.pi) * BOHR_MAGNETON_J_PER_T * 1e30
#: µ0 µB/Å³ in T: turns a magnetization in µB/Å³ into µ0 M in tesla.
MU0_T_A3_PER_MUB: float = _c.mu_0 * BOHR_MAGNETON_J_PER_T * 1e30
#: Energy of 1 µB in 1 T, in eV.
EV_PER_MUB_T: float = BOHR_MAGNETON_J_PER_T / _c.e
#: Kelvin per eV.
K_PER_EV: float = _c.e / _c.k
#: 1 eV/Å³ in J/m³.
J_PER_M3_PER_EV_A3: float = _c.e * 1e30
#: µ0 µB²/(4π Å³) in eV: the energy scale of two Bohr magnetons at 1 Å.
DIPOLE_EV_A3_PER_MUB2: float = DIPOLE_T_A3_PER_MUB * EV_PER_MUB_T
#: Muon frequency per field, γµ/2π = 2 µµ/h, in MHz/T (magnitude).
MUON_MHZ_PER_T: float = 2 * abs(_c.value("muon mag. mom.")) / _c.h * 1e-6
#: One gauss in tesla.
T_PER_GAUSS: float = 1e-4
