"""Lattice sums of dipole tensors, by periodicity."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_floats
from latticedip.errors import InputError
from latticedip.sums.bulk import lattice_sum


def dipole_tensor(
    cell: Any, offsets: Any, k: Any = (0, 0, 0), *, pbc: bool | Sequence[bool] = True, tol: float = 1e-10
) -> FloatArray | ComplexArray:
    """Sum of dipole tensors over a lattice, T(x; k) = Σ_R T(x − R) exp(−2πi k·R).

    cell: Shape (3, 3) float in Å. Rows are the cell vectors.
    offsets: Shape (n, 3) float in Å. Cartesian, from the source to the target; an offset within 1e-6 Å of a lattice
        vector leaves that source out.
    k: Shape (3,) float. Propagation vector in reduced coordinates of this cell's reciprocal lattice.
    pbc: one bool or three; three periodic directions are available.
    tol: max |error| ≤ tol · max(1 T/µB, largest |element|) for every tensor; 1e-12 to 1e-2.

    Returns shape (n, 3, 3) in T/µB: the field at the target is T m. Real where k is 0 or on the zone boundary
    (2k a whole vector), else complex. At k = 0 the sum is that without a demagnetizing field (N = 0).

    Raises InputError for wrong shapes, values that are not finite, a singular cell, a tol out of range or other
    periodicities; AccuracyError where the bound cannot be kept.
    """
    periodic = (bool(pbc),) * 3 if isinstance(pbc, (bool, np.bool_)) else tuple(bool(p) for p in pbc)
    if len(periodic) != 3:
        raise InputError(f"pbc must be one bool or three, got {pbc!r}.")
    if not all(periodic):
        raise InputError(f"pbc = {periodic}: only sums that are periodic in all three directions are available.")
    separations = as_floats("offsets", offsets, (None, 3))
    plan = lattice_sum(cell, k, tol)
    return plan.tensors(plan.place(separations), plan.place(np.zeros((1, 3))))[:, 0]
