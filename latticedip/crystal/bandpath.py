"""The path between the special points of a lattice along which bands are drawn (ASE; Setyawan and Curtarolo 2010)."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from latticedip.checks import FloatArray, frozen
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError


@dataclass(frozen=True, eq=False)
class BandPath:
    """Propagation vectors along straight segments between special points.

    k: Shape (n, 3) float, reduced coordinates of the crystal's own cell. distance: Shape (n,) float in 1/Å (2π
    included), along the path; it stands still where the path jumps. segment: Shape (n,) int, the one each k is on: a
    special point at which one segment ends and the next begins is listed twice.
    ticks: (distance, name) of the special points in order; "A|B" where the path jumps from A to B.
    points: reduced coordinates of the special points by name.
    """

    k: FloatArray
    distance: FloatArray
    segment: np.ndarray
    ticks: tuple[tuple[float, str], ...]
    points: dict[str, tuple[float, float, float]]


def special_points(crystal: Crystal) -> tuple[str, dict[str, FloatArray]]:
    """Path string (such as "GXWKG,UX") and special points of the lattice of a crystal, in its own reduced coordinates.

    Raises InputError where the cell is left-handed or its lattice is not recognised.
    """
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from ase.cell import Cell
    if np.linalg.det(crystal.cell) < 0:
        raise InputError("the cell vectors are left-handed: a band path needs right-handed ones. Exchange two of them.")
    try:
        path = Cell(np.array(crystal.cell)).bandpath(npoints=0, pbc=crystal.pbc)
    except (RuntimeError, ValueError, AssertionError) as error:
        raise InputError(f"no band path for the cell {crystal.cell.tolist()}: {error}.") from None
    return path.path, {name: np.array(k, dtype=float) for name, k in path.special_points.items()}


def band_path(crystal: Crystal, n_points: int = 200) -> BandPath:
    """About ``n_points`` propagation vectors along the standard path of the lattice, at least two on each segment.

    Raises InputError as `special_points` does, and for fewer than two points.
    """
    if isinstance(n_points, bool) or not isinstance(n_points, (int, np.integer)) or n_points < 2:
        raise InputError(f"n_points must be a whole number of at least 2, got {n_points!r}.")
    text, points = special_points(crystal)
    reciprocal = 2 * np.pi * np.linalg.inv(crystal.cell).T
    pieces = [_names(part, points) for part in text.split(",")]
    segments = [pair for piece in pieces for pair in _pairs(piece)]
    lengths = [float(np.linalg.norm((points[b] - points[a]) @ reciprocal)) for a, b in segments]
    total = sum(lengths) or 1.0
    k, distance, segment = [], [], []
    ticks: list[tuple[float, str]] = []
    start = 0.0
    for number, ((a, b), length) in enumerate(zip(segments, lengths, strict=True)):
        steps = np.linspace(0.0, 1.0, max(2, round(n_points * length / total)))
        k.append(points[a] + steps[:, None] * (points[b] - points[a]))
        distance.append(start + steps * length)
        segment.append(np.full(len(steps), number))
        if not ticks:
            ticks.append((start, a))
        elif ticks[-1][1] != a:
            ticks[-1] = (start, f"{ticks[-1][1]}|{a}")
        start += length
        ticks.append((start, b))
    return BandPath(
        frozen(np.concatenate(k)),
        frozen(np.concatenate(distance)),
        frozen(np.concatenate(segment)),
        tuple(ticks),
        {name: (float(x[0]), float(x[1]), float(x[2])) for name, x in points.items()},
    )


def _names(text: str, points: dict[str, FloatArray]) -> list[str]:
    """Split "GXWK1" into names: a letter with the digits behind it."""
    names: list[str] = []
    for letter in text:
        if letter.isalpha() or not names:
            names.append(letter)
        else:
            names[-1] += letter
    return [name for name in names if name in points]


def _pairs(names: list[str]) -> list[tuple[str, str]]:
    return list(pairwise(names))
