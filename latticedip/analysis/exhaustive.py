"""Every ± pattern of a supercell, along given axes or each along its own best axis; the lowest are kept.

Patterns that an operation of the crystal carries into one another are met once: only the first of each family, sign
by sign, is kept, and the size of the family is its multiplicity. So the list holds as many different patterns as were
asked for, however many copies each of them has.
"""

from __future__ import annotations

import itertools

import numpy as np

from latticedip.analysis.problem import Found, SearchProblem
from latticedip.analysis.rotate import stationary_directions
from latticedip.checks import FloatArray
from latticedip.errors import LimitError
from latticedip.kernels.jit import over_rows
from latticedip.kernels.patterns import FAR, low_tables, search_along, search_best_axis
from latticedip.physics.boundary import NET_MOMENT_MUB
from latticedip.physics.supercell import COLUMNS, ROWS
from latticedip.units import EV_PER_MUB_T

#: Most free signs that are searched without being asked to: a matter of ten seconds on two cores.
USUAL_ALONG, USUAL_BEST_AXIS = 33, 30
#: Most free signs searched at all: a quarter of an hour.
MOST_ALONG, MOST_BEST_AXIS = 39, 36
#: Signs in the low tables, for each of the two kernels (`kernels.patterns`): their tables stay in the second cache.
LOW_ALONG, LOW_BEST_AXIS = (7, 7), (5, 7)
#: Parts of a search, whatever the number of threads: the result depends on it only where energies are equal.
CHUNKS = 64
#: Eigenvalues closer than this part of the largest count as one level, and its directions as free.
DEGENERATE = 1e-9


def free_signs(problem: SearchProblem) -> np.ndarray:
    """Places of the signs that a search runs over.

    The first is held at + where turning all signs round makes no difference, which halves the work.
    """
    if problem.fixed is not None:
        return np.flatnonzero(problem.fixed == 0)
    reversible = problem.axes is None or not np.any(problem.sample.applied_T)
    return np.arange(1 if reversible else 0, problem.n_units)


def is_searchable(problem: SearchProblem, *, insist: bool = False) -> bool:
    """True where an exhaustive search is a matter of seconds (``insist``: of minutes)."""
    usual, most = (USUAL_BEST_AXIS, MOST_BEST_AXIS) if problem.axes is None else (USUAL_ALONG, MOST_ALONG)
    return len(free_signs(problem)) <= (most if insist else usual)


def exhaustive(problem: SearchProblem, keep: int) -> list[Found]:
    """The ``keep`` lowest different patterns, lowest first; fewer where there are no more.

    Raises LimitError beyond 2³⁹ patterns (2³⁶ with each pattern's own axis).
    """
    free = free_signs(problem)
    if not is_searchable(problem, insist=True):
        raise LimitError(
            f"2^{len(free)} sign patterns are too many to try one by one. Take a smaller supercell, fix signs, or "
            'use method="annealing".'
        )
    start = np.ones(problem.n_units, dtype=np.int8) if problem.fixed is None else problem.fixed
    inverse, factors = problem.unit_permutations
    if problem.axes is not None:
        codes = _search_along(problem, free, start, inverse, factors, keep)
    else:
        codes = _search_best_axis(problem, free, start, inverse, factors, keep)
    found = []
    for code in codes:
        signs = start.copy()
        signs[free] = 1 - 2 * ((code >> np.arange(len(free))) & 1)
        directions, notes = (problem.unit_axes, ()) if problem.axes is not None else best_axis(problem, signs)
        assert directions is not None
        moments = problem.spread(signs[:, None] * directions)
        found.append(Found(moments, "exhaustive", problem.multiplicity(signs, moments), notes))
    return found


def along_form(problem: SearchProblem) -> tuple[FloatArray, FloatArray]:
    """Q (n_units, n_units) and g (n_units,) in eV of signs along given axes."""
    axes = problem.unit_axes
    assert axes is not None
    factors = np.where(ROWS == COLUMNS, 1.0, 2.0)
    # a·T·b of a symmetric T, with each off-diagonal element standing for two.
    left = axes[:, None, ROWS] * axes[None, :, COLUMNS]
    right = axes[:, None, COLUMNS] * axes[None, :, ROWS]
    form = np.einsum("pqc,pqc,c->pq", problem.dense, 0.5 * (left + right), factors)
    return form, np.einsum("pa,pa->p", problem.linear, axes)


def _net_weights(problem: SearchProblem) -> FloatArray:
    """Shape (n_c, n_units) float. What must vanish where no net moment is wanted; n_c = 0 where nothing must."""
    if not problem.net_zero or not problem.has_uniform_part:
        return np.zeros((0, problem.n_units))
    axes = problem.unit_axes
    if axes is None:
        return problem.weights[None].copy()
    return np.ascontiguousarray((problem.weights[:, None] * axes).T)


def _search_along(
    problem: SearchProblem, free: np.ndarray, start: np.ndarray, inverse: np.ndarray, factors: np.ndarray, keep: int
) -> np.ndarray:
    form, linear = along_form(problem)
    form = form - np.diag(np.diag(form))
    scale = max(float(np.abs(form).max()), float(np.abs(linear).max()), 1e-300)
    held = _held(start, free)
    linear = np.ascontiguousarray((linear + form @ held)[free] / scale)
    form = np.ascontiguousarray(form[np.ix_(free, free)] / scale)
    n_a, n_b = _split(len(free), LOW_ALONG)
    table = np.empty((1, 1 << n_a, 1 << n_b))
    low_tables(n_a, n_b, form[None], linear[None], table)
    zero = NET_MOMENT_MUB * problem.supercell.n_cells
    common = (n_a, n_b, form, linear, table[0], free, start, _net_weights(problem), zero, inverse, factors)
    return _in_chunks(search_along, len(free) - n_a - n_b, keep, common)


def axis_forms(problem: SearchProblem) -> FloatArray:
    """Shape (6, n_units, n_units) float in eV. Q of signs whose common axis is open: xx, yy, zz, yz, xz, xy."""
    return np.ascontiguousarray(np.moveaxis(problem.dense, -1, 0))


def _search_best_axis(
    problem: SearchProblem, free: np.ndarray, start: np.ndarray, inverse: np.ndarray, factors: np.ndarray, keep: int
) -> np.ndarray:
    forms = np.zeros((7, problem.n_units, problem.n_units))
    forms[:6] = axis_forms(problem)
    diagonal = np.einsum("cpp->c", forms).copy()
    forms[:, np.arange(problem.n_units), np.arange(problem.n_units)] = 0.0
    scale = max(float(np.abs(forms).max()), float(np.abs(diagonal).max()), 1e-300)
    held = _held(start, free)
    linear = np.einsum("cpq,q->cp", forms, held)
    constant = 0.5 * diagonal + 0.5 * linear @ held
    linear /= scale
    constant /= scale
    linear[6] = problem.weights
    constant[6] = problem.weights @ held
    pull = np.zeros(3)
    if problem.has_uniform_part:
        pull = EV_PER_MUB_T * problem.copies * problem.sample.applied_T / scale
    free_forms = np.ascontiguousarray(forms[:, free][:, :, free] / scale)
    free_linear = np.ascontiguousarray(linear[:, free])
    n_a, n_b = _split(len(free), LOW_BEST_AXIS)
    table = np.empty((7, 1 << n_a, 1 << n_b))
    low_tables(n_a, n_b, free_forms, free_linear, table)
    zero = NET_MOMENT_MUB * problem.supercell.n_cells
    common = (
        n_a, n_b, free_forms, free_linear, constant, table, free, start, _net_weights(problem), zero, inverse, factors,
        pull,
    )  # fmt: skip
    return _in_chunks(search_best_axis, len(free) - n_a - n_b, keep, common)


def _held(start: np.ndarray, free: np.ndarray) -> FloatArray:
    held = start.astype(float)
    held[free] = 0.0
    return held


def _split(n_free: int, most: tuple[int, int]) -> tuple[int, int]:
    low = min(n_free, sum(most))
    n_a = min(most[0], low // 2)
    return n_a, low - n_a


def _in_chunks(kernel: object, n_high: int, keep: int, common: tuple[object, ...]) -> np.ndarray:
    """Codes of the lowest patterns, lowest first.

    The first chunk is searched alone: its worst pattern is a bar for the others, which then look closely at few.
    """
    chunks = min(CHUNKS, 1 << n_high)
    energies = np.full((chunks, keep), FAR)
    codes = np.zeros((chunks, keep), dtype=np.int64)
    kernel(0, 1, chunks, *common, FAR, energies, codes)  # type: ignore[operator]
    bar = float(energies[0, -1])
    # A pattern whose energy equals the bar but for rounding is not lost.
    bar = bar if bar >= FAR else bar + 1e-9 * max(1.0, abs(bar))

    def rest(first: int, last: int) -> None:
        kernel(first + 1, last + 1, chunks, *common, bar, energies, codes)  # type: ignore[operator]

    if chunks > 1:
        over_rows(rest, chunks - 1, at_least=1)
    flat = np.flatnonzero(energies.ravel() < FAR)
    order = np.lexsort((codes.ravel()[flat], energies.ravel()[flat]))[:keep]
    return codes.ravel()[flat[order]]


def best_axis(problem: SearchProblem, signs: np.ndarray) -> tuple[FloatArray, tuple[str, ...]]:
    """The axis of lowest energy of one pattern, as (n_units, 3) equal unit vectors, and what to say of it.

    Where it is free in a plane or in space, a short lattice direction that lies there is taken.
    """
    values, pull = problem.axis_form(signs)
    scale = max(float(np.abs(values).max()), 1e-300)
    notes: tuple[str, ...] = ()
    if np.abs(pull).max() > 1e-14 * scale:
        axis = stationary_directions(values, pull)[0][0]
    else:
        levels, vectors = np.linalg.eigh(values)
        space = vectors[:, levels <= levels[0] + DEGENERATE * scale]
        axis = _neat_direction(problem, space)
        if space.shape[1] > 1:
            where = "in a plane" if space.shape[1] == 2 else "in space"
            notes = (f"the direction of the moments is free {where}; one short lattice direction is taken",)
    return np.tile(axis, (problem.n_units, 1)), notes


def _neat_direction(problem: SearchProblem, space: FloatArray) -> FloatArray:
    """A unit vector in the span of the columns: a short lattice direction where one lies there."""
    steps = list(itertools.product((0, 1, -1, 2, -2), repeat=3))
    steps.sort(key=lambda v: (sum(x * x for x in v), *(-x for x in v)))
    directions = np.array(steps[1:]) @ problem.supercell.crystal.cell
    directions /= np.linalg.norm(directions, axis=1)[:, None]
    # The c axis first, as a free choice of one direction usually goes.
    directions = np.concatenate([directions[2:3], directions])
    inside = directions @ space
    lengths = np.linalg.norm(inside, axis=1)
    best = int(np.argmax(lengths > 1 - 1e-9)) if np.any(lengths > 1 - 1e-9) else int(np.argmax(np.round(lengths, 6)))
    axis = space @ inside[best]
    axis[np.abs(axis) < 1e-12] = 0.0
    return np.asarray(axis / np.linalg.norm(axis))
