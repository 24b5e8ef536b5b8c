"""Whether a level of dipolar modes holds an ordering with equal moments: the strong constraint.

The modes of one level at k, and at the other arms of its star, span a space. In it an ordering is sought whose moments
all have their full size in every cell. The moment of site i in a cell is linear in the real parameters p of the
combination, s_i(R) = L_i(R) p, so the constraints |L_i(R) p|² = 1 are quadratic; they are solved from several starts.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from latticedip.checks import ComplexArray, FloatArray
from latticedip.ordering.model import is_self_conjugate

#: Largest deviation of |s|² from 1 at which moments count as equal.
EQUAL_MOMENTS = 1e-7
#: Random starts beside the systematic ones.
RANDOM_STARTS = 12
#: A k whose coordinates are fractions with denominators up to this is commensurate here.
LARGEST_DENOMINATOR = 12
#: Largest number of cells in which a combination of several k is checked.
MOST_CELLS = 216


@dataclass(frozen=True, eq=False)
class Combination:
    """An ordering within a level. amplitudes: Shape (n_arms, S, 3) complex, s per arm. deviation: of |s|² from 1."""

    amplitudes: ComplexArray
    deviation: float

    @property
    def equal(self) -> bool:
        """True where all moments have their full size in every cell."""
        return self.deviation < EQUAL_MOMENTS


def combine(arms: FloatArray, spaces: list[ComplexArray]) -> Combination | None:
    """The most equal ordering in the span of the levels at some k; None where several k have no common small cell.

    arms: Shape (n_arms, 3). spaces: for each arm an orthonormal basis, shape (3S, d), real where k and −k are one.
    The result is normalised: Σ_i ⟨|s_i|²⟩ = S over cells.
    """
    phases = _phases(arms)
    if phases is None:
        return None
    single = is_self_conjugate(arms)
    count = len(spaces[0]) // 3
    parts, columns = [], []
    for arm, (basis, own) in enumerate(zip(spaces, single, strict=True)):
        for factor in (1.0,) if own else (1.0, 1j):
            parts.append(np.einsum("c,md->cmd", phases[:, arm] * factor, basis).real)
            columns += [(arm, d, factor) for d in range(basis.shape[1])]
    linear = np.concatenate(parts, axis=2).reshape(len(phases) * count, 3, -1)
    best = None
    for start in _starts(linear):
        solution = _solve(linear, start)
        moments = linear @ solution
        deviation = float(np.abs(np.einsum("ia,ia->i", moments, moments) - 1).max())
        if best is None or deviation < best[1] - EQUAL_MOMENTS:
            best = solution, deviation
        if best[1] < EQUAL_MOMENTS:
            break
    assert best is not None
    amplitudes = np.zeros((len(arms), 3 * count), dtype=complex)
    for value, (arm, d, factor) in zip(best[0], columns, strict=True):
        amplitudes[arm] += value * factor * spaces[arm][:, d]
    parted = amplitudes.reshape(len(arms), count, 3)
    weight = np.where(single, 1.0, 0.5)
    norm = float(np.einsum("a,aic->", weight, np.abs(parted) ** 2))
    return Combination(parted * np.sqrt(count / norm), best[1])


def _phases(arms: FloatArray) -> ComplexArray | None:
    """Shape (n_cells, n_arms) complex. exp(−2πi k·R) of all arms in as many cells as differ."""
    fractions = [[Fraction(float(x)).limit_denominator(LARGEST_DENOMINATOR) for x in k] for k in arms]
    exact = all(
        abs(float(f) - x) < 1e-9 for row, k in zip(fractions, arms, strict=True) for f, x in zip(row, k, strict=True)
    )
    if not exact:
        if len(arms) > 1:
            return None
        # |s|² = ½|S|² + ½ Re(S·S e^(−2iφ)): equal at three phases φ a sixth of a turn apart, it is equal at all.
        return np.exp(-2j * np.pi * np.array([[0.0], [1 / 6], [1 / 3]]))
    periods = [int(np.lcm.reduce([row[axis].denominator for row in fractions])) for axis in range(3)]
    if np.prod(periods) > MOST_CELLS and len(arms) > 1:
        return None
    if len(arms) == 1:
        order = int(np.lcm.reduce([f.denominator for f in fractions[0]]))
        return np.exp(-2j * np.pi * np.arange(order) / order)[:, None]
    turns = {
        tuple(sum(f * n for f, n in zip(row, cell, strict=True)) % 1 for row in fractions)
        for cell in itertools.product(*(range(n) for n in periods))
    }
    return np.exp(-2j * np.pi * np.array(sorted(turns), dtype=float))


def _starts(linear: FloatArray) -> list[FloatArray]:
    """Parameters to start from: all moments along a Cartesian axis as far as the space allows, then random ones."""
    size = linear.shape[2]
    starts = []
    for axis in (2, 0, 1):
        projected = linear[:, axis, :].sum(axis=0)
        first = linear[0, axis, :]
        starts += [projected, first]
    rng = np.random.default_rng(0)
    starts += list(rng.normal(size=(RANDOM_STARTS if size > 1 else 0, size)))
    usable = []
    for start in starts:
        length = np.sqrt(np.mean(np.sum((linear @ start) ** 2, axis=1)))
        if length > 1e-6:
            usable.append(start / length)
    return usable or [np.ones(size)]


def _solve(linear: FloatArray, start: FloatArray) -> FloatArray:
    if len(start) == 1:
        return start

    def residual(p: FloatArray) -> FloatArray:
        moments = linear @ p
        return np.asarray(np.einsum("ia,ia->i", moments, moments) - 1)

    def slope(p: FloatArray) -> FloatArray:
        return np.asarray(2 * np.einsum("ia,iap->ip", linear @ p, linear))

    # Imported here: loading it takes a fifth of a second, and few couplings need it.
    from scipy.optimize import least_squares

    return np.asarray(least_squares(residual, start, slope, xtol=1e-15, ftol=1e-15, gtol=1e-15, max_nfev=200).x)
