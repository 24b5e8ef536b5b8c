"""Constants of the references, from scipy alone."""

from __future__ import annotations

import numpy as np
from scipy import constants

#: µ0 µB/(4π Å³) in T.
DIPOLE_T = constants.mu_0 / (4 * np.pi) * constants.value("Bohr magneton") * 1e30
#: 1 µB T in eV.
MUB_T_EV = constants.value("Bohr magneton") / constants.e
#: µ0 µB²/(4π Å³) in eV and in K.
DIPOLE_EV = DIPOLE_T * MUB_T_EV
DIPOLE_K = DIPOLE_T * constants.value("Bohr magneton") / constants.k
