"""Dipole tensors and fields: time and achieved error side by side, against the plain sums of `peers`.

Run as ``python benchmarks/bench_tensor.py``. Medians over several rounds, all ratios from one run.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from statistics import median

import numpy as np

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT))

import latticedip as ld  # noqa: E402
from benchmarks.peers import DIPOLE_T, SphereSum, best_plain_ewald  # noqa: E402
from latticedip.sums.bulk import lattice_sum  # noqa: E402
from latticedip.sums.fields import field_plan, lattice_field  # noqa: E402
from tests.reference.mpmath_sum import tensors  # noqa: E402

CELL = np.array([[8.0, 0.0, 0.0], [1.1, 7.9, 0.0], [-0.9, 1.4, 11.9]])
TOL = 1e-10
ROUNDS = 15


def points(n: int, seed: int) -> np.ndarray:
    """n points spread over the cell."""
    return np.random.default_rng(seed).uniform(0, 1, (n, 3)) @ CELL


def seconds(call: Callable[[], object], rounds: int = ROUNDS, repeat: int = 1) -> float:
    """Median time of one call."""
    spent = []
    for _ in range(rounds):
        start = time.perf_counter()
        for _ in range(repeat):
            call()
        spent.append((time.perf_counter() - start) / repeat)
    return median(spent)


def largest_error(found: np.ndarray, targets: np.ndarray, sources: np.ndarray, pairs: int = 40) -> float:
    """Largest error in T/µB, relative where elements exceed 1, over pairs drawn at random and the closest ones."""
    rng = np.random.default_rng(7)
    chosen = [(int(rng.integers(len(targets))), int(rng.integers(len(sources)))) for _ in range(pairs)]
    largest = np.abs(found).max(axis=(2, 3))
    chosen += [divmod(int(i), len(sources)) for i in np.argsort(-largest, axis=None)[:5]]
    exact = tensors(CELL, np.array([targets[t] - sources[s] for t, s in chosen]))
    # A difference of doubles is rounded; the kernels are given the points, so this adds 1e-16 of the gradient only.
    errors = [
        np.abs(found[t, s] - e).max() / max(1.0, np.abs(e).max()) for (t, s), e in zip(chosen, exact, strict=True)
    ]
    return float(max(errors))


def many_tensors() -> None:
    """(a) 20 sources × 1000 targets in an 8 × 8 × 12 Å triclinic cell."""
    targets, sources = points(1000, 1), points(20, 2)

    def ours() -> np.ndarray:
        plan = lattice_sum(CELL, (0, 0, 0), TOL)
        return plan.tensors(plan.place(targets), plan.place(sources))

    found = ours()
    peer = best_plain_ewald(CELL, TOL, targets, sources)
    theirs = peer.tensors(targets, sources)
    ratios, times, alternating = [], [], []
    for _ in range(ROUNDS):
        # Both ways of asking are printed: one call each in turn (caches cold), and several calls in a row.
        single = seconds(ours, 1), seconds(lambda: peer.tensors(targets, sources), 1)
        alternating.append(single[1] / single[0])
        pair = seconds(ours, 1, 5), seconds(lambda: peer.tensors(targets, sources), 1, 5)
        times.append(pair)
        ratios.append(pair[1] / pair[0])
    plan = lattice_sum(CELL, (0, 0, 0), TOL)
    print("(a) tensors, 20 sources × 1000 targets, 8 × 8 × 12 Å triclinic cell, tol 1e-10")
    line("latticedip", median(t for t, _ in times), largest_error(found, targets, sources), f"α {plan.alpha:.3f}")
    line(
        "plain compiled Ewald",
        median(t for _, t in times),
        largest_error(theirs, targets, sources),
        f"α {peer.alpha:.3f}",
    )
    print(f"    ratio {median(ratios):.1f} in a row, {median(alternating):.1f} in turn (wanted 5, aimed at 10)\n")


def one_probe_of_a_batch(size: int) -> None:
    """(b) One probe within a batch, against a direct sum in a sphere of 100 Å."""
    sources = points(20, 2)
    moments = np.random.default_rng(3).normal(size=(20, 3))
    probes = points(size, 4)
    ordering = ld.Ordering(ld.Crystal(CELL, sources @ np.linalg.inv(CELL), ["Mn"] * 20), moments)
    fractional = probes @ np.linalg.inv(CELL)
    clear = np.array([not near(CELL, sources, p) for p in probes])
    fractional, probes = fractional[clear], probes[clear]

    def batch() -> np.ndarray:
        return ld.local_field(ordering, fractional).dipolar

    found = batch()
    direct = SphereSum(CELL, sources, moments, 100.0)
    direct.take_faster_kernel(probes[0])
    some = range(0, len(probes), size // 10)
    theirs = np.array([direct.field(probes[i]) for i in some])
    exact = []
    for i in some:
        all_sources = tensors(CELL, probes[i] - sources).real
        lorentz = DIPOLE_T * 4 * np.pi / 3 / abs(np.linalg.det(CELL)) * moments.sum(axis=0)
        exact.append(np.einsum("sab,sb->a", all_sources, moments) - lorentz)
    plan = field_plan(CELL, np.zeros(3), TOL, len(sources), len(probes))
    placed = plan.place(sources)
    rounds = [
        (
            seconds(batch, 1) / len(probes),
            seconds(lambda: lattice_field(plan, plan.place(probes), placed, moments), 1) / len(probes),
            seconds(lambda: direct.field(probes[0]), 1, 20),
        )
        for _ in range(ROUNDS)
    ]
    here, bare, there = (median(column) for column in zip(*rounds, strict=True))
    ratios = [median(r[2] / r[i] for r in rounds) for i in (0, 1)]
    errors = [float(np.abs(f - e).max()) for f, e in ((found[some], exact), (theirs, exact))]
    print("(b) field of 20 sources at one probe, in T")
    line(f"latticedip, local_field of {size}", here, errors[0])
    line(f"latticedip, sums alone, of {size}", bare, errors[0])
    line("compiled sphere sum, 100 Å", there, errors[1])
    print(f"    ratio {ratios[0]:.0f} and {ratios[1]:.0f} (wanted 50, aimed at 100); ", end="")
    print(f"{np.log10(errors[1] / errors[0]):.1f} more digits (wanted 5)\n")


def near(cell: np.ndarray, sources: np.ndarray, probe: np.ndarray) -> bool:
    """True where a source lies within 0.11 Å of a probe, which local_field refuses."""
    d = (probe - sources) @ np.linalg.inv(cell)
    return bool(np.linalg.norm((d - np.round(d)) @ cell, axis=1).min() < 0.11)


def new_cell_and_k() -> None:
    """(c) A single probe for a cell and a k that were not seen before, kernels loaded."""
    sources = points(20, 2)
    moments = np.random.default_rng(3).normal(size=(20, 3)) + 0j
    rng = np.random.default_rng(11)
    print("(c) local_field of one probe, a cell and k not seen before, 20 sources")
    for words, waves in (("k = 0", False), ("generic k", True)):
        spent, errors = [], []
        for i in range(25):
            cell = CELL * (1 + 1e-3 * rng.uniform(-1, 1, (3, 3)))
            k = rng.uniform(-0.5, 0.5, 3) if waves else np.zeros(3)
            ordering = ld.Ordering(ld.Crystal(cell, sources @ np.linalg.inv(CELL), ["Mn"] * 20), moments, k)
            probe = np.array([[0.513, 0.277, 0.731]])
            start = time.perf_counter()
            found = ld.local_field(ordering, probe)
            spent.append(time.perf_counter() - start)
            if i % 6 == 0:
                exact = tensors(cell, probe @ cell - ordering.crystal.positions_cart, k)
                field = np.einsum("sab,sb->a", exact, moments).real
                errors.append(float(np.abs(found.dipolar[0] + found.lorentz[0] - field).max()))
        line(f"latticedip, {words}", median(spent[2:]), max(errors), "wanted under 5 ms")
    print()


def cost_by_size() -> None:
    """(d) Cost against the number of targets and of sources."""
    plan = lattice_sum(CELL, (0, 0, 0), TOL)
    print("(d) ns per pair of target and source (level means linear)")
    for words, varied, sizes in (
        ("20 sources, targets", 0, [(n, 20) for n in (500, 1000, 2000, 4000, 8000)]),
        ("1000 targets, sources", 1, [(1000, n) for n in (5, 10, 20, 40, 80, 160)]),
    ):
        cells = []
        for size in sizes:
            targets, sources = plan.place(points(size[0], 5)), plan.place(points(size[1], 6))
            spent = seconds(lambda t=targets, s=sources: plan.tensors(t, s), 9)
            cells.append(f"{size[varied]}: {1e9 * spent / (size[0] * size[1]):.0f}")
        print(f"    {words:24s} " + "   ".join(cells))
    print()


THREADS = """
import sys, time, numpy as np
sys.path.insert(0, {root!r})
from benchmarks.bench_tensor import CELL, TOL, points, seconds
from latticedip.sums.bulk import lattice_sum
found = []
for k in ((0, 0, 0), (0.21, -0.34, 0.07)):
    plan = lattice_sum(CELL, k, TOL)
    run = lambda: plan.tensors(plan.place(points(1000, 1)), plan.place(points(20, 2)))
    found.append(np.asarray(run(), dtype=complex))
    print(f"{{1e3 * seconds(run):.1f}} ms", end="  ")
np.save({out!r}, np.array(found))
"""


def threads() -> None:
    """(e) The same numbers on one thread and on two."""
    print("(e) 20 sources × 1000 targets by number of threads: k = 0, generic k")
    results = []
    with tempfile.TemporaryDirectory() as folder:
        for count in ("1", "2"):
            out = str(Path(folder) / f"{count}.npy")
            environment = os.environ | {
                "NUMBA_NUM_THREADS": count,
                "OMP_NUM_THREADS": count,
                "OPENBLAS_NUM_THREADS": count,
            }
            code = THREADS.format(root=str(ROOT), out=out)
            done = subprocess.run(
                [sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=True
            )
            print(f"    {count} thread(s)   {done.stdout}")
            results.append(np.load(out))
    print(f"    largest difference {np.abs(results[0] - results[1]).max():.1e} T/µB (wanted 1e-13)\n")


def line(name: str, spent: float, error: float, more: str = "") -> None:
    """One row of the report."""
    print(f"    {name:34s} {1e3 * spent:10.4f} ms   error {error:.1e}   {more}")


def main() -> None:
    """All five parts."""
    many_tensors()
    for size in (1000, 20_000):
        one_probe_of_a_batch(size)
    new_cell_and_k()
    cost_by_size()
    threads()


if __name__ == "__main__":
    main()
