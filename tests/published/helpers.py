"""Crystals and units in which lattice sums are published."""

from __future__ import annotations

from typing import Any

import numpy as np

import latticedip as ld
from tests.reference.constants import DIPOLE_EV, DIPOLE_T

#: Primitive vectors (rows, of a cubic cell of edge 1) and lattice points per cube.
CUBIC = {
    "sc": (np.eye(3), 1),
    "bcc": (np.array([[-1, 1, 1], [1, -1, 1], [1, 1, -1]]) / 2, 2),
    "fcc": (np.array([[0, 1, 1], [1, 0, 1], [1, 1, 0]]) / 2, 4),
}
#: Lattice points of the conventional cube.
CENTRINGS = {
    "sc": np.zeros((1, 3)),
    "bcc": np.array([[0, 0, 0], [1, 1, 1]]) / 2,
    "fcc": np.array([[0, 0, 0], [0, 1, 1], [1, 0, 1], [1, 1, 0]]) / 2,
}


def ordering(cell: Any, positions: Any, moments: Any, k: Any = (0, 0, 0), symbol: str = "Fe") -> ld.Ordering:
    """An Ordering of one magnetic element."""
    positions = np.atleast_2d(np.asarray(positions, dtype=float))
    crystal = ld.Crystal(np.asarray(cell, dtype=float), positions, [symbol] * len(positions))
    return ld.Ordering(crystal, np.broadcast_to(np.asarray(moments), positions.shape), k)


def reduced_energy(of: ld.Ordering, length: float, moment: float = 1.0, **options: Any) -> float:
    """Energy per ion in units µ0µ²/(4π length³)."""
    return ld.dipolar_energy(of, **options).per_ion_eV * length**3 / (DIPOLE_EV * moment**2)


def reduced_field(field_T: Any, length: float, moment: float = 1.0) -> np.ndarray:
    """Field in units µ0µ/(4π length³)."""
    return np.asarray(field_T) * length**3 / (DIPOLE_T * moment)


def coupling_matrix(cell: Any, positions: Any, k: Any = (0, 0, 0)) -> np.ndarray:
    """Shape (3n, 3n). Reduced dipole tensors (4π/µ0 µB, 1/Å³) between the sites at k, N = 0."""
    cart = np.atleast_2d(np.asarray(positions, dtype=float)) @ np.asarray(cell, dtype=float)
    n = len(cart)
    offsets = (cart[:, None] - cart[None]).reshape(-1, 3)
    tensors = ld.dipole_tensor(cell, offsets, k).reshape(n, n, 3, 3) / DIPOLE_T
    return np.asarray(tensors.transpose(0, 2, 1, 3).reshape(3 * n, 3 * n))
