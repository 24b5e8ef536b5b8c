"""Propagation vectors under the point group of a structure: stars, symmetric meshes, projection onto symmetric ones.

An operation x' = R x + t takes k to k R⁻¹ (k as a row of reduced coordinates). Dipole tensors at k and −k are complex
conjugates, so −1 counts as an operation on k whether the structure has it or not.
"""

from __future__ import annotations

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.crystal.symmetry import find_operations


def wave_rotations(crystal: Crystal) -> np.ndarray:
    """Shape (n, 3, 3) int. Matrices g of the symmetry of a structure, k' = k g, identity first, −1 included.

    Sites are alike where element and occupancy are. Where no symmetry is found, ±1 alone.
    """
    found, _ = find_operations(crystal)
    rotations = np.eye(3, dtype=np.int64)[None] if found is None else found.rotations
    both = np.concatenate([np.eye(3, dtype=np.int64)[None], rotations, -rotations]).reshape(-1, 9)
    # A group holds every inverse, so R itself may stand for R⁻¹.
    return np.asarray(both[np.sort(np.unique(both, axis=0, return_index=True)[1])].reshape(-1, 3, 3))


def symmetric_mesh(crystal: Crystal, n_points: int, rotations: np.ndarray) -> tuple[FloatArray, FloatArray]:
    """One propagation vector of each class of equivalent ones on an even mesh with k = 0, and the mesh step.

    n_points: number of points of the whole mesh, about. Returns k, shape (n, 3), in (−½, ½], k = 0 first, and the step
    along each reciprocal vector, shape (3,).
    """
    lengths = np.linalg.norm(np.linalg.inv(crystal.cell).T, axis=1)
    scale = (n_points / np.prod(lengths)) ** (1 / 3)
    # Even, so that the zone boundary (½) is on the mesh; equal lengths give equal numbers.
    numbers = np.maximum(2, 2 * np.round(np.round(lengths * scale / 2, 6))).astype(np.int64)
    index = np.stack(np.meshgrid(*(np.arange(n) for n in numbers), indexing="ij"), axis=-1).reshape(-1, 3)
    representative = np.arange(len(index))
    strides = np.array([numbers[1] * numbers[2], numbers[2], 1])
    for g in rotations:
        # On the mesh k = m/n the matrix reads diag(1/n) g diag(n); it keeps the mesh where that is whole.
        on_mesh = g * numbers[None, :] / numbers[:, None]
        whole = np.round(on_mesh).astype(np.int64)
        if np.abs(on_mesh - whole).max() > 1e-9:
            continue
        image = (index @ whole) % numbers @ strides
        representative = np.minimum(representative, image)
    # Every member of a class has seen all images, so the smallest index is common to the class.
    kept = index[representative == np.arange(len(index))] / numbers
    kept[kept > 0.5] -= 1.0
    return kept, 1.0 / numbers


def star(k: FloatArray, rotations: np.ndarray) -> FloatArray:
    """Shape (n, 3) float. The different vectors that symmetry makes of k, one of each pair ±k, modulo 1; k first."""
    arms: list[FloatArray] = []
    for image in k @ rotations:
        if not any(_same(image, arm) or _same(image, -arm) for arm in arms):
            arms.append(image)
    return np.array([arms[0], *(arm - np.ceil(arm - 0.5 - 1e-9) for arm in arms[1:])])


def symmetrized(k: FloatArray, rotations: np.ndarray, near: float) -> FloatArray:
    """The mean of the images of k that lie within ``near`` of it modulo 1: exactly on the line or point of symmetry."""
    images = k @ rotations
    shift = images - k
    shift -= np.round(shift)
    close = np.abs(shift).max(axis=1) <= near
    return np.asarray(k + shift[close].mean(axis=0))


def _same(first: FloatArray, second: FloatArray) -> bool:
    difference = first - second
    return bool(np.abs(difference - np.round(difference)).max() <= 1e-7)
