"""Coupling: the dipole tensors between the sites of a crystal at one k, shared by all candidate orderings."""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass
from threading import Lock
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_complex, as_floats, check_tol, frozen
from latticedip.crystal.model import OVERLAP_A, SAME_PLACE_A, Crystal
from latticedip.crystal.neighbours import close_pairs
from latticedip.errors import InputError, LimitError
from latticedip.ordering.model import is_self_conjugate, snap_k
from latticedip.physics.candidates import (
    ImaginaryPartError,
    candidate_array,
    energies_in_blocks,
    half_form,
    sign_array,
    sign_quadratics,
)
from latticedip.sums.bulk import lattice_sum
from latticedip.units import EV_PER_MUB_T

#: Largest table of tensors made, in bytes.
MAX_TABLE_BYTES = 4 * 2**30
#: Tables kept for the next call hold together at most this many bytes, or are a single one.
MAX_KEPT_BYTES = 2**29


@dataclass(frozen=True, eq=False)
class Coupling:
    """Dipole tensors T_ij(k) = Σ_R T(τ_i − τ_j − R) exp(−2πi k·R) between all sites of a crystal, N = 0.

    crystal: the Crystal, periodic in three directions. k: Shape (3,), reduced coordinates. tol: as `dipole_tensor`.
    A site does not feel itself. Positions are those of the crystal as given, in the home cell.

    Atoms that share a place (within 1e-3 Å) do not feel each other.

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
        components at a general k, real ones where k and −k are the same vector. Never copied whole.

        Raises InputError for other shapes, values that are not finite, imaginary parts where they mean nothing, or
        two magnetic sites between 1e-3 and 0.1 Å apart.
        """
        n = self.crystal.n_sites
        raw = candidate_array(moments, n)
        if np.any(self.crystal.occupancies != 1):
            refuse_split_ions(self.crystal, np.flatnonzero(np.any(raw != 0, axis=(0, 2))))
        weights = np.repeat(self.crystal.occupancies, 3)
        matrix = self.tensors.transpose(0, 2, 1, 3).reshape(3 * n, 3 * n)
        # Real moments see the real part alone, and it is half the work.
        form = matrix if raw.dtype.kind == "c" else matrix.real
        try:
            return energies_in_blocks(raw, half_form(form * (self._scale * np.outer(weights, weights))))
        except ImaginaryPartError:
            raise InputError(
                f"moments must be real at k = {self.k.tolist()}, where k and −k are the same vector."
            ) from None

    def sign_energies(self, signs: Any, axes: Any) -> FloatArray:
        """Shape (n_candidates,) float in eV per cell. As `energies`, for moments signs[c, i] · axes[i].

        signs: Shape (n_candidates, n_sites), +1 or −1; int8 is taken as it is. axes: Shape (n_sites, 3) or (3,), µB,
        Cartesian, of the ions; complex at a general k. A site with a zero axis carries no moment.

        Raises InputError for other shapes, other signs, values that are not finite, and as `energies` does.
        """
        n = self.crystal.n_sites
        flat = np.ndim(axes) == 1
        vectors = np.broadcast_to(as_complex("axes", axes, (3,) if flat else (n, 3)), (n, 3))
        pattern = sign_array(signs, n)
        if self.is_self_conjugate and np.abs(vectors.imag).max(initial=0.0) > 0:
            raise InputError(f"axes must be real at k = {self.k.tolist()}, where k and −k are the same vector.")
        refuse_split_ions(self.crystal, np.flatnonzero(np.any(vectors != 0, axis=1)))
        mean = vectors * self.crystal.occupancies[:, None]
        form = np.einsum("ia,ijab,jb->ij", mean.conj(), self.tensors, mean, optimize=True).real
        return sign_quadratics(pattern, self._scale * 0.5 * (form + form.T))

    def sign_forms(self, signs: Any, sizes: Any) -> FloatArray:
        """Shape (n_candidates, 3, 3) float in eV per cell. Q of E(û) = û·Q·û, the energy of moments s_i sizes_i û.

        signs: as in `sign_energies`. sizes: Shape (n_sites,) float, µB, of the ions. The lowest eigenvalue of Q is the
        energy of the pattern along its best axis, which is the eigenvector.

        Raises InputError as `sign_energies` does.
        """
        n = self.crystal.n_sites
        lengths = as_floats("sizes", sizes, (n,))
        pattern = sign_array(signs, n)
        refuse_split_ions(self.crystal, np.flatnonzero(lengths))
        mean = lengths * self.crystal.occupancies
        out = np.empty((len(pattern), 3, 3))
        for a in range(3):
            for b in range(a, 3):
                # The tensors are symmetric in a and b, and Hermitian in i and j: the real part is symmetric.
                form = self._scale * mean[:, None] * self.tensors[:, :, a, b].real * mean[None, :]
                out[:, a, b] = out[:, b, a] = sign_quadratics(pattern, 0.5 * (form + form.T))
        return out

    @property
    def is_self_conjugate(self) -> bool:
        """True where k and −k are the same vector, so that only real components have a meaning."""
        return bool(is_self_conjugate(self.k[None])[0])

    @property
    def _scale(self) -> float:
        """−½ for real components, −¼ for a Fourier pair, in eV per µB T."""
        return (-0.5 if self.is_self_conjugate else -0.25) * EV_PER_MUB_T


def require_bulk(crystal: Crystal) -> None:
    """Raise InputError unless the crystal is periodic in three directions, which the sums here need."""
    if not isinstance(crystal, Crystal):
        raise InputError(f"a Crystal is needed here, got {type(crystal).__name__}.")
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
    places = crystal.places_cart[list(sites)]
    vector = np.asarray(k, dtype=float)
    key = crystal.cell.tobytes(), places.tobytes(), vector.tobytes(), tol
    with _lock:
        if key in _kept:
            _kept.move_to_end(key)
            return _kept[key]
    plan = lattice_sum(crystal.cell, vector, tol)
    points = plan.place(places)
    table = frozen(plan.tensors(points, points))
    with _lock:
        _kept[key] = table
        while len(_kept) > 1 and sum(kept.nbytes for kept in _kept.values()) > MAX_KEPT_BYTES:
            _kept.popitem(last=False)
    return table


_kept: OrderedDict[tuple[bytes, bytes, bytes, float], FloatArray | ComplexArray] = OrderedDict()
_lock = Lock()


def refuse_split_ions(crystal: Crystal, ions: np.ndarray) -> None:
    """Raise InputError where two magnetic sites are apart but too close to be there together."""
    if np.all(crystal.occupancies[ions] == 1):
        return
    wanted = {int(i) for i in ions}
    for i, j, distance in close_pairs(crystal, OVERLAP_A):
        if distance > SAME_PLACE_A and i in wanted and j in wanted:
            raise InputError(
                f"the magnetic atoms {crystal.labels[i]} (number {i + 1}) and {crystal.labels[j]} (number {j + 1}) are "
                f"{distance:.4f} Å apart, so that only one is there at a time. Give both the same position."
            )
