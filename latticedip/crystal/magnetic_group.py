"""The magnetic space group of an arrangement of moments, by its number (Belov, Neronova and Smirnova)."""

from __future__ import annotations

import os
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np
import spglib

from latticedip.checks import FloatArray
from latticedip.crystal.symmetry import SYMMETRY_TOLERANCE_A

#: Part of the largest moment within which two moments count as the same.
MOMENT_TOLERANCE = 1e-4


@dataclass(frozen=True)
class MagneticGroup:
    """bns_number: such as "62.448". family: 1 to 4, the type (1: no time reversal; 4: an anti-translation)."""

    bns_number: str
    family: int


def magnetic_group(
    cell: FloatArray,
    positions: FloatArray,
    kinds: Sequence[int],
    moments: FloatArray,
    tolerance_A: float = SYMMETRY_TOLERANCE_A,
) -> MagneticGroup | None:
    """Find the magnetic space group of moments in a cell, or None where the search fails.

    cell: Shape (3, 3), rows in Å. positions: Shape (n, 3), fractional. kinds: one number per atom, equal for atoms that
    are alike. moments: Shape (n, 3) float, µB, Cartesian.
    """
    size = float(np.linalg.norm(moments, axis=1).max(initial=0.0))
    if size == 0.0:
        return None
    atoms = (cell, positions, list(kinds), moments / size)
    with _quiet():
        try:
            data = spglib.get_magnetic_symmetry_dataset(
                atoms, is_axial=True, symprec=tolerance_A, mag_symprec=MOMENT_TOLERANCE
            )
            kind = None if data is None else spglib.get_magnetic_spacegroup_type(data.uni_number)
        except spglib.SpglibError:
            return None
    return None if kind is None else MagneticGroup(str(kind.bns_number), int(kind.type))


@contextmanager
def _quiet() -> Iterator[None]:
    """Keep the library from writing to the terminal: a failed search is an answer here."""
    before = os.environ.get("SPGLIB_WARNING")
    os.environ["SPGLIB_WARNING"] = "OFF"
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", DeprecationWarning)
            yield
    finally:
        if before is None:
            del os.environ["SPGLIB_WARNING"]
        else:
            os.environ["SPGLIB_WARNING"] = before
