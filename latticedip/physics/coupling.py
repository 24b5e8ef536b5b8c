"""Coupling: the dipole tensors between the sites of a crystal at one k, shared by all candidate orderings."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_complex, as_floats, check_tol, frozen
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError, LimitError
from latticedip.ordering.model import is_self_conjugate, snap_k
from latticedip.sums.bulk import lattice_sum
from latticedip.units import EV_PER_MUB_T

#: Largest table of tensors held, in bytes.
MAX_TABLE_BYTES = 4 * 2**30


@dataclass(frozen=True, eq=False)
class Coupling:
    """Dipole tensors T_ij(k) = Σ_R T(τ_i − τ_j − R) exp(−2πi k·R) between all sites of a crystal, N = 0.

    crystal: the Crystal, periodic in three directions. k: Shape (3,), reduced coordinates. tol: as `dipole_tensor`.
    A site does not feel itself. Positions are those of the crystal as given, in the home cell.

    Raises InputError as `dipole_tensor` does, LimitError for a table beyond 4 GiB.
    """

    crystal: Crystal
    k: Any = (0.0, 0.0, 0.0)
    tol: float = 1e-10

    def __init__(self, crystal: Crystal, k: Any = (0, 0, 0), *, tol: float = 1e-10) -> None:
        object.__setattr__(self, "crystal", crystal)
        object.__setattr__(self, "k", frozen(snap_k(as_floats("k", k, (3,)))))
        object.__setattr__(self, "tol", check_tol(tol))

    @property
    def tensors(self) -> FloatArray | ComplexArray:
        """Shape (n_sites, n_sites, 3, 3) in T/µB. [i, j] gives the field at i of site j; real where the sum is."""
        return coupling_tensors(self.crystal, self.k, self.tol, tuple(range(self.crystal.n_sites)))

    def energies(self, moments: Any) -> FloatArray:
        """Shape (n_candidates,) float in eV per cell. Dipolar energy at N = 0, averaged over cells for k ≠ 0.

        moments: Shape (n_candidates, n_sites, 3), µB, Cartesian, of the ions (occupancy is applied here); complex
        components at a general k, real ones where k and −k are the same vector.

        Raises InputError for other shapes, values that are not finite, or imaginary parts where they mean nothing.
        """
        parts = as_complex("moments", moments, (None, self.crystal.n_sites, 3))
        own_opposite = bool(is_self_conjugate(self.k[None])[0])
        if own_opposite and np.abs(parts.imag).max(initial=0.0) > 1e-9 * max(1.0, np.abs(parts).max(initial=0.0)):
            raise InputError(f"moments must be real at k = {self.k.tolist()}, where k and −k are the same vector.")
        mean = (parts * self.crystal.occupancies[:, None]).reshape(len(parts), -1)
        n = self.crystal.n_sites
        matrix = self.tensors.transpose(0, 2, 1, 3).reshape(3 * n, 3 * n)
        if own_opposite:
            real = mean.real
            return np.asarray(-0.5 * EV_PER_MUB_T * np.einsum("ci,ci->c", real, real @ matrix.T))
        return np.asarray(-0.25 * EV_PER_MUB_T * np.einsum("ci,ci->c", mean.conj(), mean @ matrix.T).real)


def require_bulk(crystal: Crystal) -> None:
    """Raise InputError unless the crystal is periodic in three directions, which the sums here need."""
    if not all(crystal.pbc):
        raise InputError(
            f"the structure is periodic along {crystal.pbc} only; sums are available for three periodic directions."
        )


def coupling_tensors(crystal: Crystal, k: FloatArray, tol: float, sites: tuple[int, ...]) -> FloatArray | ComplexArray:
    """Shape (n, n, 3, 3) in T/µB. Tensors between the given sites at k; kept for the next call."""
    require_bulk(crystal)
    if 9 * 16 * len(sites) ** 2 > MAX_TABLE_BYTES:
        raise LimitError(
            f"{len(sites)} magnetic sites need a table of tensors larger than {MAX_TABLE_BYTES // 2**30} GiB."
        )
    positions = np.ascontiguousarray(crystal.positions_cart[list(sites)])
    return _tensors(crystal.cell.tobytes(), positions.tobytes(), np.asarray(k, dtype=float).tobytes(), tol)


@lru_cache(maxsize=32)
def _tensors(cell: bytes, positions: bytes, k: bytes, tol: float) -> FloatArray | ComplexArray:
    plan = lattice_sum(np.frombuffer(cell).reshape(3, 3), np.frombuffer(k), tol)
    points = plan.place(np.frombuffer(positions).reshape(-1, 3))
    return frozen(plan.tensors(points, points))
