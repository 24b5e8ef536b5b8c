"""Ordering to ASE atoms and back."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from latticedip.crystal.convert import crystal_from_ase
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering

if TYPE_CHECKING:
    from ase import Atoms

SCALAR_NOTE = "the file gives scalar moments; they are taken along Cartesian z"
TWO_SETS_NOTE = (
    "the file holds initial magnetic moments and other ones as the result of a calculation; the initial ones are taken"
)


def ordering_from_ase(atoms: Atoms, name: str = "") -> Ordering:
    """Build an Ordering (k = 0) from ASE atoms.

    Moments are the initial magnetic moments where any is set, else those of an attached calculator result.
    Scalar moments lie along Cartesian z, and a note says so.

    Raises InputError when the atoms carry no moments.
    """
    moments, notes = _moments_of(atoms)
    if moments.ndim == 1:
        moments = np.column_stack([np.zeros((len(moments), 2)), moments])
        notes.insert(0, SCALAR_NOTE)
    return Ordering(crystal_from_ase(atoms), moments, name=name or atoms.get_chemical_formula(), notes=tuple(notes))


def _moments_of(atoms: Atoms) -> tuple[np.ndarray, list[str]]:
    """Shape (n,) or (n, 3) float in µB, and what must be said where the atoms hold two sets of moments."""
    results = getattr(atoms.calc, "results", {}) if atoms.calc is not None else {}
    calculated = np.asarray(results["magmoms"], dtype=float) if "magmoms" in results else None
    if "initial_magmoms" in atoms.arrays and np.any(atoms.arrays["initial_magmoms"] != 0):
        initial = np.asarray(atoms.arrays["initial_magmoms"], dtype=float)
        differ = calculated is not None and (initial.shape != calculated.shape or not np.allclose(initial, calculated))
        return initial, [TWO_SETS_NOTE] if differ else []
    if calculated is None:
        raise InputError(
            "the structure carries no magnetic moments. Give them in the study, or use a file that has them."
        )
    return calculated, []


def ordering_to_ase(ordering: Ordering, repeat: Sequence[int] = (1, 1, 1)) -> Atoms:
    """Return ASE atoms of ``repeat`` cells with vector initial magnetic moments (of the ions, µB)."""
    counts = tuple(int(n) for n in repeat)
    if len(counts) != 3 or any(n < 1 or n != r for n, r in zip(counts, repeat, strict=True)):
        raise InputError(f"repeat must be three whole numbers of at least 1, got {tuple(repeat)!r}.")
    cells = list(itertools.product(*(range(n) for n in counts)))
    # ASE's repeat runs over cells in this same order, the last index fastest.
    atoms = ordering.crystal.to_ase().repeat(counts)
    atoms.set_initial_magnetic_moments(ordering.moments(cells).reshape(-1, 3))
    return atoms
