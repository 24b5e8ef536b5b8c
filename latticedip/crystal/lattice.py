"""Arithmetic of lattices: integer bases, centrings, reduced vectors, vectors of a given length.

A lattice basis is a (3, 3) array whose rows are vectors, as for a cell.
"""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal, site_order
from latticedip.crystal.symmetry import centrings_of
from latticedip.errors import InputError

#: Distance (Å) within which a centring must carry an atom onto an atom; readers merge images up to 0.02 Å.
CENTRING_TOLERANCE_A = 0.05


def hermite_basis(vectors: np.ndarray) -> np.ndarray:
    """Shape (3, 3) int, upper triangular with a positive diagonal: a basis of the lattice the integer rows span.

    The box 0 ≤ n_i < diagonal_i holds each class of whole-number vectors modulo that lattice exactly once.
    Raises InputError where the rows do not span three dimensions.
    """
    rows = [[int(x) for x in row] for row in vectors]
    basis: list[list[int]] = []
    for column in range(3):
        while True:
            candidates = [row for row in rows if row[column] != 0]
            if not candidates:
                raise InputError("the vectors do not span a lattice in three dimensions.")
            pivot = min(candidates, key=lambda row: abs(row[column]))
            rest = [row for row in candidates if row is not pivot]
            if not rest:
                break
            for row in rest:
                factor = row[column] // pivot[column]
                for i in range(3):
                    row[i] -= factor * pivot[i]
        rows = [row for row in rows if row is not pivot]
        basis.append([-x for x in pivot] if pivot[column] < 0 else pivot)
    return np.array(basis, dtype=np.int64)


def box_of(basis: np.ndarray) -> np.ndarray:
    """Shape (n, 3) int. One whole-number vector per class modulo the lattice of an upper triangular basis."""
    return np.array(list(itertools.product(*(range(int(n)) for n in np.diag(basis)))), dtype=np.int64)


def reduced_basis(basis: FloatArray) -> tuple[FloatArray, np.ndarray]:
    """A basis of the same lattice made of its three shortest vectors, and the integer rows that give it.

    Returns (reduced, steps) with reduced = steps @ basis; the handedness may differ.
    Minkowski reduction in three dimensions: a vector is replaced while a sum or difference with others is shorter.
    """
    steps = np.eye(3, dtype=np.int64)
    for _ in range(10000):
        current = steps @ basis
        order = np.argsort(np.linalg.norm(current, axis=1), kind="stable")
        steps = steps[order]
        current = current[order]
        changed = False
        for target in (1, 2):
            lower = current[:target]
            whole = np.round(np.linalg.lstsq(lower.T, current[target], rcond=None)[0]).astype(np.int64)
            best = (float(np.linalg.norm(current[target])), np.zeros(target, dtype=np.int64))
            for nudge in itertools.product((0, -1, 1), repeat=target):
                factors = whole + np.array(nudge)
                length = float(np.linalg.norm(current[target] - factors @ lower))
                if length < best[0] * (1 - 1e-10):
                    best = (length, factors)
            if np.any(best[1]):
                steps[target] -= best[1] @ steps[:target]
                changed = True
                break
        if not changed:
            return np.asarray(steps @ basis), steps
    raise InputError(f"the cell vectors {basis.tolist()} cannot be reduced.")


def vectors_between(basis: FloatArray, shortest: float, longest: float) -> np.ndarray:
    """Shape (n, 3) int. Coordinates of all lattice vectors whose length lies between two bounds (basis reduced)."""
    reach = np.floor(longest * np.linalg.norm(np.linalg.inv(basis), axis=0) + 1e-9).astype(int)
    axes = [np.arange(-n, n + 1) for n in reach]
    grid = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    lengths = np.linalg.norm(grid @ basis, axis=1)
    return np.asarray(grid[(lengths >= shortest) & (lengths <= longest)])


def label_centrings(crystal: Crystal) -> FloatArray:
    """Shape (n, 3) float. The centring translations that carry every atom onto one of the same label, zero first.

    They form a group of n translations modulo 1, so every coordinate is a whole number of n-ths and is given as such.
    Raises InputError where a stated centring carries an atom onto no atom.
    """
    stated = centrings_of(crystal)
    names, labels = np.unique(crystal.labels, return_inverse=True)
    kept = np.all(labels[_images(crystal, stated)] == labels, axis=1) if len(names) else [True]
    return exact_translations(stated[kept])


def exact_translations(translations: FloatArray) -> FloatArray:
    """Shape (n, 3) float in [0, 1). A group of n translations modulo 1, each coordinate a whole number of n-ths."""
    n = len(translations)
    return np.asarray((np.round(translations * n) % n) / n)


def primitive_basis(centrings: FloatArray) -> FloatArray:
    """Shape (3, 3) float. Rows are primitive vectors, in cell coordinates, of a cell with these (exact) centrings."""
    n = len(centrings)
    whole = np.vstack([n * np.eye(3), np.round(centrings * n)]).astype(np.int64)
    return np.asarray(hermite_basis(whole) / n)


def centring_classes(crystal: Crystal, sites: tuple[int, ...], centrings: FloatArray) -> tuple[np.ndarray, FloatArray]:
    """Which of the sites are translation copies of one another.

    sites: indices of atoms, in the order in which they count; closed under the centrings.
    centrings: as `label_centrings` returns them.

    Returns (first, shift): for each listed site the place in ``sites`` of the first of its class, shape (n,) int,
    and the lattice translation from that atom to it, shape (n, 3) float, exact:
    positions[site] = positions[sites[first]] + shift (within the tolerance of the file).
    """
    listed = np.array(sites, dtype=int)
    place = np.full(crystal.n_sites, -1)
    place[listed] = np.arange(len(listed))
    images = place[_images(crystal, centrings)]
    first = np.full(len(listed), -1)
    shift = np.zeros((len(listed), 3))
    for i, site in enumerate(listed):
        if first[i] >= 0:
            continue
        copies = images[:, site]
        gaps = crystal.positions[listed[copies]] - crystal.positions[site] - centrings
        first[copies] = i
        shift[copies] = centrings + np.round(gaps)
    return first, shift


def translation_classes(crystal: Crystal, translations: FloatArray) -> tuple[np.ndarray, FloatArray]:
    """For each atom the first atom of its element that a translation carries onto it, and that translation.

    Returns (first, shift), shapes (n_sites,) int and (n_sites, 3) float, as `centring_classes` does for some sites.
    """
    first = np.zeros(crystal.n_sites, dtype=int)
    shift = np.zeros((crystal.n_sites, 3))
    for symbol in dict.fromkeys(crystal.symbols):
        alike = [i for i, other in enumerate(crystal.symbols) if other == symbol]
        ordered = tuple(alike[i] for i in site_order(crystal.positions[alike]))
        heads, steps = centring_classes(crystal, ordered, translations)
        first[list(ordered)] = np.array(ordered)[heads]
        shift[list(ordered)] = steps
    return first, shift


def _images(crystal: Crystal, translations: FloatArray) -> np.ndarray:
    """Shape (n_translations, n_sites) int. The atom of its element that each translation carries each atom onto."""
    targets = np.tile(np.arange(crystal.n_sites), (len(translations), 1))
    if len(translations) == 1:
        return targets
    # Imported here: loading it takes a quarter of a second, which primitive cells do without.
    from scipy.spatial import cKDTree

    for symbol in dict.fromkeys(crystal.symbols):
        alike = np.array([i for i, other in enumerate(crystal.symbols) if other == symbol])
        home = crystal.positions[alike]
        # Nearness in fractional coordinates only proposes atoms; the distance in Å decides among them.
        tree: Any = cKDTree(_into_box(home), boxsize=np.ones(3))
        for row, shift in enumerate(translations):
            moved = home + shift
            near = tree.query(_into_box(moved), k=list(range(1, min(4, len(alike)) + 1)))[1]
            gaps = home[near] - moved[:, None]
            distances = np.linalg.norm((gaps - np.round(gaps)) @ crystal.cell, axis=-1)
            best = np.argmin(distances, axis=1)
            closest = distances[np.arange(len(alike)), best]
            if np.any(closest > CENTRING_TOLERANCE_A):
                site = int(alike[np.argmax(closest)])
                words = ", ".join(f"{x:.4g}" for x in shift)
                raise InputError(
                    f"the centring translation ({words}) of the crystal maps atom {site + 1} ({crystal.labels[site]}) "
                    "onto no atom: the symmetry operations stated are not those of this crystal."
                )
            targets[row, alike] = alike[near[np.arange(len(alike)), best]]
    return targets


def _into_box(fractional: FloatArray) -> FloatArray:
    """Coordinates in [0, 1), where a remainder that rounds up to 1 becomes 0."""
    boxed = fractional % 1.0
    return np.asarray(np.where(boxed >= 1.0, 0.0, boxed))
