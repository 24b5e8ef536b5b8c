"""Which phases the waves of an ordering take over all cells: a finite set, a circle, or a torus.

In the cell at R the wave at k has turned by θ = k·R (in turns, modulo 1). Over all R the phases of several waves fill
evenly the group of all θ that obey every relation of the k: whole numbers n with Σ n_m k_m a reciprocal lattice vector
give Σ n_m θ_m = 0 (Weyl 1916). A single k whose relation is n k = 0 takes n phases; without a relation every phase
occurs alike; a third harmonic follows its fundamental, and two independent k take all pairs of phases.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from math import lcm

import numpy as np

from latticedip.checks import FloatArray, frozen

#: Largest whole number in a relation: a wave that repeats only after more cells than this counts as incommensurate.
MOST_CELLS = 24
#: k = n/m holds within this (as for the k of an ordering).
SAME_K = 1e-9
#: Combinations of whole numbers tried as relations.
MOST_TRIED = 500_000
#: Relations between all k at once are looked for with whole numbers up to this at least.
LEAST_REACH = 2
#: Phases listed one by one.
MOST_LISTED = 200_000
#: A coordinate of k this close to a fraction with a small denominator, without being it, is worth a remark.
NEARLY = 2e-3
SMALL_DENOMINATORS = (2, 3, 4, 5, 6)


@dataclass(frozen=True, eq=False)
class PhaseSpace:
    """All phases that occur: one of `listed` plus any multiple of the rows of `free`, all equally often.

    listed: Shape (n, n_k) float, in turns. free: Shape (n_free, n_k) int; whole numbers of turns per free turn.
    relations: Shape (n, n_k) int. Rows n with Σ n_m θ_m whole; looked for only where something is free.
    complete: False where there are so many k that relations between them were not looked for; then `listed` holds the
        phases of cells drawn at random.
    """

    listed: FloatArray
    free: np.ndarray
    relations: np.ndarray
    complete: bool = True

    @property
    def n_free(self) -> int:
        """Number of independent phases that take every value: 0 for a commensurate ordering."""
        return len(self.free)

    def holds(self, turns: FloatArray, tolerance: float = 1e-3) -> bool:
        """True where phases (n_k,), in turns, occur (within the tolerance); always where `complete` is False."""
        if not self.complete:
            return True
        if self.n_free:
            sums = self.relations @ turns
            slack = tolerance * np.maximum(1, np.abs(self.relations).sum(axis=1))
            return bool(np.all(np.abs(sums - np.round(sums)) <= slack))
        left = turns - self.listed
        return bool(np.any(np.abs(left - np.round(left)).max(axis=1, initial=0.0) <= tolerance))


def phase_space(k: FloatArray, *, samples: int = 2**14, seed: int = 0) -> PhaseSpace:
    """Find the phases that the waves at k (n_k, 3) take over all cells.

    samples, seed: cells drawn where the k are too many to be related one by one.
    """
    none = np.zeros((0, len(k)), dtype=int)
    periods = _periods(k)
    if periods is not None and np.prod(periods) <= MOST_LISTED:
        cells = np.array(list(itertools.product(*(range(n) for n in periods))), dtype=float)
        return PhaseSpace(frozen(_distinct((cells @ k.T) % 1.0)), none, none)
    reach = _reach(len(k))
    if reach < LEAST_REACH:
        rng = np.random.default_rng(seed)
        # Products up to 2**20 leave ten digits of every phase.
        cells = rng.integers(0, 2**20, size=(samples, 3)).astype(float)
        return PhaseSpace(frozen((cells @ k.T) % 1.0), none, none, complete=False)
    relations = _relations(k, reach)
    orders, turn = _diagonal(relations, len(k))
    steps = list(itertools.product(*(range(d) for d in orders)))
    listed = np.array(steps, dtype=float).reshape(len(steps), len(orders)) / orders @ turn[:, : len(orders)].T
    rows = np.array(relations, dtype=int).reshape(-1, len(k))
    return PhaseSpace(frozen(_distinct(listed % 1.0)), turn[:, len(orders) :].T, rows)


def nearly_commensurate(k: FloatArray) -> list[tuple[float, str]]:
    """Coordinates of k close to a simple fraction without being it, each with that fraction ("1/3")."""
    close = [(float(value), close_fraction(float(value), SMALL_DENOMINATORS, NEARLY)) for value in np.ravel(k)]
    return list(dict.fromkeys((value, str(fraction)) for value, fraction in close if fraction))


def close_fraction(value: float, denominators: Sequence[int], within: float) -> Fraction | None:
    """The first fraction with one of the denominators (0 among them) closer to a value than ``within``, but not it."""
    for denominator in denominators:
        whole = round(value * denominator)
        if SAME_K < abs(value - whole / denominator) < within:
            return Fraction(whole, denominator)
    return None


def _periods(k: FloatArray) -> list[int] | None:
    """Cells along each axis after which every wave repeats; None where one does not within MOST_CELLS."""
    periods = []
    for axis in range(3):
        period = 1
        for value in k[:, axis]:
            fraction = Fraction(float(value)).limit_denominator(MOST_CELLS)
            if abs(float(fraction) - value) > SAME_K:
                return None
            period = lcm(period, fraction.denominator)
        periods.append(period)
    return periods


def _reach(n_k: int) -> int:
    """Largest whole number tried in relations between n_k vectors; 0 where none can be."""
    reach = MOST_CELLS
    while reach and (2 * reach + 1) ** n_k > MOST_TRIED:
        reach -= 1
    return reach


def _relations(k: FloatArray, reach: int) -> list[list[int]]:
    """A basis (rows, in echelon form) of the whole numbers n with Σ n_m k_m whole.

    Tried are pairs of k with whole numbers up to MOST_CELLS, and all k together up to ``reach``.
    """
    basis: list[list[int]] = []
    groups: list[tuple[tuple[int, ...], int]] = [
        (pair, MOST_CELLS) for pair in itertools.combinations(range(len(k)), 2)
    ]
    for members, most in [*groups, (tuple(range(len(k))), reach)]:
        for row in _whole_sums(k[list(members)], most):
            whole = [0] * len(k)
            for place, value in zip(members, row, strict=True):
                whole[place] = int(value)
            basis = _with_row(basis, whole)
    return basis


def _whole_sums(k: FloatArray, reach: int) -> np.ndarray:
    """Shape (n, n_k) int. All whole numbers up to ``reach`` with Σ n_m k_m whole, small ones first."""
    steps = np.arange(-reach, reach + 1)
    grid = np.stack(np.meshgrid(*([steps] * len(k)), indexing="ij"), axis=-1).reshape(-1, len(k))
    total = grid @ k
    # The sum of many terms carries the tolerance of each.
    bound = SAME_K * np.maximum(1, np.abs(grid).sum(axis=1))
    found = grid[np.all(np.abs(total - np.round(total)) <= bound[:, None], axis=1)]
    return np.asarray(found[np.argsort(np.abs(found).sum(axis=1), kind="stable")])


def _with_row(basis: list[list[int]], row: list[int]) -> list[list[int]]:
    """An echelon basis of the lattice that a basis and one more row span."""
    rows = [*basis, row]
    if not any(row):
        return basis
    out: list[list[int]] = []
    for column in range(len(row)):
        while True:
            there = [r for r in rows if r[column]]
            if len(there) < 2:
                break
            pivot = min(there, key=lambda r: abs(r[column]))
            for r in there:
                if r is not pivot:
                    factor = r[column] // pivot[column]
                    r[:] = [x - factor * y for x, y in zip(r, pivot, strict=True)]
        for r in there:
            out.append(r)
            rows = [other for other in rows if other is not r]
    return out


def _diagonal(relations: list[list[int]], n: int) -> tuple[list[int], np.ndarray]:
    """Orders d and a unimodular matrix V with: the relations hold for θ = V ψ exactly where d_j ψ_j is whole.

    The diagonal form of a matrix of whole numbers by steps on rows and columns (Smith 1861), without the chain of
    divisors. Shape of V: (n, n); its last columns, beyond the orders, are free.
    """
    a = [list(row) for row in relations]
    v = [[int(i == j) for j in range(n)] for i in range(n)]
    orders: list[int] = []
    for t in range(len(a)):
        while True:
            _, i, j = min((abs(a[i][j]), i, j) for i in range(t, len(a)) for j in range(t, n) if a[i][j])
            a[t], a[i] = a[i], a[t]
            for row in (*a, *v):
                row[t], row[j] = row[j], row[t]
            for i in range(t + 1, len(a)):
                factor = a[i][t] // a[t][t]
                a[i] = [x - factor * y for x, y in zip(a[i], a[t], strict=True)]
            for j in range(t + 1, n):
                factor = a[t][j] // a[t][t]
                for row in (*a, *v):
                    row[j] -= factor * row[t]
            if not any(a[i][t] for i in range(t + 1, len(a))) and not any(a[t][t + 1 :]):
                break
        orders.append(abs(a[t][t]))
    return orders, np.array(v, dtype=int)


def _distinct(turns: FloatArray) -> FloatArray:
    """Rows that differ modulo 1, each once."""
    keys = np.round(turns * 1e7).astype(np.int64) % 10**7
    _, first = np.unique(keys, axis=0, return_index=True)
    return np.asarray(turns[np.sort(first)])
