"""Space-group operations of the non-magnetic structure, found by spglib where a file does not state them."""

from __future__ import annotations

import logging
import warnings
from typing import TYPE_CHECKING, Any

import numpy as np
import spglib

from latticedip.checks import FloatArray
from latticedip.errors import LatticedipError

if TYPE_CHECKING:
    from latticedip.crystal.model import Crystal, Operations

#: Distance (Å) within which atoms count as symmetry-equivalent.
SYMMETRY_TOLERANCE_A = 1e-3

_log = logging.getLogger(__name__)


def find_operations(crystal: Crystal, tolerance: float = SYMMETRY_TOLERANCE_A) -> tuple[Operations | None, list[int]]:
    """Operations of a crystal and, for each atom, the index of the first atom equivalent to it.

    Atoms are alike when element, label-independent occupancy and surroundings are. For crystals that are not
    periodic in three directions the operations are None and every atom stands for itself; so they do where
    the search fails (atoms closer than the tolerance).
    """
    from latticedip.crystal.model import Operations

    alone = list(range(crystal.n_sites))
    if not all(crystal.pbc) or crystal.n_sites == 0:
        return None, alone
    data = _dataset(crystal, tolerance)
    if data is None:
        _log.debug("no symmetry found of %d atoms", crystal.n_sites)
        return None, alone
    _log.debug(
        "symmetry of %d atoms within %g Å: space group %s, %d operations",
        crystal.n_sites, tolerance, data.international, len(data.rotations),
    )  # fmt: skip
    return Operations(data.rotations, data.translations), [int(i) for i in data.equivalent_atoms]


def _dataset(crystal: Crystal, tolerance: float) -> Any:
    """What spglib finds of a crystal that is periodic in three directions; None where the search fails."""
    kinds: dict[tuple[str, float], int] = {}
    numbers = [
        kinds.setdefault((s, round(float(p), 6)), len(kinds) + 1)
        for s, p in zip(crystal.symbols, crystal.occupancies, strict=True)
    ]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DeprecationWarning)
        try:
            return spglib.get_symmetry_dataset((crystal.cell, crystal.positions, numbers), symprec=tolerance)
        except spglib.SpglibError:
            return None


def cells_in_conventional(crystal: Crystal) -> float:
    """How many cells of a crystal its conventional cell holds: 4 for a primitive face-centred one, 1/2 for a doubled
    cell; 1 where it has none (not periodic in three directions, or the search for symmetry fails).
    """
    if not all(crystal.pbc) or crystal.n_sites == 0:
        return 1.0
    data = _dataset(crystal, SYMMETRY_TOLERANCE_A)
    return 1.0 if data is None else float(1.0 / np.linalg.det(data.transformation_matrix))


def operations_of(crystal: Crystal) -> Operations:
    """Operations stated by the file, else those spglib finds, else the identity alone."""
    from latticedip.crystal.model import Operations

    if crystal.operations is not None:
        return crystal.operations
    found, _ = find_operations(crystal)
    return found if found is not None else Operations(np.eye(3, dtype=int)[None], np.zeros((1, 3)))


def centrings_of(crystal: Crystal) -> FloatArray:
    """Shape (n, 3) float. Centring translations of the non-magnetic lattice, zero first."""
    return operations_of(crystal).centrings()


def equivalent_sites(crystal: Crystal, tolerance_A: float = 0.02) -> list[int]:
    """For each atom the index of the first atom that an operation of the crystal maps onto it.

    Raises LatticedipError where an operation maps an atom onto no atom: the operations are not of this crystal.
    """
    operations = operations_of(crystal)
    kinds = [(symbol, round(float(p), 6)) for symbol, p in zip(crystal.symbols, crystal.occupancies, strict=True)]
    first = list(range(crystal.n_sites))
    for i in range(crystal.n_sites):
        if first[i] != i:
            continue
        images = operations.rotations @ crystal.positions[i] + operations.translations
        for image in images:
            difference = crystal.positions - image
            difference -= np.round(difference)
            distance = np.linalg.norm(difference @ crystal.cell, axis=1)
            # Where two elements share a place, an atom is carried onto its own kind.
            distance[[kind != kinds[i] for kind in kinds]] = np.inf
            j = int(np.argmin(distance))
            if distance[j] > tolerance_A:
                raise LatticedipError(f"an operation of the crystal maps atom {i + 1} onto no atom.")
            first[j] = min(first[j], i)
    return first
