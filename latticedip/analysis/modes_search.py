"""Where in reciprocal space the lowest dipolar mode is: a symmetric mesh, then descent from its lowest points.

Local minima of the lowest eigenvalue are smooth (where bands cross, the lower one has a ridge), except at k = 0, where
it depends on the direction and is looked at apart.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from latticedip.analysis.modes_bands import MagneticSites
from latticedip.checks import FloatArray
from latticedip.crystal.bandpath import special_points
from latticedip.crystal.kpoints import star, symmetric_mesh, symmetrized, wave_rotations
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError

#: Points of the whole mesh times magnetic sites, and the smallest and largest mesh: many sites make a small zone.
MESH_WORK, MESH_LEAST, MESH_MOST = 8192, 64, 2197
#: Mesh points from which a descent starts, for up to MANY magnetic sites and for more.
STARTS, FEW_STARTS, MANY = 12, 5, 16
#: Energies closer than this part of their scale count as equal.
EQUAL = 1e-9
#: A descent that ends this close to k = 0 (in mesh steps), and not below it, went to the limit k → 0.
NEAR_ZERO = 0.4
#: A descent this close (in mesh steps) to a lower one ends where that one does.
FOLLOWS = 0.05
#: A minimum this close to a line or point of symmetry (reduced coordinates) lies on it.
NEAR_SYMMETRY = 2e-4


@dataclass(frozen=True, eq=False)
class Minimum:
    """A local minimum of the lowest eigenvalue away from k = 0. star: Shape (n, 3), its arms, k first."""

    k: FloatArray
    energy_eV: float
    star: FloatArray


def magnetic_lattice(sites: MagneticSites) -> Crystal:
    """The magnetic sites alone, alike where mean moment and weight are: their symmetry is that of the modes."""
    crystal = sites.crystal
    kinds: dict[float, str] = {}
    names = [kinds.setdefault(round(float(mean), 9), f"M{len(kinds)}") for mean in sites.means]
    occupancies = crystal.occupancies[sites.ions]
    return Crystal(crystal.cell, crystal.positions[sites.ions], tuple(names), occupancies=occupancies)


def local_minima(sites: MagneticSites) -> tuple[list[Minimum], np.ndarray]:
    """Local minima at k ≠ 0 found by descent from a mesh, lowest first, and the operations on k.

    A search, not a proof: a minimum narrower than the mesh step can be missed.
    """
    lattice = magnetic_lattice(sites)
    rotations = wave_rotations(lattice)
    wanted = int(np.clip(MESH_WORK / len(sites.ions), MESH_LEAST, MESH_MOST))
    mesh, step = symmetric_mesh(lattice, wanted, rotations)
    points = np.concatenate([mesh[1:], _special(lattice)])
    energies = sites.lowest(points)
    at_zero = float(sites.lowest(np.zeros((1, 3)))[0])
    scale = sites.scale_eV
    starts = _spread(points, energies, step, STARTS if len(sites.ions) <= MANY else FEW_STARTS)
    k, found = descend(sites.lowest, starts, step, scale)
    best: list[Minimum] = []
    for index in np.argsort(found, kind="stable"):
        vector, energy = k[index], float(found[index])
        near_zero = np.abs((vector - np.round(vector)) / step).max() < NEAR_ZERO
        if near_zero and energy >= at_zero - EQUAL * scale:
            continue
        exact = symmetrized(vector, rotations, NEAR_SYMMETRY)
        at_exact = float(sites.lowest(exact[None])[0])
        if at_exact <= energy + EQUAL * scale:
            vector, energy = exact, at_exact
        vector = _tidy(vector)
        if any(_in_star(vector, other.star) for other in best):
            continue
        best.append(Minimum(vector, energy, star(vector, rotations)))
    return sorted(best, key=lambda minimum: minimum.energy_eV), rotations


def _special(lattice: Crystal) -> FloatArray:
    try:
        _, points = special_points(lattice)
    except InputError:
        # A mesh alone serves where the lattice has no standard path.
        return np.zeros((0, 3))
    vectors = np.array(list(points.values()))
    return vectors[np.any(np.abs(vectors - np.round(vectors)) > 1e-9, axis=1)]


def _spread(points: FloatArray, energies: FloatArray, step: FloatArray, count: int) -> FloatArray:
    """The ``count`` lowest points, none within a mesh step and a half of a lower one."""
    chosen: list[int] = []
    for i in np.argsort(energies, kind="stable"):
        gaps = points[chosen] - points[i]
        gaps -= np.round(gaps)
        if not np.any(np.all(np.abs(gaps) <= 1.5 * step, axis=1)):
            chosen.append(int(i))
        if len(chosen) == count:
            break
    return points[chosen]


def descend(
    lowest: Callable[[FloatArray], FloatArray], starts: FloatArray, step: FloatArray, scale: float
) -> tuple[FloatArray, FloatArray]:
    """Newton descent from several starts at once, derivatives by differences, within a trust radius.

    step: Shape (3,), unit of length along each axis. Returns k (n, 3) and energies (n,), of descents that met one only.
    Along a direction of negative
    curvature it goes down however small the slope, so that it does not rest on a saddle.
    """
    offsets = _stencil()
    x = starts / step
    energy = lowest(x * step)
    radius = np.full(len(x), 0.5)
    follows = np.zeros(len(x), dtype=bool)
    for _ in range(60):
        _stop_followers(x, energy, radius, follows, step)
        active = np.flatnonzero(radius > 1e-6)
        if len(active) == 0:
            break
        h = np.clip(0.1 * radius[active], 1e-3, 0.05)
        around = x[active, None] + h[:, None, None] * offsets[None]
        values = lowest((around.reshape(-1, 3)) * step).reshape(len(active), -1)
        moves = np.array(
            [_newton_step(v, e, d, r) for v, e, d, r in zip(values, energy[active], h, radius[active], strict=True)]
        )
        trial = x[active] + moves
        reached = lowest(trial * step)
        lower = reached < energy[active] - 1e-14 * scale
        length = np.linalg.norm(moves, axis=1)
        x[active[lower]] = trial[lower]
        energy[active[lower]] = reached[lower]
        radius[active] = np.where(lower, np.clip(2 * length, 1e-6, 1.0), np.minimum(radius[active], length + 1e-9) / 4)
    return x[~follows] * step, energy[~follows]


def _stop_followers(
    x: FloatArray, energy: FloatArray, radius: FloatArray, follows: np.ndarray, step: FloatArray
) -> None:
    """Give up descents that have come close to a lower one at k or −k."""
    order = np.argsort(energy, kind="stable")
    for place, i in enumerate(order):
        ahead = order[:place][~follows[order[:place]]]
        for sign in (1, -1):
            gaps = (x[ahead] - sign * x[i]) * step
            gaps = (gaps - np.round(gaps)) / step
            if np.any(np.abs(gaps).max(axis=1) < FOLLOWS):
                radius[i] = 0.0
                follows[i] = True


def _stencil() -> FloatArray:
    unit = np.eye(3)
    rows = [sign * unit[a] for a in range(3) for sign in (1, -1)]
    rows += [s * unit[a] + t * unit[b] for a, b in ((0, 1), (0, 2), (1, 2)) for s in (1, -1) for t in (1, -1)]
    return np.array(rows)


def _newton_step(values: FloatArray, centre: float, h: float, radius: float) -> FloatArray:
    gradient = (values[0:6:2] - values[1:6:2]) / (2 * h)
    hessian = np.diag((values[0:6:2] + values[1:6:2] - 2 * centre) / h**2)
    for i, (a, b) in enumerate(((0, 1), (0, 2), (1, 2))):
        pp, pm, mp, mm = values[6 + 4 * i : 10 + 4 * i]
        hessian[a, b] = hessian[b, a] = (pp - pm - mp + mm) / (4 * h**2)
    curvature, axes = np.linalg.eigh(hessian)
    stiff = max(float(np.abs(curvature).max()), 1e-300)
    slope = axes.T @ gradient
    move = -slope / np.maximum(np.abs(curvature), 1e-6 * stiff)
    down = (curvature < -1e-4 * stiff) & (np.abs(move) < 0.1 * radius)
    move[down] = np.where(slope[down] > 0, -radius, radius)
    length = float(np.linalg.norm(move))
    return np.asarray(axes @ (move if length <= radius else move * (radius / length)))


def _tidy(k: FloatArray) -> FloatArray:
    """k in (−½, ½], a coordinate within 1e-9 of a fraction with a small denominator set to it."""
    wrapped = k - np.ceil(k - 0.5 - 1e-9)
    for denominator in (1, 2, 3, 4, 5, 6, 8):
        near = np.round(wrapped * denominator) / denominator
        wrapped = np.where(np.abs(wrapped - near) < 1e-9, near + 0.0, wrapped)
    return np.asarray(wrapped)


def _in_star(k: FloatArray, arms: FloatArray) -> bool:
    for sign in (1, -1):
        gaps = sign * arms - k
        gaps -= np.round(gaps)
        if np.any(np.all(np.abs(gaps) < 1e-4, axis=1)):
            return True
    return False
