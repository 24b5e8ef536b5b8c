"""Dipolar modes: eigenvalues at many k, the lowest mode, with the achieved error against one Coupling per k.

Run: python benchmarks/bench_modes.py
"""

from __future__ import annotations

import time

import numpy as np

import latticedip as ld
from latticedip.analysis.modes import balanced_mode, lowest_mode
from latticedip.analysis.modes_bands import eigenvalues, magnetic_sites
from latticedip.sums.many_k import many_k


def crystal_of(n: int) -> ld.Crystal:
    """n sublattices in a slightly skewed cell of 40 Å³ each."""
    rng = np.random.default_rng(n)
    side = int(np.ceil(n ** (1 / 3)))
    grid = np.stack(np.meshgrid(*(np.arange(side) / side,) * 3, indexing="ij"), axis=-1).reshape(-1, 3)[:n]
    cell = (40 * n) ** (1 / 3) * (np.diag([1, 1.05, 0.95]) + rng.uniform(-0.05, 0.05, (3, 3)))
    return ld.Crystal(cell, grid + rng.uniform(-0.15, 0.15, (n, 3)) / side, ["Fe"] * n)


def largest_error(crystal: ld.Crystal, k: np.ndarray) -> float:
    """Largest error of a tensor in T/µB, relative where elements exceed 1, against sums at tol = 1e-12."""
    found = many_k(crystal.cell, crystal.places_cart).matrices(k).transpose(0, 1, 3, 2, 4)
    worst = 0.0
    for vector, tensors in zip(k, found, strict=True):
        exact = ld.Coupling(crystal, vector, tol=1e-12).tensors
        scale = np.maximum(1.0, np.abs(exact).max(axis=(2, 3)))
        worst = max(worst, float((np.abs(tensors - exact).max(axis=(2, 3)) / scale).max()))
    return worst


def main() -> None:
    """Print one table for eigenvalues and one for lowest modes."""
    rng = np.random.default_rng(0)
    print(
        "sublattices   k points   seconds   of them tensors   one by one, extrapolated   error of tensors (tol 1e-10)"
    )
    for n in (1, 4, 16):
        crystal = crystal_of(n)
        k = rng.random((10_000, 3))
        eigenvalues(crystal, {"Fe": 1.0}, k[:100])
        start = time.perf_counter()
        eigenvalues(crystal, {"Fe": 1.0}, k)
        seconds = time.perf_counter() - start
        sites = magnetic_sites(crystal, {"Fe": 1.0})
        start = time.perf_counter()
        for first in range(0, len(k), sites.plan.block):
            sites.matrices(k[first : first + sites.plan.block])
        tensors = time.perf_counter() - start
        start = time.perf_counter()
        for vector in k[:50]:
            matrix = ld.Coupling(crystal, vector).tensors.transpose(0, 2, 1, 3).reshape(3 * n, 3 * n)
            np.linalg.eigvalsh(matrix)
        single = (time.perf_counter() - start) * len(k) / 50
        error = largest_error(crystal, np.vstack([np.zeros(3), [0.5, 0, 0], rng.normal(size=(30, 3))]))
        print(f"{n:11}   {len(k):8}   {seconds:7.2f}   {tensors:15.2f}   {single:24.1f}   {error:.1e}")
    print("\nsublattices   lowest mode, s   balanced mode, s   energy against dipolar_energy, relative")
    for n in (1, 2, 4, 8):
        crystal = crystal_of(n)
        start = time.perf_counter()
        mode = lowest_mode(crystal, {"Fe": 1.0})
        middle = time.perf_counter()
        balanced_mode(crystal, {"Fe": 1.0})
        end = time.perf_counter()
        energy = ld.dipolar_energy(mode.ordering()).per_cell_eV / mode.n_ions
        error = abs(energy / mode.energy_per_ion_eV - 1)
        print(f"{n:11}   {middle - start:14.2f}   {end - middle:16.2f}   {error:.1e}")


if __name__ == "__main__":
    main()
