"""The best lower bound that site weights give, where the magnetic sites are not all equivalent.

For numbers u_i that add up to zero, an ordering with |s_i| = 1 has the energy (1/S) s†(H − u)s whatever u, so the
lowest eigenvalue of H(k) − u over all k is a lower bound for every u. It is a concave function of u, and its maximum
is sought (Lyons and Kaplan, Phys. Rev. 120, 1580 (1960): weights of the sites); there the level holds all sites in
equal amounts. Sites that symmetry makes equivalent share one u.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from latticedip.analysis.modes_bands import MagneticSites
from latticedip.analysis.modes_search import magnetic_lattice
from latticedip.checks import FloatArray
from latticedip.crystal.kpoints import symmetric_mesh, wave_rotations
from latticedip.crystal.symmetry import find_operations

#: Points of the whole mesh on which the weights are sought.
MESH = 512
#: Propagation vectors with which the weights are sought at one time, and how often others are added.
WORKING, ROUNDS = 8, 5
#: Sharpness of the smooth minimum over all eigenvalues, in units of 1/scale; each stage starts where the last ended.
SHARPNESS = (30.0, 300.0, 3000.0, 30000.0)
#: When a stage of the search ends.
STOP: dict[str, Any] = {"maxiter": 40, "ftol": 1e-14, "gtol": 1e-9}


def balance(sites: MagneticSites) -> FloatArray | None:
    """Shape (S,) float in eV per ion. The u found, adding up to zero; None where all sites are equivalent."""
    lattice = magnetic_lattice(sites)
    _, equivalent = find_operations(lattice)
    heads, kinds = np.unique(equivalent, return_inverse=True)
    if len(heads) == 1:
        return None
    counts = np.bincount(kinds)
    mesh, _ = symmetric_mesh(lattice, MESH, wave_rotations(lattice))
    matrices = np.concatenate([sites.matrices(part) for part in _blocks(mesh, sites.plan.block)])
    scale = sites.scale_eV
    # Columns span the u of the kinds that add up to zero over the sites.
    free = np.linalg.svd(counts[None].astype(float))[2][1:].T
    x = np.zeros(free.shape[1])
    diagonal = np.arange(matrices.shape[1])
    chosen: np.ndarray = np.zeros(0, dtype=int)
    for number in range(ROUNDS):
        shifted = matrices.copy()
        shifted[:, diagonal, diagonal] -= np.repeat((free @ x)[kinds], 3) * scale
        lowest = np.linalg.eigvalsh(shifted)[:, 0]
        added = np.setdiff1d(np.argsort(lowest, kind="stable")[:WORKING], chosen)
        if len(added) == 0:
            break
        chosen = np.concatenate([chosen, added])
        for sharpness in SHARPNESS[0 if number == 0 else -2 :]:
            x = _sharpen(matrices[chosen] / scale, free, kinds, x, sharpness)
    return np.asarray((free @ x)[kinds] * scale)


def _sharpen(
    matrices: FloatArray, free: FloatArray, kinds: np.ndarray, start: FloatArray, sharpness: float
) -> FloatArray:
    """Maximise −(1/β) log Σ exp(−βλ) over all eigenvalues λ of the given matrices, a smooth concave lower estimate."""
    size = matrices.shape[1]
    diagonal = np.arange(size)
    per_kind = np.zeros((size, len(free)))
    per_kind[diagonal, np.repeat(kinds, 3)] = 1.0

    def value(x: FloatArray) -> tuple[float, FloatArray]:
        shifted = matrices.copy()
        shifted[:, diagonal, diagonal] -= np.repeat((free @ x)[kinds], 3)
        values, vectors = np.linalg.eigh(shifted)
        weights = np.exp(-sharpness * (values - values.min()))
        total = weights.sum()
        shares = np.einsum("kn,kin->i", weights / total, np.abs(vectors) ** 2) @ per_kind
        return float(np.log(total) / sharpness - values.min()), shares @ free

    # Imported here: loading it takes a fifth of a second, and few couplings need it.
    from scipy.optimize import minimize

    return np.asarray(minimize(value, start, jac=True, method="L-BFGS-B", options=STOP).x)


def _blocks(points: FloatArray, size: int) -> list[FloatArray]:
    return [points[i : i + size] for i in range(0, len(points), size)]
