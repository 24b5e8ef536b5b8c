"""Averages of dipole tensors over a Gaussian cloud by routes that share nothing with the package: sums of waves alone,
quadrature over the cloud, and quadrature about the source in the principal-value sense."""

from __future__ import annotations

import numpy as np

from tests.reference.constants import DIPOLE_T


def nodes(covariance: np.ndarray, n: int) -> tuple[np.ndarray, np.ndarray]:
    """Gauss–Hermite displacements (n³, 3) in Å and weights of a Gaussian cloud."""
    values, axes = np.linalg.eigh(covariance)
    at, weights = np.polynomial.hermite.hermgauss(n)
    grid = np.stack(np.meshgrid(at, at, at, indexing="ij"), axis=-1).reshape(-1, 3)
    shares = np.einsum("i,j,k->ijk", weights, weights, weights).ravel() / np.pi**1.5
    return grid * np.sqrt(2 * np.maximum(values, 0)) @ axes.T, shares


def density(vectors: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Density of the cloud in 1/Å³ at vectors (..., 3)."""
    exponent = np.einsum("...a,ab,...b->...", vectors, np.linalg.inv(covariance), vectors) / 2
    return np.exp(-exponent) / np.sqrt(np.linalg.det(2 * np.pi * covariance))


def wave_sum(cell: np.ndarray, k: np.ndarray, offsets: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Averaged N = 0 lattice sum, traceless but for the background, (n, 3, 3) complex in T/µB: the weight of every wave
    is that of the cloud, no splitting. For clouds so wide that the waves die out by themselves."""
    waves, volume = 2 * np.pi * np.linalg.inv(cell).T, abs(np.linalg.det(cell))
    grid = np.stack(np.meshgrid(*[np.arange(-16, 17)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    q = (grid - np.asarray(k)) @ waves
    q = q[np.einsum("qa,qa->q", q, q) > 1e-12]
    weight = np.exp(-np.einsum("qa,ab,qb->q", q, covariance, q) / 2) / np.einsum("qa,qa->q", q, q)
    out = -4 * np.pi / volume * np.einsum("q,qa,qb,nq->nab", weight, q, q, np.exp(1j * offsets @ q.T), optimize=True)
    images = grid[np.abs(grid).max(axis=1) <= 8]
    reached = density(offsets[:, None] - images @ cell, covariance) @ np.exp(-2j * np.pi * (images @ np.asarray(k)))
    return DIPOLE_T * (out + 4 * np.pi / 3 * reached[:, None, None] * np.eye(3))


def principal_value(offset: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Average of one dipole tensor over a cloud about ``offset`` in T/µB, a small sphere about the source left out.

    In polar coordinates about the source: the angular integral first, which takes away the singularity 1/r.
    """
    cosine, share = np.polynomial.legendre.leggauss(80)
    phi = 2 * np.pi * np.arange(160) / 160
    across = np.sqrt(1 - cosine**2)[:, None]
    unit = np.stack([across * np.cos(phi), across * np.sin(phi), np.repeat(cosine[:, None], 160, axis=1)], axis=-1)
    tensors = 3 * unit[..., :, None] * unit[..., None, :] - np.eye(3)
    at, steps = np.polynomial.legendre.leggauss(120)
    longest = np.linalg.norm(offset) + 9 * np.sqrt(np.linalg.eigvalsh(covariance)[-1])
    total = np.zeros((3, 3))
    for r, step in zip(longest * (at + 1) / 2, steps * longest / 2, strict=True):
        there = density(r * unit - offset, covariance)
        total += step / r * np.einsum("t,tp,tpab->ab", share, there, tensors) * 2 * np.pi / 160
    return DIPOLE_T * total
