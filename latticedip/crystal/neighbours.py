"""Distances between sites of a periodic crystal."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from latticedip.checks import FloatArray
from latticedip.errors import LimitError

if TYPE_CHECKING:
    from latticedip.crystal.model import Crystal

#: Images of atoms held at one time.
MAX_IMAGES = 20_000_000
#: Pairs of images and atoms up to which every distance is worked out.
FEW_PAIRS = 200_000


def _within(images: FloatArray, centres: FloatArray, radius: float) -> list[list[int]]:
    """For each centre (n, 3) the images (m, 3) within a radius, all in Å."""
    if len(images) * len(centres) <= FEW_PAIRS:
        apart = np.linalg.norm(images[None] - centres[:, None], axis=2) <= radius
        return [[int(hit) for hit in np.flatnonzero(row)] for row in apart]
    # Imported here: loading it takes a quarter of a second, which small structures do without.
    from scipy.spatial import cKDTree

    return list(cKDTree(images).query_ball_point(centres, radius))


def image_shifts(crystal: Crystal, radius: float) -> FloatArray:
    """Shape (n, 3) int-valued float. Cell shifts that can hold a point within ``radius`` Å of the home cell.

    The home cell is that of wrapped coordinates in [0, 1); only periodic directions are shifted. Raises LimitError
    where these are more than 20 million atoms.
    """
    reciprocal = np.linalg.pinv(crystal.cell).T
    reach = np.where(crystal.pbc, np.ceil(radius * np.linalg.norm(reciprocal, axis=1) + 1e-9), 0.0)
    count = float(np.prod(2 * reach + 1)) * max(1, crystal.n_sites)
    if count > MAX_IMAGES:
        raise LimitError(
            f"neighbours within {radius:g} Å would need {count:.3g} images of atoms in the cell "
            f"{crystal.cell.tolist()}, more than {MAX_IMAGES}. Use a less skewed cell or a smaller radius."
        )
    axes = [np.arange(-n, n + 1) for n in reach]
    return np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)


def close_pairs(crystal: Crystal, radius: float) -> list[tuple[int, int, float]]:
    """Pairs of sites (i ≤ j) closer than ``radius`` Å, i = j meaning a site and its own image, with the distance."""
    if crystal.n_sites == 0:
        return []
    home = crystal.positions.copy()
    periodic = np.asarray(crystal.pbc)
    home[:, periodic] %= 1.0
    shifts = image_shifts(crystal, radius)
    images = (home[None, :, :] + shifts[:, None, :]).reshape(-1, 3) @ crystal.cell
    found = []
    for i, hits in enumerate(_within(images, home @ crystal.cell, radius)):
        for hit in sorted(hits):
            j = hit % crystal.n_sites
            shift = shifts[hit // crystal.n_sites]
            if j < i or (j == i and not np.any(shift)):
                continue
            found.append((i, j, float(np.linalg.norm(images[hit] - home[i] @ crystal.cell))))
    return found


def neighbours_of(
    crystal: Crystal, point: FloatArray, radius: float, sites: tuple[int, ...] | None = None
) -> tuple[np.ndarray, np.ndarray, FloatArray]:
    """Atoms within ``radius`` Å of a fractional point, sorted by distance.

    Returns site indices (n,), the cells they lie in (n, 3) int and the Cartesian vectors from atom to point (n, 3).
    """
    chosen = np.arange(crystal.n_sites) if sites is None else np.asarray(sites, dtype=int)
    base = np.where(crystal.pbc, np.floor(point), 0.0)
    local = np.asarray(point, dtype=float) - base
    cells = np.where(crystal.pbc, np.floor(crystal.positions[chosen]), 0.0)
    home = crystal.positions[chosen] - cells
    shifts = image_shifts(crystal, radius)
    vectors = (local - home[None] - shifts[:, None]) @ crystal.cell
    distance = np.linalg.norm(vectors, axis=-1)
    shift_index, atom_index = np.nonzero(distance <= radius)
    order = np.argsort(distance[shift_index, atom_index], kind="stable")
    shift_index, atom_index = shift_index[order], atom_index[order]
    lattice = shifts[shift_index] + base - cells[atom_index]
    return chosen[atom_index], lattice.astype(int), vectors[shift_index, atom_index]
