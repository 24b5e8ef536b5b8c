"""Fields and energies of magnets from explicit moments, atom by atom, with no lattice sum."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.special import betainc

from tests.reference.constants import DIPOLE_T

#: Moments (n_cells, n_sites, 3) in µB of the cells (n_cells, 3) asked for.
Moments = Callable[[np.ndarray], np.ndarray]


def sphere_field(cell: Any, positions: Any, moments: Moments, point: Any, *, radius: float = 100.0) -> np.ndarray:
    """Shape (3,) in T. Field at a fractional point of every moment within ``radius`` Å, the rim softened.

    Atoms within 1e-6 Å of the point are left out. At k = 0 this tends to the Lorentz-sphere sum.
    """
    cell, positions, point = (np.asarray(a, dtype=float) for a in (cell, positions, point))
    heights = 1 / np.linalg.norm(np.linalg.inv(cell), axis=0)
    reach = np.ceil(radius / heights).astype(int) + 1
    middle = np.floor(point).astype(int)
    axes = [np.arange(m - n - 1, m + n + 2) for m, n in zip(middle, reach, strict=True)]
    cells = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    total = np.zeros(3)
    every = moments(cells)
    for j, position in enumerate(positions):
        x = (point - position - cells) @ cell
        r = np.linalg.norm(x, axis=1)
        near = (r < radius) & (r > 1e-6)
        x, r, m = x[near], r[near], every[near, j]
        fall = np.clip((r - 0.05 * radius) / (0.95 * radius), 0.0, 1.0)
        # The regularized incomplete beta function is a step with many vanishing derivatives at both ends.
        weight = (1 - betainc(11, 11, fall)) / r**5
        along = np.einsum("na,na->n", m, x)
        total += np.einsum("n,na->a", weight, 3 * along[:, None] * x - (r**2)[:, None] * m)
    return DIPOLE_T * total


def waves(k: Any, components: Any, occupancies: Any = 1.0) -> Moments:
    """Mean moments p Σ_k Re[S exp(−2πi k·R)] of components (n_k, n, 3) at k (n_k, 3)."""
    k, components = np.atleast_2d(np.asarray(k, dtype=float)), np.asarray(components)
    weight = np.broadcast_to(np.asarray(occupancies, dtype=float), components.shape[1])

    def moments(cells: np.ndarray) -> np.ndarray:
        out = np.zeros((len(cells), components.shape[1], 3))
        for vector, part in zip(k, components, strict=True):
            turns = 2 * np.pi * (np.asarray(cells) @ vector)
            out += np.cos(turns)[:, None, None] * part.real + np.sin(turns)[:, None, None] * part.imag
        return out * weight[:, None]

    return moments


def bare_field(moment: Any, x: Any) -> np.ndarray:
    """Shape (3,) in T. Field at x (Å) of one moment (µB) at the origin."""
    r = np.linalg.norm(x)
    return np.asarray(DIPOLE_T * (3 * np.dot(moment, x) * np.asarray(x) / r**5 - np.asarray(moment) / r**3))
