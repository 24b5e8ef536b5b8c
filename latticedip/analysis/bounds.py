"""How far an ordering stands above the lowest dipolar energy that moments like its own could have.

For moments with ⟨|m_i|²⟩ = r_i size_i² over cells (r = 1 at full size) the energy per cell is at least λ Σ_i r_i n/S,
λ the lowest eigenvalue over all k per ion, n the ions per cell and S the magnetic sites (Luttinger and Tisza,
Phys. Rev. 70, 954 (1946)). With weights of the sites (Lyons and Kaplan, Phys. Rev. 120, 1580 (1960)) λ is higher, but
the bound holds only where all r_i are equal.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from latticedip.analysis.modes import LowestMode, balanced_mode, lowest_mode
from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.ordering.domains import in_reference_cell
from latticedip.ordering.model import Ordering, is_self_conjugate
from latticedip.physics.energy import Energy
from latticedip.sample import Sample

#: Mean square moments within this part of one another are equal.
SAME_SIZE = 1e-6


@dataclass(frozen=True)
class Above:
    """An ordering against the bound. bound_eV, above_eV: per magnetic ion of the ordering; no applied field in either.

    scale: mean square moment in units of the stated sizes, by which the bound was multiplied; 1 at full size.
    """

    bound_eV: float
    above_eV: float
    scale: float


@dataclass(frozen=True, eq=False)
class Bound:
    """The lower bound of the dipolar and shape energy for one crystal, moment sizes and sample.

    crystal: the Crystal. sizes: label or element to µB. sample: None means N = 0. tol: as `dipole_tensor`.
    """

    crystal: Crystal
    sizes: Mapping[str, float]
    sample: Sample | None = None
    tol: float = 1e-10

    @cached_property
    def mode(self) -> LowestMode:
        """The mode that gives the best bound at full size."""
        return balanced_mode(self.crystal, self.sizes, sample=self.sample, tol=self.tol)

    @cached_property
    def plain(self) -> LowestMode:
        """The mode that gives the bound for moments of any size."""
        return lowest_mode(self.crystal, self.sizes, sample=self.sample, tol=self.tol)

    def above(self, ordering: Ordering, energy: Energy) -> Above | None:
        """How far the energy of an ordering stands above the bound for moments like its own.

        None where it lies on another crystal, or a site without a stated size carries a moment.

        Raises InputError where the cell of the ordering does not fit that of its reference.
        """
        placed = in_reference_cell(ordering)
        if placed.crystal is not self.crystal and not _same_sites(placed.crystal, self.crystal):
            return None
        square = _mean_squares(placed)
        size = self.mode.sizes
        if np.any(square[size == 0] > 0):
            return None
        parts = square[size > 0] / size[size > 0] ** 2
        equal = float(np.ptp(parts)) <= SAME_SIZE * float(parts.max())
        scale = float(parts.mean())
        mode = self.mode if equal else self.plain
        # Energies per ion count only the ions of the ordering.
        ions = mode.n_ions / placed.n_ions
        bound = mode.energy_per_ion_eV * scale * ions
        return Above(bound, (energy.dipolar_eV + energy.shape_eV) / energy.n_ions - bound, scale)

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        return {
            "energy_ueV_per_ion": self.mode.energy_per_ion_eV * 1e6,
            "k": None if self.mode.k is None else np.atleast_2d(self.mode.k).tolist(),
            "equal_moments": self.mode.equal_moments,
            "sizes_muB": dict(self.sizes),
            "error_bound_ueV_per_ion": self.mode.error_bound_eV * 1e6,
            "boundary": self.mode.boundary,
        }


def _mean_squares(ordering: Ordering) -> FloatArray:
    """Shape (n_sites,) float in µB². ⟨|m_i|²⟩ over cells."""
    weights = np.where(is_self_conjugate(ordering.k), 1.0, 0.5)
    return np.asarray(np.einsum("k,kia->i", weights, np.abs(ordering.components) ** 2))


def _same_sites(one: Crystal, two: Crystal) -> bool:
    return (
        one.symbols == two.symbols
        and np.allclose(one.cell, two.cell, rtol=0, atol=1e-6)
        and np.allclose(one.positions, two.positions, rtol=0, atol=1e-6)
    )
