"""The positions that the symmetry of a crystal makes equal to a given one."""

from __future__ import annotations

from typing import Any

import numpy as np

from latticedip.checks import FloatArray, as_floats
from latticedip.crystal.lattice import CENTRING_TOLERANCE_A, exact_translations, primitive_basis
from latticedip.crystal.model import Crystal, site_order
from latticedip.crystal.symmetry import find_operations, operations_of

#: Images of a position closer than this (Å) are one: coordinates are typed with few digits ("0.333" for a third).
SAME_POSITION_A = 0.01
#: A coordinate this close below 1 is 0.
WRAP = 1e-9


def orbit(crystal: Crystal, position: Any) -> FloatArray:
    """All positions that are equivalent to a position under the non-magnetic space group.

    crystal: the Crystal; its operations are those stated by its file, else those found from its atoms.
    position: Shape (3,) fractional.

    Returns shape (n, 3) float: fractional positions in [0, 1), distinct, ordered by x, y, z. One of them is the given
    position itself; n is its multiplicity in the cell. Images within 0.01 Å are one position, unless that would make
    the group act unevenly on it. In a crystal that is not periodic in three directions a position stands for itself
    (then only its coordinates along periodic directions are wrapped).

    Raises InputError for a position that is not three finite numbers.
    """
    point = as_floats("position", position, (3,))
    images = _images(crystal, point)
    # The given position goes first and represents its own images, with the digits it was given.
    images = np.vstack([point, images])
    periodic = np.array(crystal.pbc)
    images[:, periodic] %= 1.0
    images[:, periodic] = np.where(images[:, periodic] > 1.0 - WRAP, 0.0, images[:, periodic])
    tolerance = SAME_POSITION_A
    while True:
        kept, counts = _clusters(crystal, images, tolerance)
        # A group reaches every point of an orbit equally often; an uneven count means that the tolerance joined
        # some points of a position that lies close to a symmetry element, and parted others.
        if len(set(counts)) == 1 or tolerance < 1e-9:
            break
        tolerance /= 4
    points = images[kept]
    return np.asarray(points[site_order(points)])


def _images(crystal: Crystal, point: FloatArray) -> FloatArray:
    """Shape (n, 3) float. The position carried by every operation, not wrapped."""
    operations = operations_of(crystal)
    images = np.asarray(operations.rotations @ point + operations.translations)
    centrings = operations.centrings()
    if len(centrings) == 1 or not all(crystal.pbc):
        return images
    found, _ = find_operations(crystal)
    if found is None or len(found.rotations) != len(operations.rotations):
        # A file that states another group than the atoms have is taken at its word.
        return images
    # In a supercell an operation that does not map its edges onto one another has no place in a list of whole-number
    # matrices; the crystal has it all the same, and the primitive cell shows it.
    basis = primitive_basis(exact_translations(centrings))
    finer, _ = find_operations(_primitive(crystal, basis))
    if finer is None or len(finer.rotations) * len(centrings) <= len(images):
        return images
    carried = (finer.rotations @ (point @ np.linalg.inv(basis)) + finer.translations) @ basis
    return np.asarray((carried[:, None] + centrings[None]).reshape(-1, 3))


def _primitive(crystal: Crystal, basis: FloatArray) -> Crystal:
    """The same atoms in the cell whose rows are ``basis``, in coordinates of the cell given."""
    cell = basis @ crystal.cell
    positions = crystal.positions @ np.linalg.inv(basis)
    kept: list[int] = []
    for i, position in enumerate(positions):
        alike = [
            j
            for j in kept
            if crystal.symbols[j] == crystal.symbols[i] and abs(crystal.occupancies[j] - crystal.occupancies[i]) < 1e-6
        ]
        gap = positions[alike] - position
        if not len(alike) or np.linalg.norm((gap - np.round(gap)) @ cell, axis=1).min() > CENTRING_TOLERANCE_A:
            kept.append(i)
    return Crystal(
        cell, positions[kept], tuple(crystal.symbols[i] for i in kept), occupancies=crystal.occupancies[kept]
    )


def _clusters(crystal: Crystal, images: FloatArray, tolerance: float) -> tuple[list[int], list[int]]:
    """First member of each group of equal images, and how often operations (all images but the first) reach it."""
    kept: list[int] = []
    counts: list[int] = []
    rest = np.arange(len(images))
    periodic = np.array(crystal.pbc)
    while len(rest):
        gap = images[rest] - images[rest[0]]
        gap[:, periodic] -= np.round(gap[:, periodic])
        same = np.linalg.norm(gap @ crystal.cell, axis=1) <= tolerance
        kept.append(int(rest[0]))
        counts.append(int(same.sum()) - (1 if rest[0] == 0 else 0))
        rest = rest[~same]
    return kept, counts
