"""Targets grouped by place: those that lie together share one list of images."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latticedip.checks import FloatArray
from latticedip.sums.lattice import ReducedLattice

#: Targets wanted in each box, and the smallest and largest edge in Å.
BOX_TARGETS, BOX_MIN_A, BOX_MAX_A = 8, 0.8, 3.0


@dataclass(frozen=True, eq=False)
class Boxes:
    """Targets by box.

    order: Shape (n,) int, rows of targets sorted by box. starts: Shape (n_boxes + 1,) int, where each box begins in it.
    centres: Shape (n_boxes, 3) float in Å. radii: Shape (n_boxes,) float in Å, no target lies farther from the centre.
    """

    order: np.ndarray
    starts: np.ndarray
    centres: FloatArray
    radii: FloatArray

    def __len__(self) -> int:
        return len(self.radii)

    def part(self, first: int, last: int) -> tuple[Boxes, slice]:
        """Boxes first..last by themselves, and the stretch of sorted targets that they hold."""
        rows = slice(int(self.starts[first]), int(self.starts[last]))
        starts = self.starts[first : last + 1] - rows.start
        return Boxes(self.order[rows], starts, self.centres[first:last], self.radii[first:last]), rows


def largest_radius(lattice: ReducedLattice) -> float:
    """No box of this lattice has a larger radius (Å)."""
    return _radius(lattice.cell * np.minimum(1.0, BOX_MAX_A / np.linalg.norm(lattice.cell, axis=1))[:, None])


def boxes(lattice: ReducedLattice, targets: FloatArray) -> Boxes:
    """Group reduced targets (n, 3) in Å by place; few targets stand each for itself."""
    n = len(targets)
    edge = min(max((lattice.volume * BOX_TARGETS / max(1, n)) ** (1 / 3), BOX_MIN_A), BOX_MAX_A)
    count = np.maximum(1, np.ceil(np.linalg.norm(lattice.cell, axis=1) / edge)).astype(int)
    if np.prod(count.astype(float)) > n:
        return Boxes(np.arange(n), np.arange(n + 1), np.ascontiguousarray(targets), np.zeros(n))
    place = np.clip(((targets @ lattice.inverse + 0.5) * count).astype(int), 0, count - 1)
    index = (place[:, 0] * count[1] + place[:, 1]) * count[2] + place[:, 2]
    if np.prod(count) <= np.iinfo(np.uint16).max:
        # Short numbers are sorted digit by digit, in a fraction of the time.
        index = index.astype(np.uint16)
    order = np.argsort(index, kind="stable")
    found = index[order]
    first = np.flatnonzero(np.append(True, found[1:] != found[:-1]))
    corner = np.array(np.unravel_index(found[first], tuple(count))).T
    centres = ((corner + 0.5) / count - 0.5) @ lattice.cell
    radius = _radius(lattice.cell / count[:, None])
    return Boxes(order, np.append(first, n), np.ascontiguousarray(centres), np.full(len(first), radius))


def _radius(edges: FloatArray) -> float:
    """Half the longest diagonal of a box with these edges (3, 3)."""
    signs = ((1, 1, 1), (1, 1, -1), (1, -1, 1), (-1, 1, 1))
    # A hair wider, for targets that rounding puts on the other side of a face.
    return 0.5 * max(float(np.linalg.norm(np.array(s) @ edges)) for s in signs) + 1e-9
