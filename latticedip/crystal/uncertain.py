"""Standard uncertainties of coordinates that a symmetry ties together, and the parameters behind them.

A file states an uncertainty for every coordinate. Where the symmetry of a site fixes some of them by others, as in
(x, x, x) or (x, 2x, z), these are one parameter and change together; free parameters count as independent.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray, frozen
from latticedip.errors import InputError

if TYPE_CHECKING:
    from latticedip.crystal.model import Crystal

#: A stated uncertainty may miss what the symmetry makes of the others by this fraction: it has one or two digits.
ROUNDED = 0.34
#: Largest standard uncertainty of a fractional coordinate.
LARGEST_SU = 1.0
#: Below this a number of a projector is rounding.
ROUNDING = 1e-6


def checked_su(name: str, value: Any, shape: tuple[int, ...]) -> FloatArray:
    """Return standard uncertainties as a float array of a shape, NaN where unknown; None gives NaN throughout.

    Raises InputError for another shape, negative and infinite numbers, and numbers beyond 1 (a cell).
    """
    if value is None:
        return np.full(shape, np.nan)
    su = np.asarray(value)
    if su.dtype.kind not in "iuf" or su.shape != shape or np.any(su < 0) or np.any(np.isinf(su)):
        raise InputError(f"{name} must hold numbers of at least 0 or NaN in shape {shape}.")
    if np.any(su > LARGEST_SU):
        raise InputError(
            f"{name} holds a standard uncertainty of {np.nanmax(su):.6g} in a fractional coordinate; at most "
            f"{LARGEST_SU:g}, a whole cell, is taken."
        )
    return np.array(su, dtype=float)


def parameter_steps(allowed: FloatArray, su: FloatArray) -> FloatArray:
    """Shape (d, m) float. What one standard uncertainty of each of m independent parameters does to d coordinates.

    allowed: Shape (d, d) float. Projector onto the changes that the symmetry allows (the mean of what its operations
    do). su: Shape (d,) float, NaN or 0 where a coordinate is exact. The parameters are as many coordinates as there are
    allowed changes; the others follow from them. Where what is stated of those contradicts that by more than rounding,
    the symmetry is not that of the refinement, and each coordinate counts as a parameter of its own.
    """
    stated = np.nan_to_num(np.asarray(su, dtype=float))
    d = len(stated)
    vectors, sizes, _ = np.linalg.svd(allowed)
    rank = int(np.sum(sizes > ROUNDING * max(1.0, float(sizes.max(initial=0.0)))))
    steps = np.diag(stated)
    if 0 < rank < d and np.any(stated):
        basis = vectors[:, :rank]

        def merit(rows: list[int]) -> tuple[int, float]:
            return int(np.count_nonzero(stated[rows])), abs(float(np.linalg.det(basis[rows])))

        usable = [list(rows) for rows in itertools.combinations(range(d), rank) if merit(list(rows))[1] > 1e-3]
        if usable:
            chosen = max(usable, key=merit)
            follow = basis @ np.linalg.inv(basis[chosen]) * stated[chosen]
            follow[np.abs(follow) < ROUNDING * np.abs(follow).max()] = 0.0
            expected = np.sqrt(np.sum(follow**2, axis=1))
            listed = stated > 0
            if np.all(np.abs(expected - stated)[listed] <= ROUNDED * np.maximum(expected, stated)[listed]):
                steps = follow
    return np.asarray(steps[:, np.any(steps != 0.0, axis=0)])


def carried_su(turn: FloatArray, allowed: FloatArray, su: FloatArray) -> FloatArray:
    """Shape (d,) float. Standard uncertainties of ``turn @ x``, NaN where no coordinate that enters has one.

    turn: Shape (d, d) float. allowed, su: of the coordinates x, as `parameter_steps`.
    """
    known = ~np.isnan(su)
    if not np.any(known):
        return np.full(len(su), np.nan)
    enters = np.abs(turn) > 1e-9 * np.abs(turn).max()
    combined = np.linalg.norm(turn @ parameter_steps(allowed, su), axis=1)
    return np.where((enters & known).any(axis=1), combined, np.nan)


@dataclass(frozen=True, eq=False)
class Tied:
    """Atoms that change together, with what one unit of each component of the first atom does to them.

    sites: Shape (n,) int. turns: Shape (n, 3, 3) float: change of atom j = turns[j] @ change of the first.
    allowed: Shape (3, 3) float. Projector onto the changes that the symmetry of the first atom allows.
    """

    sites: np.ndarray
    turns: FloatArray
    allowed: FloatArray


def tied_groups(crystal: Crystal, sites: list[int], turn: Any) -> list[list[tuple[int, FloatArray]]]:
    """Sites of one label, element and kind put together with the first of them that ``turn(first, site)`` carries."""
    groups: dict[tuple[str, str, int], list[tuple[int, FloatArray]]] = {}
    for site in sites:
        kind = (crystal.labels[site], crystal.symbols[site])
        for (label, symbol, first), members in groups.items():
            if (label, symbol) == kind:
                found = turn(first, site)
                if found is not None:
                    members.append((site, found))
                    break
        else:
            groups[(*kind, site)] = [(site, np.eye(3))]
    return list(groups.values())


def tied_positions(crystal: Crystal, sites: list[int] | None = None) -> list[Tied]:
    """Sites (of some; None: of all) that move together; turns act on fractional coordinates."""
    from latticedip.crystal.spread import carriers
    from latticedip.crystal.symmetry import operations_of

    operations = operations_of(crystal)
    rotations = operations.rotations

    def turn(first: int, other: int) -> FloatArray | None:
        found = carriers(crystal, operations, first, other)
        return np.asarray(rotations[found[0]], dtype=float) if len(found) else None

    tied = []
    for group in tied_groups(crystal, list(range(crystal.n_sites)) if sites is None else sites, turn):
        first = group[0][0]
        stabilizer = rotations[carriers(crystal, operations, first, first)]
        allowed = stabilizer.mean(axis=0) if len(stabilizer) else np.eye(3)
        tied.append(Tied(np.array([s for s, _ in group]), np.array([t for _, t in group]), allowed))
    return tied


@dataclass(frozen=True, eq=False)
class Moves:
    """What one standard uncertainty of each of m parameters does to the atoms they move.

    sites: Shape (n,) int. steps_cart: Shape (m, n, 3) float in Å, Cartesian.
    """

    sites: np.ndarray
    steps_cart: FloatArray


def position_moves(crystal: Crystal, su: FloatArray) -> list[Moves]:
    """The independent ways in which sites are uncertain; su: Shape (n_sites, 3) float, fractional, NaN or 0: exact.

    Atoms of one label that an operation carries from the first of them move together as it says. An uncertainty is
    that of the first atom.
    """
    uncertain = [int(i) for i in np.flatnonzero(np.any(np.nan_to_num(su), axis=1))]
    found = []
    for tied in tied_positions(crystal, uncertain) if uncertain else ():
        steps = parameter_steps(tied.allowed, su[tied.sites[0]])
        if steps.size:
            moves = np.einsum("jab,bm->mja", tied.turns, steps) @ crystal.cell
            found.append(Moves(tied.sites, frozen(moves)))
    return found
