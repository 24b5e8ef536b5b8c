"""Search for orderings: every sign pattern, annealing, the whole of `propose`; time beside the error achieved.

Run with ``python benchmarks/bench_propose.py`` (add ``--quick`` for 24 moments instead of 28 and smaller supercells).
The first call of every kind compiles and is not timed. The error of a search is that of its lowest energy against
`dipolar_energy` of the ordering it returns, relative; that of the annealing is how far it stays above a known bound.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from typing import Any

import numpy as np

import latticedip as ld
from latticedip.analysis.anneal import Schedule, anneal
from latticedip.analysis.exhaustive import exhaustive, free_signs
from latticedip.analysis.problem import SearchProblem
from latticedip.physics.supercell import Supercell
from latticedip.units import DIPOLE_EV_A3_PER_MUB2

#: Lowest eigenvalue of the simple cubic array (Luttinger and Tisza 1946) in units µ0µ²/(4π a³).
CUBIC_BOUND = -2.6767886844
EDGE_A = 4.0


def timed(call: Callable[[], Any]) -> tuple[float, Any]:
    start = time.perf_counter()
    result = call()
    return time.perf_counter() - start, result


def random_problem(n: int, along: bool) -> SearchProblem:
    """A triclinic crystal of n moments without symmetry."""
    rng = np.random.default_rng(n)
    grid = np.stack(np.meshgrid(*[np.arange(4)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)[rng.permutation(64)[:n]]
    cell = np.array([[12.0, 0, 0], [1.0, 13.0, 0], [-1.5, 0.7, 14.0]])
    crystal = ld.Crystal(cell, grid / 4 + rng.uniform(-0.05, 0.05, (n, 3)), ["Mn"] * n)
    return problem_of(crystal, (1, 1, 1), np.tile([0.0, 0.6, 0.8], (n, 1)) if along else None)


def cubic_problem(repeat: tuple[int, int, int], along: bool) -> SearchProblem:
    crystal = ld.Crystal(EDGE_A * np.eye(3), [[0, 0, 0]], ["Mn"])
    return problem_of(crystal, repeat, np.array([[0, 0, 1.0]]) if along else None)


def problem_of(crystal: ld.Crystal, repeat: tuple[int, int, int], axes: np.ndarray | None) -> SearchProblem:
    supercell = Supercell(crystal, repeat, tuple(range(crystal.n_sites)))
    return SearchProblem(supercell, np.ones(crystal.n_sites), ld.Sample(), supercell.tensors(), axes=axes)


def lowest_error(problem: SearchProblem, moments: np.ndarray) -> float:
    expected = ld.dipolar_energy(problem.supercell.ordering(moments)).per_cell_eV
    return abs(problem.field.energy_eV(moments) / problem.supercell.n_cells / expected - 1)


def main() -> None:
    quick = "--quick" in sys.argv[1:]
    n = 24 if quick else 28
    print(f"Every sign pattern of {n} moments (the 10 lowest kept; reversal halves the work)")
    for name, maker in (("no symmetry", random_problem), ("simple cubic", None)):
        for along in (True, False):
            problem = maker(n, along) if maker else cubic_problem((n // 4, 2, 2), along)
            small = random_problem(8, along) if maker else cubic_problem((2, 2, 2), along)
            exhaustive(small, 10)
            _ = problem.unit_permutations
            seconds, found = timed(lambda problem=problem: exhaustive(problem, 10))
            rate = 2.0 ** len(free_signs(problem)) / seconds
            what = "along one axis  " if along else "own best axes   "
            error = lowest_error(problem, found[0].moments)
            print(f"  {name:12s} {what} {seconds:7.3f} s   {rate:9.3g} patterns/s   energy error {error:.1e}")

    print("Annealing of the simple cubic array (usual number of restarts and sweeps)")
    sizes = ((4, 4, 4), (8, 8, 8)) if quick else ((4, 4, 4), (8, 8, 8), (20, 20, 24))
    unit = DIPOLE_EV_A3_PER_MUB2 / EDGE_A**3
    for kind, along in (("ising", True), ("ising", False), ("heisenberg", False)):
        anneal(cubic_problem((2, 2, 2), along), kind, Schedule(2, 5), 0, 1)
        for repeat in sizes:
            problem = cubic_problem(repeat, along)
            schedule = Schedule.usual(problem.n_units, kind != "ising")
            seconds, result = timed(lambda p=problem, k=kind, s=schedule: anneal(p, k, s, 0, 1))
            energy = problem.field.energy_eV(result.found[0].moments) / problem.n_units / unit
            what = f"{kind}{' along z' if along else ''}"
            print(
                f"  {what:14s} {problem.n_units:5d} moments {schedule.restarts:3d} × {schedule.sweeps:4d} sweeps "
                f"{seconds:7.1f} s   above the bound {energy - CUBIC_BOUND:.1e}   {result.at_best} at the best"
            )

    print("propose, all searches together")
    cubic = ld.Crystal(EDGE_A * np.eye(3), [[0, 0, 0]], ["Mn"])
    fcc = 10 * np.array([[0, 1, 1], [1, 0, 1], [1, 1, 0]]) / 2
    pyrochlore = ld.Crystal(fcc, [[0, 0, 0], [0.5, 0, 0], [0, 0.5, 0], [0, 0, 0.5]], ["Dy"] * 4)
    cases: list[tuple[str, Callable[[], Any]]] = [
        ("simple cubic, 2 × 2 × 2", lambda: ld.propose(cubic, {"Mn": 1.0}, supercell=(2, 2, 2))),
        ("pyrochlore", lambda: ld.propose(pyrochlore, {"Dy": 1.0})),
        ("pyrochlore, no net moment", lambda: ld.propose(pyrochlore, {"Dy": 1.0}, net_zero=True)),
    ]
    for name, call in cases:
        seconds, result = timed(call)
        row = result.rows[0]
        error = abs(row.energy.per_ion_eV / ld.dipolar_energy(row.ordering).per_ion_eV - 1)
        print(f"  {name:28s} {seconds:6.2f} s   {len(result.rows)} rows   energy error {error:.1e}")


if __name__ == "__main__":
    main()
