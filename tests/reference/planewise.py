"""Planewise sum: layer after layer, each layer by its two-dimensional Fourier series.

For a target off every plane, Σ 1/|r − ρ| over one layer of area A per point is (2π/A) Σ_g exp(ig·ρ) exp(−|g||z|)/|g|
(Poisson's formula in the plane; the term g = 0, −2π|z|/A, has no second derivatives off the plane). The layers at
z − n h form geometric series in exp(−|g| h), which are summed in closed form: all converges exponentially in g.

Layers added symmetrically up and down make an infinite plate, so at k = 0 the result carries the plate's
demagnetizing tensor n n; the N = 0 sum adds (4π/V) n n.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from tests.reference.constants import DIPOLE_T


def plane_tensor(cell: Any, offset: Any, k: Any = (0, 0, 0), *, stack: int = 2, decades: float = 16.0) -> np.ndarray:
    """Shape (3, 3) complex in T/µB. The N = 0 sum at one offset that lies off the planes.

    stack: which cell vector leads from plane to plane; the planes hold the two others.
    decades: powers of ten that the last Fourier term has fallen by.
    """
    cell = np.asarray(cell, dtype=float)
    k = np.asarray(k, dtype=float)
    first, second = ((stack + 1) % 3, (stack + 2) % 3)
    normal = np.cross(cell[first], cell[second])
    area = np.linalg.norm(normal)
    normal = normal / area
    height = float(cell[stack] @ normal)
    steps = np.floor((offset @ normal) / height)
    # Bring the target between plane 0 and plane 1: the phase counts the layers crossed.
    target = np.asarray(offset, dtype=float) - steps * cell[stack]
    turn = np.exp(-2j * np.pi * ((steps * k[stack]) % 1.0))
    z = float(target @ normal)
    gap = min(abs(z), abs(abs(height) - abs(z)))
    if gap < 1e-3:
        raise ValueError("the target lies in a plane; stack along another cell vector")

    plane = np.stack([cell[first], cell[second]])
    dual = 2 * np.pi * np.linalg.pinv(plane).T  # rows, in the plane
    largest = decades * np.log(10.0) / gap
    reach = np.ceil(largest * np.linalg.norm(plane, axis=1) / (2 * np.pi)).astype(int) + 1
    i, j = np.meshgrid(np.arange(-reach[0], reach[0] + 1), np.arange(-reach[1], reach[1] + 1), indexing="ij")
    whole = np.stack([i.ravel(), j.ravel()], axis=1)
    q = (whole - k[[first, second]]) @ dual
    size = np.linalg.norm(q, axis=1)
    keep = (size > 0) & (size <= largest)
    q, size = q[keep], size[keep]

    up = abs(height)
    sign = 1.0 if height > 0 else -1.0
    # Layer n sits at n·a_stack and carries exp(−2πi k_stack n). Layers below (n ≤ 0 for height > 0) see z > 0.
    layer = np.exp(-1j * (q @ cell[stack]) - 2j * np.pi * k[stack])
    phase = np.exp(1j * (q @ target))
    below = np.exp(-size * abs(z)) / (1 - np.exp(-size * up) / layer)
    above = np.exp(-size * (up - abs(z))) * layer / (1 - np.exp(-size * up) * layer)
    total = np.zeros((3, 3), dtype=complex)
    for part, slope in ((below, -sign), (above, sign)):
        # ∂ acts on exp(iq·r + slope |q| z) as the vector iq + slope |q| n.
        vector = 1j * q + slope * size[:, None] * normal
        total += np.einsum("n,na,nb->ab", 2 * np.pi / area * phase * part / size, vector, vector)
    if np.all(k == np.round(k)):
        total = total + 4 * np.pi / (area * up) * np.outer(normal, normal)
    return np.asarray(DIPOLE_T * turn * total)
