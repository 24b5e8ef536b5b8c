"""Crystal to ASE atoms and back."""

from __future__ import annotations

import warnings
from typing import TYPE_CHECKING

import numpy as np

from latticedip.checks import check_cell
from latticedip.crystal.model import Crystal, distinct_labels
from latticedip.crystal.symmetry import find_operations
from latticedip.errors import InputError

if TYPE_CHECKING:
    from ase import Atoms


def crystal_from_ase(atoms: Atoms) -> Crystal:
    """Build a Crystal from ASE atoms.

    Labels come from an array ``labels``, else each symmetry-distinct site of an element gets a number
    (Mn1, Mn2). Occupancies come from an array ``occupancies``, else they are 1.

    Raises InputError where the atoms carry ASE's ``occupancy`` dictionary, which cannot be assigned to sites
    without guessing, and where a periodic direction has no cell vector.
    """
    for key, per_site in (atoms.info.get("occupancy") or {}).items():
        if len(per_site) != 1 or any(abs(p - 1) > 1e-9 for p in per_site.values()):
            raise InputError(
                f"the atoms carry ASE's occupancy table ({key}: {per_site}), which does not say which atom it "
                "means. Set an array 'occupancies' on the atoms, or read the CIF with read_crystal."
            )
    symbols = tuple(atoms.get_chemical_symbols())
    pbc = (bool(atoms.pbc[0]), bool(atoms.pbc[1]), bool(atoms.pbc[2]))
    cell = check_cell("cell of the atoms", atoms.cell.array, pbc)
    if not all(pbc):
        # A molecule or a slab may lack cell vectors; unit vectors complete the frame without being periodic.
        cell = np.array(atoms.cell.complete())
    positions = np.linalg.solve(cell.T, atoms.positions.T).T if len(atoms) else np.zeros((0, 3))
    occupancies = atoms.arrays.get("occupancies")
    plain = Crystal(cell, positions, symbols, occupancies=occupancies, pbc=pbc, name=atoms.get_chemical_formula())
    operations, classes = find_operations(plain)
    labels = (
        tuple(str(x) for x in atoms.arrays["labels"]) if "labels" in atoms.arrays else distinct_labels(symbols, classes)
    )
    return Crystal(cell, positions, symbols, labels, plain.occupancies, plain.pbc, operations, plain.name)


def crystal_to_ase(crystal: Crystal) -> Atoms:
    """Return ASE atoms with the same cell and positions, and arrays ``labels`` and ``occupancies``."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from ase import Atoms

    atoms = Atoms(crystal.symbols, cell=crystal.cell, scaled_positions=crystal.positions, pbc=crystal.pbc)
    atoms.set_array("labels", np.array(crystal.labels, dtype=str))
    atoms.set_array("occupancies", np.array(crystal.occupancies))
    return atoms
