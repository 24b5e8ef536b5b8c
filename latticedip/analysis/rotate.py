"""Turning a whole pattern rigidly: the direction in which its dipolar energy is lowest and highest.

Exchange usually fixes the pattern, the dipolar interaction its direction. For a collinear pattern m_j = a_j û the
energy is a quadratic form of û, with a net moment in an applied field a linear term beside it:

    E(û) = û·Q·û − g·û,   Q_ab = −Σ_k w_k Re Σ_ij a*_i T_ij,ab a_j + (µ0/2V) |M|² N_ab,   g = |M| B_applied

so its stationary points on the sphere solve (Q − λ) û = g/2. For other patterns E is a quadratic form of the nine
elements of the rotation matrix: evaluated on a grid of all rotations, then followed down from the best of them.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from itertools import pairwise

import numpy as np
from scipy.optimize import brentq, minimize
from scipy.spatial.transform import Rotation

from latticedip.checks import FloatArray, frozen
from latticedip.ordering.model import Ordering
from latticedip.physics.energy import dipolar_energy, require_ions, weighted_couplings
from latticedip.sample import Sample
from latticedip.units import EV_PER_MUB_T, MU0_T_A3_PER_MUB

#: Singular values of the moments below this part of the largest count as zero: collinear, coplanar.
SHAPE_TOLERANCE = 1e-9
#: Descents begin at this many rotations of the grid at most, so far apart (degrees).
MAX_STARTS, APART_DEG = 12, 25.0
#: Energies closer than this part of their scale count as equal when directions are degenerate.
DEGENERATE = 1e-9


@dataclass(frozen=True, eq=False)
class Orientation:
    """Best and worst orientation of one pattern under a rigid turn of all its moments.

    easy_rotation, hard_rotation: Shape (3, 3) float. They turn the given pattern to lowest and highest energy.
    easy_axis_cart, hard_axis_cart: Shape (3,) unit vectors: the direction of the moments of a collinear pattern, the
        normal of the plane of a coplanar one, None for other patterns (then the rotations alone say it).
    axis_meaning: "moment", "plane normal" or "none".
    easy_eV, hard_eV: energy per cell there, all parts that depend on direction.
    stationary: for a collinear pattern all stationary directions with their energies (eV per cell), lowest first.
    notes: degeneracies.
    """

    easy_rotation: FloatArray
    hard_rotation: FloatArray
    easy_axis_cart: FloatArray | None
    hard_axis_cart: FloatArray | None
    axis_meaning: str
    easy_eV: float
    hard_eV: float
    stationary: tuple[tuple[FloatArray, float], ...] = ()
    notes: tuple[str, ...] = ()


def best_orientation(ordering: Ordering, *, sample: Sample | None = None, tol: float = 1e-10) -> Orientation:
    """Turn a pattern rigidly to its lowest and highest energy (dipolar, shape and applied field).

    Raises InputError where the ordering carries no moments or the crystal is not periodic in three directions.
    """
    require_ions(ordering)
    specimen = Sample() if sample is None else sample
    stacked = np.concatenate([ordering.components.real, ordering.components.imag]).reshape(-1, 3)
    _, values, axes = np.linalg.svd(stacked, full_matrices=True)
    rank = int(np.sum(values > SHAPE_TOLERANCE * values[0]))
    if rank == 1:
        return _collinear(ordering, specimen, tol, _canonical(ordering, axes[0]))
    return _general(ordering, specimen, tol, axes[2] if rank == 2 else None)


def _canonical(ordering: Ordering, axis: FloatArray) -> FloatArray:
    """The sign of the axis that the first moment (or the net moment) points along."""
    along = ordering.net_moment @ axis
    if abs(along) < 1e-9:
        flat = (ordering.components.real @ axis).ravel()
        flat = flat if np.abs(flat).max() > 1e-9 else (ordering.components.imag @ axis).ravel()
        along = flat[np.argmax(np.abs(flat) > 1e-9 * np.abs(flat).max())]
    return axis if along >= 0 else -axis


def quadratic_form(ordering: Ordering, sample: Sample, tol: float, axis: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Q (3, 3) and g (3,) in eV per cell of a collinear pattern along ``axis``: E(û) = û·Q·û − g·û."""
    form = np.zeros((3, 3))
    for weight, mean, tensors in weighted_couplings(ordering, tol):
        amplitude = mean @ axis
        form -= weight * np.einsum("i,ijab,j->ab", amplitude.conj(), tensors, amplitude, optimize=True).real
    moment = float(ordering.net_moment @ axis)
    form += 0.5 * MU0_T_A3_PER_MUB / ordering.crystal.volume_A3 * moment**2 * sample.demagnetizing_tensor
    return 0.5 * (form + form.T) * EV_PER_MUB_T, moment * sample.applied_T * EV_PER_MUB_T


def stationary_directions(form: FloatArray, linear: FloatArray) -> list[tuple[FloatArray, float]]:
    """All stationary unit vectors of û·Q·û − g·û with their energies, lowest first.

    (Q − λ)û = g/2 with |û| = 1 gives Σ_i (g_i/2)²/(q_i − λ)² = 1 in the eigenframe of Q. Where g has no part along an
    eigenvector, λ may equal its eigenvalue (the hard case of trust-region methods: Moré and Sorensen 1983). Without g
    these are the three eigenvectors, each standing for its opposite too.
    """
    values, vectors = np.linalg.eigh(form)
    if _is_free(form, linear):
        return [(vectors[:, i], float(values[i])) for i in range(3)]
    half = 0.5 * (vectors.T @ linear)
    scale = max(float(np.abs(values).max()), float(np.abs(half).max()))
    levels, half = values / scale, half / scale
    active = np.abs(half) > 1e-14
    candidates = []
    for origin, shift in _multipliers(levels[active], half[active]):
        gaps = (levels - origin) - shift
        candidates.append(np.where(active, half / np.where(active, gaps, 1.0), 0.0))
    for i in np.flatnonzero(~active):
        # λ = q_i: the part along the eigenvectors of this eigenvalue is free and takes up the missing length.
        if np.any(active & (np.abs(levels - levels[i]) <= DEGENERATE)):
            continue
        rest = np.where(active, half / np.where(active, levels - levels[i], 1.0), 0.0)
        missing = 1.0 - float(rest @ rest)
        if missing >= 0:
            for sign in (1.0, -1.0):
                full = rest.copy()
                full[i] = sign * np.sqrt(missing)
                candidates.append(full)
    directions = [vectors @ (c / np.linalg.norm(c)) for c in candidates]
    energies = [float(u @ form @ u - linear @ u) for u in directions]
    order = np.argsort(energies, kind="stable")
    return [(directions[i], energies[i]) for i in order]


def _is_free(form: FloatArray, linear: FloatArray) -> bool:
    """True where the linear term is nothing beside the quadratic one."""
    return bool(np.abs(linear).max() <= 1e-12 * float(np.abs(form).max()))


def _multipliers(levels: FloatArray, half: FloatArray) -> list[tuple[float, float]]:
    """All λ with Σ h²/(q − λ)² = 1 for ascending q, each as (nearest q, distance from it), which keeps small distances.

    At a root every term is at most 1, so that λ keeps |h| away from each q; there the sum minus 1 is not negative.
    """
    reach = float(np.linalg.norm(half)) * (1 + 1e-9)
    edge = np.abs(half) * (1 - 1e-9)

    def excess(shift: float, origin: float) -> float:
        return float(np.sum((half / (levels - origin - shift)) ** 2)) - 1.0

    def slope(shift: float, origin: float) -> float:
        return float(np.sum(2 * half**2 / (levels - origin - shift) ** 3))

    def root(low: float, high: float, origin: float) -> tuple[float, float]:
        return origin, float(brentq(excess, low, high, args=(origin,), xtol=1e-300, rtol=1e-15, maxiter=1000))

    first, last = float(levels[0]), float(levels[-1])
    found = [root(-reach, -_nearest_edge(levels, edge, first), first)]
    for i, (low, high) in enumerate(pairwise(levels.tolist())):
        # Between two levels the sum falls, then rises: none, one or two roots, one on each side of the bottom.
        a, b = float(edge[i]), float(high - low - edge[i + 1])
        if a >= b or slope(a, low) >= 0 or slope(b, low) <= 0:
            continue
        bottom = float(brentq(slope, a, b, args=(low,), xtol=1e-300, rtol=1e-15, maxiter=1000))
        if excess(bottom, low) < 0:
            found += [root(a, bottom, low), root(low + bottom - high, -float(edge[i + 1]), high)]
    found.append(root(_nearest_edge(levels, edge, last), reach, last))
    return found


def _nearest_edge(levels: FloatArray, edge: FloatArray, level: float) -> float:
    """The widest margin that the terms of one level, which may occur more than once, ask for."""
    return float(edge[levels == level].max())


def _collinear(ordering: Ordering, sample: Sample, tol: float, axis: FloatArray) -> Orientation:
    form, linear = quadratic_form(ordering, sample, tol, axis)
    points = stationary_directions(form, linear)
    notes = []
    easy, hard = points[0][0], points[-1][0]
    if _is_free(form, linear):
        values = np.array([energy for _, energy in points])
        # What the sums cannot resolve, and what rounding leaves of a symmetry, is no anisotropy.
        same = DEGENERATE * float(np.abs(form).max()) + 2 * dipolar_energy(ordering, tol=tol).error_bound_eV
        easy, easy_note = _nearest_in(axis, points, values, values[0], same, "easy")
        hard, hard_note = _nearest_in(axis, points, values, values[-1], same, "hard")
        notes = [note for note in (easy_note, hard_note) if note]
    return Orientation(
        turn(axis, easy),
        turn(axis, hard),
        easy,
        hard,
        "moment",
        points[0][1],
        points[-1][1],
        tuple(points),
        tuple(dict.fromkeys(notes)),
    )


def _nearest_in(
    axis: FloatArray,
    points: list[tuple[FloatArray, float]],
    values: FloatArray,
    wanted: float,
    same: float,
    word: str,
) -> tuple[FloatArray, str]:
    """The unit vector of one (perhaps degenerate) level that needs the least turn from ``axis``."""
    level = [direction for (direction, _), value in zip(points, values, strict=True) if abs(value - wanted) <= same]
    if len(level) == 3:
        return axis, "the energy does not depend on the direction of the moments"
    basis = np.array(level)
    inside = basis.T @ (basis @ axis)
    if np.linalg.norm(inside) <= 1e-6:
        # The given direction is across the plane: take the first Cartesian axis that has a part in it.
        inside = max((basis.T @ basis[:, i] for i in range(3)), key=lambda part: round(float(np.linalg.norm(part)), 6))
    direction = inside / np.linalg.norm(inside)
    note = (
        f"the {word} direction is free in a plane; the one nearest to the given direction is taken"
        if len(level) == 2
        else ""
    )
    return direction, note


def turn(start: FloatArray, end: FloatArray) -> FloatArray:
    """Shape (3, 3). The smallest rotation that takes unit vector ``start`` to ``end``."""
    across = end - (end @ start) * start
    if np.linalg.norm(across) < 1e-14:
        # No turn or half a turn, in any plane; the smallest component of start picks one that is never degenerate.
        across = np.eye(3)[int(np.argmin(np.abs(start)))]
    # A short rest is mostly rounding along start: what is left of it after a second pass is exactly across.
    across = across / np.linalg.norm(across)
    across -= (across @ start) * start
    across /= np.linalg.norm(across)
    cosine, sine = end @ start, end @ across
    plane = np.outer(start, start) + np.outer(across, across)
    swap = np.outer(across, start) - np.outer(start, across)
    return np.asarray(np.eye(3) + (cosine - 1) * plane + sine * swap)


def rotation_form(ordering: Ordering, sample: Sample, tol: float) -> tuple[FloatArray, FloatArray]:
    """K (9, 9) and g (9,) in eV per cell of any pattern turned by R: E(R) = vec(R)·K·vec(R) − g·vec(R)."""
    kernel = np.zeros((9, 9))
    for weight, mean, tensors in weighted_couplings(ordering, tol):
        # E = Σ R_ac R_bd K[ac, bd] with K = −w Re Σ_ij S*_ic T_ij,ab S_jd.
        part = np.einsum("ic,ijab,jd->acbd", mean.conj(), tensors, mean, optimize=True).real
        kernel -= weight * part.reshape(9, 9)
    net = ordering.net_moment
    stray = 0.5 * MU0_T_A3_PER_MUB / ordering.crystal.volume_A3 * sample.demagnetizing_tensor
    kernel += np.einsum("ab,c,d->acbd", stray, net, net).reshape(9, 9)
    kernel = 0.5 * (kernel + kernel.T) * EV_PER_MUB_T
    return kernel, np.outer(sample.applied_T, net).ravel() * EV_PER_MUB_T


def _general(ordering: Ordering, sample: Sample, tol: float, normal: FloatArray | None) -> Orientation:
    kernel, linear = rotation_form(ordering, sample, tol)
    scale = max(float(np.abs(kernel).max()), float(np.abs(linear).max()), 1e-300)

    def search(sign: float) -> tuple[FloatArray, float]:
        ends = [_descend(sign * kernel / scale, sign * linear / scale, start) for start in starts(sign)]
        lowest = min(energy for energy, _ in ends)
        # Of equally good ends the least turn.
        best = max((r for energy, r in ends if energy <= lowest + DEGENERATE), key=lambda r: float(np.trace(r)))
        return best, float(best.ravel() @ kernel @ best.ravel() - linear @ best.ravel())

    def starts(sign: float) -> list[FloatArray]:
        grid = _grid()
        flat = grid.reshape(-1, 9)
        energies = sign * (np.einsum("na,ab,nb->n", flat, kernel, flat) - flat @ linear)
        chosen = [0]
        for i in np.argsort(energies, kind="stable"):
            # tr(AᵀB) = 1 + 2 cos(angle between A and B).
            if np.max(flat[chosen] @ flat[i]) < 1 + 2 * np.cos(np.radians(APART_DEG)):
                chosen.append(int(i))
            if len(chosen) == MAX_STARTS:
                break
        return [grid[i] for i in chosen]

    easy, easy_energy = search(1.0)
    hard, hard_energy = search(-1.0)
    if normal is None:
        return Orientation(easy, hard, None, None, "none", easy_energy, hard_energy)
    return Orientation(easy, hard, easy @ normal, hard @ normal, "plane normal", easy_energy, hard_energy)


@cache
def _grid() -> FloatArray:
    """Shape (1537, 3, 3). Rotations about 15° apart, the identity first."""
    cube = Rotation.create_group("O").as_matrix()
    cube = cube[np.argsort(-np.trace(cube, axis1=1, axis2=2), kind="stable")]
    # Quaternions in the cell around the identity that the cube's rotations carry over the rest.
    axis = np.array([-0.3, -0.1, 0.1, 0.3])
    vectors = np.stack(np.meshgrid(axis, axis, axis, indexing="ij"), axis=-1).reshape(-1, 3)
    inner = Rotation.from_quat(np.concatenate([vectors, np.ones((len(vectors), 1))], axis=1)).as_matrix()
    grid = np.einsum("iab,jbc->ijac", inner, cube).reshape(-1, 3, 3)
    return frozen(np.concatenate([np.eye(3)[None], grid]))


def _descend(kernel: FloatArray, linear: FloatArray, start: FloatArray) -> tuple[float, FloatArray]:
    """Minimise vec(R)·K·vec(R) − g·vec(R) over rotations near ``start`` with the exact gradient."""
    rotation = start
    energy = np.inf
    for _ in range(5):
        # A rotation vector is a good chart only near its origin: restart it where the last descent ended.
        base = rotation

        def value(w: FloatArray, base: FloatArray = base) -> tuple[float, FloatArray]:
            turned = Rotation.from_rotvec(w).as_matrix() @ base
            flat = turned.ravel()
            slope = (2 * kernel @ flat - linear).reshape(3, 3)
            # dR = [δ]× R for a small extra turn δ, and δ = J(w) dw with the left Jacobian of the rotation vector.
            torque = slope @ turned.T
            left = np.array([torque[2, 1] - torque[1, 2], torque[0, 2] - torque[2, 0], torque[1, 0] - torque[0, 1]])
            return float(flat @ kernel @ flat - linear @ flat), left_jacobian(w).T @ left

        result = minimize(value, np.zeros(3), jac=True, method="BFGS", options={"gtol": 1e-12, "maxiter": 200})
        rotation = Rotation.from_rotvec(result.x).as_matrix() @ base
        done = energy - result.fun < 1e-14
        energy = float(result.fun)
        if done:
            break
    left, _, right = np.linalg.svd(rotation)
    return energy, left @ right


def left_jacobian(w: FloatArray) -> FloatArray:
    """Shape (3, 3). Left Jacobian of the rotation vector: exp([w + dw]×) ≈ exp([J dw]×) exp([w]×)."""
    angle = float(np.linalg.norm(w))
    skew = np.array([[0, -w[2], w[1]], [w[2], 0, -w[0]], [-w[1], w[0], 0]])
    if angle < 1e-6:
        return np.asarray(np.eye(3) + skew / 2 + skew @ skew / 6)
    a, b = (1 - np.cos(angle)) / angle**2, (angle - np.sin(angle)) / angle**3
    return np.asarray(np.eye(3) + a * skew + b * skew @ skew)
