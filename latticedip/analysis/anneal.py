"""Simulated annealing with restarts, for supercells too large to try every pattern.

Kirkpatrick, Gelatt and Vecchi, Science 220, 671 (1983). Every restart begins at random at a temperature where all moves
pass, cools by a constant factor per sweep, and ends downhill; moments that may point anywhere are then brought to the
bottom of their valley by a quasi-Newton descent with the exact gradient. The same seed gives the same result on any
number of threads.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize
from scipy.spatial.transform import Rotation

from latticedip.analysis.exhaustive import best_axis
from latticedip.analysis.problem import Found, Hold, SearchProblem
from latticedip.checks import FloatArray
from latticedip.errors import InputError
from latticedip.kernels.annealing import anneal_signs, anneal_vectors, descend_best_axis
from latticedip.kernels.jit import over_rows
from latticedip.physics.supercell import COLUMNS, ROWS
from latticedip.units import EV_PER_MUB_T

#: Temperature at the start and at the end, over the rms field on a moment among random ones.
HOT, COLD_SIGNS, COLD_VECTORS = 1.5, 0.25, 1e-3
#: What holds the net moment at zero, over the rms field: for moments of the mean weight, at start and end.
PENALTY_HOT, PENALTY_COLD = 0.25, 2.0
#: Most times that a restart takes the best axis of what it found as its next direction.
AXIS_ROUNDS = 4
#: Energies closer than this part count as the same state reached by two restarts.
SAME_ENERGY = 1e-8


@dataclass(frozen=True)
class Schedule:
    """restarts, and sweeps (moves per moment) in each."""

    restarts: int
    sweeps: int

    @classmethod
    def usual(cls, n_units: int, vectors: bool) -> Schedule:
        """What a minute or so on two cores allows: more restarts for few moments."""
        if n_units <= 200:
            return cls(64, 400)
        if n_units <= 2000:
            return cls(16, 300 if vectors else 1500)
        return cls(4, 60) if vectors else cls(8, 500)


@dataclass(frozen=True, eq=False)
class Annealed:
    """found: different arrangements, lowest first. restarts: how many were made; at_best: how many found the best."""

    found: tuple[Found, ...]
    restarts: int
    at_best: int


def anneal(problem: SearchProblem, kind: str, schedule: Schedule, seed: int, keep: int) -> Annealed:
    """Anneal moments of a kind: "ising" (signs along the axes of the problem, or along each pattern's own best axis),
    "planar" (each across its axis) or "heisenberg" (free).

    Raises InputError where no restart ends with the net moment that the problem wants.
    """
    rng = np.random.SeedSequence(seed)
    seeds = rng.generate_state(schedule.restarts, dtype=np.uint64)
    if kind == "ising":
        states = _signs(problem, schedule, seeds)
    else:
        states = _vectors(problem, kind == "planar", schedule, seeds)
    admitted = sorted((s for s in states if problem.admits(problem.spread(s[1]))), key=lambda state: state[0])
    if not admitted:
        raise InputError(
            f"none of {schedule.restarts} annealing restarts ended without a net moment; the sizes or the supercell "
            "may not allow it. Take another supercell, or more restarts."
        )
    lowest = admitted[0][0]
    close = SAME_ENERGY * max(abs(lowest), 1e-300)
    at_best = sum(state[0] - lowest <= close for state in admitted)
    note = f"simulated annealing: {at_best} of {schedule.restarts} restarts found the best"
    found: list[tuple[float, Found]] = []
    for energy, units, signs, notes in admitted:
        moments = problem.spread(units)
        equal = [other for other_energy, other in found if abs(energy - other_energy) <= close]
        # Free moments often have a continuous family of states of one energy: one stands for it.
        if equal and (signs is None or any(problem.symmetry.are_same(other.moments, moments) for other in equal)):
            continue
        count = problem.multiplicity(signs, moments)
        found.append((energy, Found(moments, "annealing", count, (note, *notes))))
        if len(found) == keep:
            break
    return Annealed(tuple(f for _, f in found), schedule.restarts, at_best)


#: Energy in eV per supercell, unit vectors (n_units, 3), signs of a pattern, notes.
State = tuple[float, FloatArray, np.ndarray | None, tuple[str, ...]]


def doubled(table: FloatArray, repeat: tuple[int, int, int]) -> FloatArray:
    """Shape (n_c, n · nx · ny · (2 nz − 1) · n). A table (n_cells, n, n, n_c) as the kernels read it."""
    n = table.shape[1]
    nz = repeat[2]
    grid = table.reshape(*repeat, n, n, -1)
    along = np.arange(-(nz - 1), nz) % nz
    # From (x, y, z, target, source, component).
    return np.ascontiguousarray(grid[:, :, along].transpose(5, 4, 0, 1, 2, 3)).reshape(table.shape[-1], -1)


def _scale(table: FloatArray) -> float:
    """Rms field in eV on a unit among random signs, of the unit that feels most."""
    return max(float(np.sqrt((table**2).sum(axis=(0, 2)).max())), 1e-300)


def _schedule(problem: SearchProblem, schedule: Schedule, cold: float) -> tuple[FloatArray, FloatArray, bool]:
    temperatures = np.geomspace(HOT, cold, schedule.sweeps)
    held = problem.net_zero and problem.has_uniform_part
    if not held:
        return temperatures, np.zeros(schedule.sweeps), False
    mean = float(np.mean(problem.weights**2))
    return temperatures, np.geomspace(PENALTY_HOT, PENALTY_COLD, schedule.sweeps) / mean, True


def _signs(problem: SearchProblem, schedule: Schedule, seeds: np.ndarray) -> list[State]:
    if problem.axes is None:
        return _signs_along_best_axes(problem, schedule, seeds)
    signs, energies = _anneal_along(problem, problem.axes, schedule, seeds)
    unit = problem.unit_axes
    assert unit is not None
    return [(float(e), s[:, None] * unit, s, ()) for e, s in zip(energies, signs, strict=True)]


def _anneal_along(
    problem: SearchProblem, axes: FloatArray, schedule: Schedule, seeds: np.ndarray
) -> tuple[np.ndarray, FloatArray]:
    """Signs (n_restarts, n_units) and energies in eV of restarts along given axes (n_sites, 3)."""
    n = problem.n_units
    start, free = _free(problem)
    temperatures, penalties, held = _schedule(problem, schedule, COLD_SIGNS)
    factors = np.where(ROWS == COLUMNS, 0.5, 1.0)
    pairs = axes[:, None, ROWS] * axes[None, :, COLUMNS] + axes[:, None, COLUMNS] * axes[None, :, ROWS]
    table = np.einsum("dijc,ijc->dij", problem.table, pairs * factors)[..., None]
    unit = np.tile(axes, (n // len(axes), 1))
    scale = _scale(table[..., 0])
    linear = np.einsum("pa,pa->p", problem.linear, unit) / scale
    weights = np.ascontiguousarray((problem.weights[:, None] * unit).T) if held else np.zeros((0, n))
    signs = np.zeros((len(seeds), n), dtype=np.int8)
    energies = np.zeros(len(seeds))
    over_rows(
        anneal_signs, len(seeds), doubled(table / scale, problem.repeat)[0], problem.n_sites, *problem.repeat, linear,
        free, start, weights, temperatures, penalties, held, seeds, signs, energies, at_least=1,
    )  # fmt: skip
    return signs, energies * scale


def _signs_along_best_axes(problem: SearchProblem, schedule: Schedule, seeds: np.ndarray) -> list[State]:
    """Each restart anneals along a direction of its own, then along the best axis of what it found, and so on."""
    n_sites = problem.n_sites
    _, free = _free(problem)
    held = problem.net_zero and problem.has_uniform_part
    scale = _scale(np.sqrt((problem.table**2).sum(axis=-1)))
    tables = doubled(problem.table / scale, problem.repeat)
    pull = np.zeros(3)
    if problem.has_uniform_part:
        pull = EV_PER_MUB_T * problem.copies * problem.sample.applied_T / scale
    states: list[State] = []
    for direction, seed in zip(_directions(len(seeds), int(seeds[0])), seeds, strict=True):
        best: State | None = None
        for turn in range(AXIS_ROUNDS):
            # Two tries along one axis share its table, and the threads.
            tries = np.array([seed + np.uint64(2 * turn), seed + np.uint64(2 * turn + 1)])
            signs, energies = _anneal_along(problem, np.tile(direction, (n_sites, 1)), schedule, tries)
            pattern = signs[int(np.argmin(energies))]
            if not held:
                descend_best_axis(tables, problem.n_sites, *problem.repeat, free, problem.weights, pull, pattern)
            axes, notes = best_axis(problem, pattern)
            units = pattern[:, None] * axes
            energy = problem.form_of(units)[0]
            better = best is None or energy < best[0] - SAME_ENERGY * abs(best[0])
            if best is None or energy < best[0]:
                best = energy, units, pattern, notes
            if not better:
                break
            direction = axes[0]
        assert best is not None
        states.append(best)
    return states


def _directions(count: int, seed: int) -> FloatArray:
    """Shape (count, 3). Directions spread evenly over a half sphere (a spiral), turned at random."""
    heights = (np.arange(count) + 0.5) / count
    angles = np.pi * (3 - np.sqrt(5)) * np.arange(count)
    radius = np.sqrt(1 - heights**2)
    spiral = np.stack([radius * np.cos(angles), radius * np.sin(angles), heights], axis=1)
    return np.asarray(spiral @ Rotation.random(random_state=seed % 2**32).as_matrix())


def _free(problem: SearchProblem) -> tuple[np.ndarray, np.ndarray]:
    start = np.zeros(problem.n_units, dtype=np.int8) if problem.fixed is None else problem.fixed
    return start, np.flatnonzero(start == 0)


def _vectors(problem: SearchProblem, planar: bool, schedule: Schedule, seeds: np.ndarray) -> list[State]:
    n = problem.n_units
    scale = _scale(np.sqrt((problem.table**2).sum(axis=-1)))
    temperatures, penalties, _ = _schedule(problem, schedule, COLD_VECTORS)
    planes = np.zeros((0, 2, 3))
    if planar:
        normals = problem.unit_axes
        assert normals is not None
        planes = np.array([np.linalg.svd(normal[None])[2][1:] for normal in normals])
    vectors = np.zeros((schedule.restarts, n, 3))
    energies = np.zeros(schedule.restarts)
    over_rows(
        anneal_vectors, schedule.restarts, doubled(problem.table / scale, problem.repeat), problem.n_sites,
        *problem.repeat, np.ascontiguousarray(problem.linear / scale), planes, problem.weights, temperatures, penalties,
        seeds, vectors, energies, at_least=1,
    )  # fmt: skip
    return [(*settle(problem, units, planes), None, ()) for units in vectors]


def settle(problem: SearchProblem, units: FloatArray, planes: FloatArray) -> tuple[float, FloatArray]:
    """The bottom of the valley of unit vectors (n_units, 3): energy in eV per supercell, and the vectors there.

    planes: Shape (n_units, 2, 3), or (0, 2, 3) where vectors are free. With ``net_zero`` the net moment is brought to
    zero by multipliers (augmented Lagrangian: Hestenes 1969, Powell 1969).
    """
    form = problem.form_of
    scale = max(abs(form(units)[0]), 1e-300)
    held = problem.net_zero and problem.has_uniform_part
    hold = Hold(problem.weights, held)
    most = 3000 if len(units) <= 1000 else 500
    current = units
    for _ in range(hold.rounds):
        base = current

        def value(x: FloatArray, base: FloatArray = base) -> tuple[float, FloatArray]:
            vectors, back = _unit_vectors(x, planes, base)
            energy, slope = form(vectors)
            extra, pull = hold.penalty(vectors)
            return energy / scale + extra, back(slope / scale + pull)

        x0 = np.zeros(len(base)) if len(planes) else np.array(base).ravel()
        options = {"maxiter": most, "gtol": 1e-10, "ftol": 1e-15}
        result = minimize(value, x0, jac=True, method="L-BFGS-B", options=options)
        current = _unit_vectors(result.x, planes, base)[0]
        if hold.is_done(current):
            break
    return form(current)[0], current


def _unit_vectors(
    x: FloatArray, planes: FloatArray, base: FloatArray
) -> tuple[FloatArray, Callable[[FloatArray], FloatArray]]:
    """Unit vectors (n, 3) from free coordinates, and what turns a slope in them into one in the coordinates.

    planes given: x (n,) turns ``base`` in its plane by angles; else x (3n,) is scaled to length one.
    """
    if len(planes):
        angles = np.arctan2(np.einsum("pa,pa->p", base, planes[:, 1]), np.einsum("pa,pa->p", base, planes[:, 0])) + x
        vectors = np.cos(angles)[:, None] * planes[:, 0] + np.sin(angles)[:, None] * planes[:, 1]
        across = -np.sin(angles)[:, None] * planes[:, 0] + np.cos(angles)[:, None] * planes[:, 1]
        return vectors, lambda slope: np.asarray(np.einsum("pa,pa->p", slope, across))
    raw = x.reshape(-1, 3)
    lengths = np.linalg.norm(raw, axis=1)[:, None]
    vectors = raw / lengths

    def back(slope: FloatArray) -> FloatArray:
        inside = np.einsum("pa,pa->p", slope, vectors)[:, None] * vectors
        return np.asarray(((slope - inside) / lengths).ravel())

    return vectors, back
