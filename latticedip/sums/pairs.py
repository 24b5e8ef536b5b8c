"""Single pairs: the terms that lattice sums are made of."""

from __future__ import annotations

import numpy as np

from latticedip.checks import FloatArray
from latticedip.units import DIPOLE_T_A3_PER_MUB


def pair_tensors(vectors: FloatArray) -> FloatArray:
    """Shape (n, 3, 3) in T/µB. Dipole tensors (µ0/4π)(3 x_a x_b − x² δ_ab)/|x|⁵ of vectors (n, 3) in Å, none zero."""
    square = np.einsum("na,na->n", vectors, vectors)[:, None, None]
    outer = vectors[:, :, None] * vectors[:, None, :]
    return np.asarray(DIPOLE_T_A3_PER_MUB * (3 * outer - square * np.eye(3)) / square**2.5)


def pair_power_tensors(vectors: FloatArray) -> FloatArray:
    """Shape (n, 3, 3, 3, 3) in 1/Å⁶. n_a n_b n_c n_d/|x|⁶ with n = x/|x|, of vectors (n, 3) in Å, none zero."""
    length = np.linalg.norm(vectors, axis=1)
    unit = vectors / length[:, None]
    four = np.einsum("na,nb,nc,nd->nabcd", unit, unit, unit, unit)
    return np.asarray(four / length[:, None, None, None, None] ** 6)
