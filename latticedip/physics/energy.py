"""Dipolar, shape and applied-field energy of an ordering."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, check_tol
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering, is_self_conjugate
from latticedip.physics.boundary import boundary_words, check_sample
from latticedip.physics.coupling import coupling_tensors, refuse_split_ions
from latticedip.sample import Sample
from latticedip.units import EV_PER_MUB_T, K_PER_EV, MU0_T_A3_PER_MUB


@dataclass(frozen=True, eq=False)
class Energy:
    """Energy of an ordering; per cell of its own crystal, averaged over cells for k ≠ 0.

    dipolar_eV: −½ Σ m·(B_dipolar + B_Lorentz), the N = 0 sum. shape_eV: (µ0/2V) M·N·M. applied_eV: −M·B_applied.
    n_ions: magnetic ions per cell, counted with their occupancy. net_moment: Shape (3,) float, µB per cell.
    error_bound_eV: bound of the error of dipolar_eV that follows from ``tol``.
    boundary: the assumed boundary in words. notes: sentences a report must repeat.
    """

    dipolar_eV: float
    shape_eV: float
    applied_eV: float
    n_ions: float
    net_moment: FloatArray
    error_bound_eV: float
    boundary: str
    notes: tuple[str, ...] = ()

    @property
    def per_cell_eV(self) -> float:
        """All parts together, eV per cell."""
        return self.dipolar_eV + self.shape_eV + self.applied_eV

    @property
    def per_ion_eV(self) -> float:
        """All parts together, eV per magnetic ion."""
        return self.per_cell_eV / self.n_ions

    @property
    def per_ion_K(self) -> float:
        """All parts together, kelvin per magnetic ion."""
        return self.per_ion_eV * K_PER_EV

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        return {
            "energy_eV_per_cell": self.per_cell_eV,
            "energy_ueV_per_ion": self.per_ion_eV * 1e6,
            "energy_K_per_ion": self.per_ion_K,
            "dipolar_eV_per_cell": self.dipolar_eV,
            "shape_eV_per_cell": self.shape_eV,
            "applied_eV_per_cell": self.applied_eV,
            "error_bound_eV_per_cell": self.error_bound_eV,
            "ions_per_cell": self.n_ions,
            "net_moment_muB_per_cell": self.net_moment.tolist(),
            "boundary": self.boundary,
            "notes": list(self.notes),
        }


def dipolar_energy(ordering: Ordering, *, sample: Sample | None = None, tol: float = 1e-10) -> Energy:
    """Energy of the dipolar interaction of an ordering, with the shape of the sample and the applied field.

    ordering: periodic in three directions. sample: None means N = 0 and no applied field. tol: as `dipole_tensor`.
    A Fourier pair weighs ¼ Re S*·T·S, a real component ½; terms of different k average to zero over cells.

    Raises InputError where no site carries a moment, the crystal is not periodic in three directions, or two magnetic
    sites lie between 1e-3 and 0.1 Å apart.
    """
    if not isinstance(ordering, Ordering):
        raise InputError(f"dipolar_energy needs an Ordering, got {type(ordering).__name__}.")
    require_ions(ordering)
    check_sample(sample)
    specimen = Sample() if sample is None else sample
    dipolar = bound = 0.0
    for weight, mean, tensors in weighted_couplings(ordering, check_tol(tol)):
        field = np.einsum("ijab,jb->ia", tensors, mean)
        dipolar -= weight * float(np.einsum("ia,ia->", mean.conj(), field).real)
        size = np.abs(mean).sum(axis=1)
        largest = np.maximum(1.0, np.abs(tensors).max(axis=(2, 3)))
        bound += weight * float(size @ largest @ size) * tol
    net = ordering.net_moment
    shape = 0.5 * MU0_T_A3_PER_MUB / ordering.crystal.volume_A3 * float(net @ specimen.demagnetizing_tensor @ net)
    applied = -float(net @ specimen.applied_T)
    return Energy(
        dipolar_eV=dipolar * EV_PER_MUB_T,
        shape_eV=shape * EV_PER_MUB_T,
        applied_eV=applied * EV_PER_MUB_T,
        n_ions=ordering.n_ions,
        net_moment=net,
        error_bound_eV=bound * EV_PER_MUB_T,
        boundary=boundary_words(ordering, sample),
        notes=(*ordering.crystal.notes, *ordering.notes),
    )


def weighted_couplings(ordering: Ordering, tol: float) -> list[tuple[float, ComplexArray, FloatArray | ComplexArray]]:
    """For each k: weight (½ real, ¼ Fourier pair), mean components (n_ions, 3) µB and tensors (n, n, 3, 3) T/µB.

    Only sites that carry a moment take part.
    """
    sites = np.flatnonzero(ordering.is_magnetic)
    refuse_split_ions(ordering.crystal, sites)
    parts = []
    for k, mean, single in zip(ordering.k, ordering.mean_components, is_self_conjugate(ordering.k), strict=True):
        tensors = coupling_tensors(ordering.crystal, k, tol, tuple(int(i) for i in sites))
        parts.append((0.5 if single else 0.25, mean[sites], tensors))
    return parts


def require_ions(ordering: Ordering) -> None:
    """Raise InputError where no site carries a moment."""
    if not np.any(ordering.is_magnetic):
        raise InputError(f"ordering {ordering.name!r} carries no moments: all components are zero.")
