"""Energies of many candidates that share one Coupling: rate against the bare matrix product, and achieved error.

Run: python benchmarks/bench_coupling.py [candidates]
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable

import numpy as np

import latticedip as ld


def best_time(call: Callable[[], object], repeats: int = 5) -> float:
    """Shortest of several runs in seconds, after one to warm up."""
    call()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return min(times)


def main(count: int) -> None:
    """Print one table for 64 and 256 moments."""
    rng = np.random.default_rng(1)
    print(f"{count} candidates; seconds are the best of five; errors are relative to the largest energy")
    print("moments  kind                  candidates/s   share of bare product   error against one by one")
    for edge in (4, 6.35):
        shape = (4, 4, 4) if edge == 4 else (8, 8, 4)
        n = int(np.prod(shape))
        grid = np.stack(np.meshgrid(*(np.arange(s) / s for s in shape), indexing="ij"), axis=-1).reshape(-1, 3)
        crystal = ld.Crystal(
            np.diag(3.0 * np.array(shape)), grid + 0.1 * (rng.random((n, 3)) - 0.5) / shape, ["Fe"] * n
        )
        coupling = ld.Coupling(crystal)
        general = ld.Coupling(crystal, (0.21, 0.13, 0.4))
        _ = coupling.tensors, general.tensors
        moments = rng.normal(size=(count, n, 3))
        flat, square = moments.reshape(count, 3 * n), rng.normal(size=(3 * n, 3 * n))
        scratch = np.empty_like(flat)
        bare = best_time(lambda flat=flat, square=square, out=scratch: np.matmul(flat, square, out=out))
        del scratch

        few = rng.choice(count, 50, replace=False)
        seconds = best_time(lambda c=coupling, m=moments: c.energies(m))
        single = np.array([ld.dipolar_energy(ld.Ordering(crystal, m)).per_cell_eV for m in moments[few]])
        report(n, "general vectors", count, seconds, bare, coupling.energies(moments)[few], single)

        signs = rng.choice(np.array([-1, 1], dtype=np.int8), size=(count, n))
        axis = np.array([1.0, 2.0, 2.0])
        seconds_signs = best_time(lambda c=coupling, s=signs, axis=axis: c.sign_energies(s, axis))
        single = np.array([ld.dipolar_energy(ld.Ordering(crystal, s[:, None] * axis)).per_cell_eV for s in signs[few]])
        report(n, "± along one axis", count, seconds_signs, bare, coupling.sign_energies(signs, axis)[few], single)
        print(f"{'':9}± patterns against general vectors: {seconds / seconds_signs:.1f} times as fast")
        seconds_forms = best_time(lambda c=coupling, s=signs, n=n: c.sign_forms(s, np.ones(n)), repeats=2)
        print(f"{'':9}± patterns with their quadratic form over all axes: {count / seconds_forms:.3g}/s")

        parts = moments[: count // 4] + 1j * moments[count // 4 : count // 2]
        complex_flat, complex_square = parts.reshape(len(parts), -1), square + 1j * square
        bare = best_time(lambda a=complex_flat, b=complex_square: a @ b, repeats=3)
        seconds = best_time(lambda c=general, m=parts: c.energies(m), repeats=3)
        few = np.arange(50)
        single = np.array([ld.dipolar_energy(ld.Ordering(crystal, m, general.k)).per_cell_eV for m in parts[few]])
        report(n, "complex, general k", len(parts), seconds, bare, general.energies(parts)[few], single)


def report(n: int, kind: str, count: int, seconds: float, bare: float, found: np.ndarray, single: np.ndarray) -> None:
    """Print one row; ``bare`` is the time of the matrix product of the same sizes alone."""
    error = np.abs(found - single).max() / np.abs(single).max()
    print(f"{n:7}  {kind:20}  {count / seconds:12.3g}   {100 * bare / seconds:18.0f} %   {error:.1e}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 100_000)
