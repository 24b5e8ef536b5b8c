"""Direct sums in real space: a sphere around the target, with a sharp or a softened rim.

Any weight that depends on the distance to the target alone leaves no tail at k = 0: the angular average of the
dipole tensor vanishes on every shell, so the sum tends to the Lorentz-sphere sum, which lies (4π/3)/V below the
N = 0 sum. A sharp rim converges as the noise of lattice points on it; a rim softened with n vanishing derivatives
(which averages sharp spheres of many radii) converges with a high power of the radius.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.special import betainc

from tests.reference.constants import DIPOLE_T


def sphere_tensor(
    cell: Any, offset: Any, k: Any = (0, 0, 0), *, radius: float, soft: bool = True, order: int = 12
) -> np.ndarray:
    """Shape (3, 3) complex in T/µB. N = 0 sum by points within ``radius`` Å of the target, with the sphere's tail.

    soft: let the weight fall from one at a fifth of the radius to zero at the radius, with ``order`` derivatives
    zero at both ends; else every point inside counts fully.
    """
    vectors, turns = lattice_around(np.asarray(cell, dtype=float), np.asarray(offset, dtype=float), k, radius)
    distance = np.linalg.norm(vectors, axis=1)
    near = (distance < radius) & (distance > 1e-6)
    vectors, turns, distance = vectors[near], turns[near], distance[near]
    if soft:
        inner = 0.2 * radius
        progress = np.clip((distance - inner) / (radius - inner), 0.0, 1.0)
        # The regularized incomplete beta function is the smooth step whose first ``order`` derivatives vanish.
        turns = turns * (1.0 - betainc(order + 1, order + 1, progress))
    outer = vectors[:, :, None] * vectors[:, None, :]
    terms = 3 * outer / distance[:, None, None] ** 5 - np.eye(3) / distance[:, None, None] ** 3
    total = np.einsum("n,nab->ab", turns, terms)
    if np.all(np.asarray(k) == np.round(k)):
        total = total + 4 * np.pi / 3 / abs(np.linalg.det(cell)) * np.eye(3)
    return np.asarray(DIPOLE_T * total)


def lattice_around(cell: np.ndarray, offset: np.ndarray, k: Any, radius: float) -> tuple[np.ndarray, np.ndarray]:
    """Vectors from every lattice point within the box around the sphere to the target, and exp(−2πi k·R)."""
    heights = 1 / np.linalg.norm(np.linalg.inv(cell), axis=0)
    middle = offset @ np.linalg.inv(cell)
    ranges = [
        np.arange(np.floor(m - radius / h), np.ceil(m + radius / h) + 1) for m, h in zip(middle, heights, strict=True)
    ]
    cells = np.stack(np.meshgrid(*ranges, indexing="ij"), axis=-1).reshape(-1, 3)
    return offset - cells @ cell, np.exp(-2j * np.pi * ((cells @ np.asarray(k, dtype=float)) % 1.0))
