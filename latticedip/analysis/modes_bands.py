"""Dipolar modes at given propagation vectors: eigenvalues of the coupling matrix as energies per ion.

Write the moment of site i as m_i = size_i s_i, its mean as p_i m_i (p the occupancy), and T(k) for the matrix of dipole
tensors between the S magnetic sites. With D = diag(p_i size_i) the energy per ion of an ordering at k is

    E = s† H(k) s / Σ|s_i|²,   H(k) = −½ (S/Σp) D T(k) D,   if Σ_i ⟨|s_i|²⟩ = S (averaged over cells),

which every ordering with |m_i| = size_i obeys. So no such ordering lies below the lowest eigenvalue of H over all k
(Luttinger and Tisza, Phys. Rev. 70, 954 (1946), the weak constraint).

k = 0 is a point apart. There the sum means N = 0 and a sample adds +½(µ0/V)(S/Σp) D_i N D_j between all pairs, while
the limit k → 0 along a direction k̂ is that of N = k̂k̂: longitudinal waves pay, transverse ones keep the N = 0 value.
"""

from __future__ import annotations

import numbers
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_floats, check_tol, frozen
from latticedip.crystal.bandpath import BandPath, band_path
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError
from latticedip.kernels.jit import over_rows
from latticedip.physics.coupling import refuse_split_ions, require_bulk
from latticedip.sample import Sample
from latticedip.sums.many_k import ManyK, many_k
from latticedip.units import EV_PER_MUB_T, MU0_T_A3_PER_MUB

#: Eigenvalues of matrices up to this size are found on several threads, some k each.
THREADED = 64


@dataclass(frozen=True, eq=False)
class MagneticSites:
    """The magnetic sites of a crystal with their moment sizes. See `magnetic_sites`.

    of_site: Shape (n_sites,) float in µB, 0 for sites without a moment. tol: as `dipole_tensor`.
    shift: Shape (S,) float in eV per ion, or None. Taken from the diagonal of every matrix, site by site; it adds up to
        zero, so that energies at equal moments are as without it (see `latticedip.analysis.modes_balance`).
    """

    crystal: Crystal
    of_site: FloatArray
    tol: float = 1e-10
    shift: FloatArray | None = None

    @cached_property
    def ions(self) -> np.ndarray:
        """Shape (S,) int. The sites that carry a moment."""
        return frozen(np.flatnonzero(self.of_site))

    @cached_property
    def n_ions(self) -> float:
        """Ions per cell, counted with their occupancy."""
        return float(self.crystal.occupancies[self.ions].sum())

    @cached_property
    def means(self) -> FloatArray:
        """Shape (S,) float in µB. Occupancy times size."""
        return frozen(self.crystal.occupancies[self.ions] * self.of_site[self.ions])

    @property
    def plan(self) -> ManyK:
        """The tables for T(k) between the magnetic sites."""
        places = np.ascontiguousarray(self.crystal.places_cart[self.ions])
        return _plan(self.crystal.cell.tobytes(), places.tobytes(), self.tol)

    @cached_property
    def _scale(self) -> FloatArray:
        """Shape (S, 3, S, 3). −½ (S/Σp) D_i D_j in eV per T/µB."""
        factor = -0.5 * EV_PER_MUB_T * len(self.ions) / self.n_ions
        outer = factor * np.outer(self.means, self.means)
        return np.broadcast_to(outer[:, None, :, None], (len(self.ions), 3, len(self.ions), 3))

    def matrices(self, k: FloatArray) -> ComplexArray:
        """Shape (n_k, 3S, 3S) complex in eV per ion. H(k), N = 0 at k = 0; ask for ``plan.block`` k at a time."""
        m = 3 * len(self.ions)
        out = np.asarray((self.plan.matrices(k) * self._scale).reshape(len(k), m, m))
        if self.shift is not None:
            out[:, np.arange(m), np.arange(m)] -= np.repeat(self.shift, 3)
        return out

    def uniform_matrix(self, tensor: FloatArray) -> FloatArray:
        """Shape (3S, 3S) float in eV per ion. H(0) with a demagnetizing tensor N (3, 3)."""
        m = 3 * len(self.ions)
        stray = -MU0_T_A3_PER_MUB / self.crystal.volume_A3 * np.asarray(tensor)[None, :, None, :]
        shape = (stray * self._scale).reshape(m, m)
        return np.asarray(self.matrices(np.zeros((1, 3)))[0].real + shape)

    def lowest(self, k: FloatArray) -> FloatArray:
        """Shape (n_k,) float in eV per ion. The lowest eigenvalue at each k."""
        return self.energies(k)[:, 0]

    def energies(self, k: FloatArray) -> FloatArray:
        """Shape (n_k, 3S) float in eV per ion. All eigenvalues at each k, lowest first, N = 0 at k = 0."""
        vectors = np.ascontiguousarray(k, dtype=float)
        out = np.empty((len(vectors), 3 * len(self.ions)))
        block = self.plan.block

        for start in range(0, len(vectors), block):
            matrices = self.matrices(vectors[start : start + block])
            part = out[start : start + block]

            def fill(first: int, last: int, matrices: ComplexArray = matrices, part: FloatArray = part) -> None:
                part[first:last] = np.linalg.eigvalsh(matrices[first:last])

            # Large matrices are shared between threads by the linear algebra library; two levels of threads get in
            # each other's way.
            over_rows(fill, len(part), at_least=16 if out.shape[1] <= THREADED else len(part) + 1)
        return out

    @cached_property
    def error_bound_eV(self) -> float:
        """Error of an eigenvalue in eV per ion that follows from ``tol`` (with the tensors of k = 0 for their size)."""
        largest = np.maximum(1.0, np.abs(self.plan.matrices(np.zeros((1, 3)))[0]).max(axis=(1, 3)))
        return float(3 * self.tol * (np.abs(self._scale[:, 0, :, 0]) * largest).sum(axis=1).max())

    @cached_property
    def scale_eV(self) -> float:
        """The largest eigenvalue in size at k = 0, eV per ion: what differences are small against."""
        return float(np.abs(np.linalg.eigvalsh(self.uniform_matrix(np.zeros((3, 3))))).max())


@lru_cache(maxsize=8)
def _plan(cell: bytes, places: bytes, tol: float) -> ManyK:
    return many_k(np.frombuffer(cell).reshape(3, 3), np.frombuffer(places).reshape(-1, 3), tol)


def magnetic_sites(crystal: Crystal, sizes: Mapping[str, float], tol: float = 1e-10) -> MagneticSites:
    """The magnetic sites that ``sizes`` names.

    sizes: label or element to moment size in µB, above zero; a label goes before its element. Sites that are not named
    carry no moment.

    Raises InputError for a crystal that is not periodic in three directions, sizes that are not such a table, an
    unknown name, or two magnetic sites between 1e-3 and 0.1 Å apart.
    """
    require_bulk(crystal)
    if not isinstance(sizes, Mapping):
        raise InputError(f"sizes must map labels or elements to moments in µB, such as {{'Mn': 4.6}}, got {sizes!r}.")
    if not sizes:
        raise InputError("sizes is empty: no site is magnetic. Give a moment in µB by label or element.")
    of_site = np.zeros(crystal.n_sites)
    for by_label in (False, True):
        for name, size in sizes.items():
            if (name in crystal.labels) is not by_label:
                continue
            if isinstance(size, bool) or not isinstance(size, numbers.Real) or not 0 < float(size) < np.inf:
                raise InputError(
                    f"sizes[{name!r}] must be a moment above zero in µB, got {size!r}. "
                    "Leave out sites without a moment."
                )
            of_site[list(crystal.find(name))] = float(size)
    sites = MagneticSites(crystal, frozen(of_site), check_tol(tol))
    refuse_split_ions(crystal, sites.ions)
    return sites


def eigenvalues(crystal: Crystal, sizes: Mapping[str, float], k_points: Any, *, tol: float = 1e-10) -> FloatArray:
    """Shape (n_k, 3S) float in eV per ion. Energies of the dipolar modes at each k, lowest first; S magnetic sites.

    k_points: Shape (n_k, 3), reduced coordinates; N = 0 where k is a whole vector (other values: `uniform_eigenvalues`,
    `limit_eigenvalues`). sizes: as in `magnetic_sites`. tol: as `dipole_tensor`, for the tensors.

    Raises InputError for a wrong shape, and as `magnetic_sites` does; LimitError for too many sites.
    """
    return magnetic_sites(crystal, sizes, tol).energies(as_floats("k_points", k_points, (None, 3)))


def limit_eigenvalues(
    crystal: Crystal, sizes: Mapping[str, float], directions: Any, *, tol: float = 1e-10
) -> FloatArray:
    """Shape (n, 3S) float in eV per ion. Energies of the modes in the limit k → 0 along each direction.

    directions: Shape (n, 3), Cartesian, any length but zero.

    Raises InputError for a zero direction, and as `eigenvalues` does.
    """
    sites = magnetic_sites(crystal, sizes, tol)
    vectors = as_floats("directions", directions, (None, 3))
    lengths = np.linalg.norm(vectors, axis=1)
    if np.any(lengths == 0):
        number = int(np.argmin(lengths)) + 1
        raise InputError(f"directions: number {number} is the zero vector, which has no direction.")
    units = vectors / lengths[:, None]
    return np.array([np.linalg.eigvalsh(sites.uniform_matrix(np.outer(u, u))) for u in units]).reshape(len(units), -1)


def uniform_eigenvalues(
    crystal: Crystal, sizes: Mapping[str, float], *, sample: Sample | None = None, tol: float = 1e-10
) -> FloatArray:
    """Shape (3S,) float in eV per ion. Energies of the modes at k = 0 itself in a sample (None: N = 0), lowest first.

    Raises InputError as `eigenvalues` does.
    """
    sites = magnetic_sites(crystal, sizes, tol)
    tensor = (Sample() if sample is None else sample).demagnetizing_tensor
    return np.asarray(np.linalg.eigvalsh(sites.uniform_matrix(tensor)))


@dataclass(frozen=True, eq=False)
class Bands:
    """Energies of the dipolar modes along the band path of the lattice.

    path: k, distances and names. energies_eV_per_ion: Shape (n, 3S), lowest first. is_limit: Shape (n,) bool; True
    where k is a whole vector: the row is the limit k → 0 along the segment, which depends on its direction.
    uniform_eV_per_ion: Shape (3S,), at k = 0 itself with the sample. notes: what a report repeats.
    """

    path: BandPath
    energies_eV_per_ion: FloatArray
    is_limit: np.ndarray
    uniform_eV_per_ion: FloatArray
    boundary: str
    notes: tuple[str, ...] = ()

    def rows(self) -> list[dict[str, Any]]:
        """One plain dict per k and band, for a table."""
        return [
            {
                "distance_per_A": float(self.path.distance[i]),
                "k1": float(k[0]),
                "k2": float(k[1]),
                "k3": float(k[2]),
                "limit_k_to_0": bool(self.is_limit[i]),
                "band": band + 1,
                "energy_ueV_per_ion": float(energy) * 1e6,
            }
            for i, k in enumerate(self.path.k)
            for band, energy in enumerate(self.energies_eV_per_ion[i])
        ]

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        return {
            "boundary": self.boundary,
            "k": self.path.k.tolist(),
            "distance_per_A": self.path.distance.tolist(),
            "ticks": [{"distance_per_A": x, "name": name} for x, name in self.path.ticks],
            "special_points": {name: list(k) for name, k in self.path.points.items()},
            "limit_k_to_0": self.is_limit.tolist(),
            "energies_ueV_per_ion": (self.energies_eV_per_ion * 1e6).tolist(),
            "uniform_energies_ueV_per_ion": (self.uniform_eV_per_ion * 1e6).tolist(),
            "notes": list(self.notes),
        }


def bands(
    crystal: Crystal,
    sizes: Mapping[str, float],
    *,
    n_points: int = 200,
    sample: Sample | None = None,
    tol: float = 1e-10,
) -> Bands:
    """Energies of the dipolar modes along the band path of the lattice, with the limits k → 0 along the path.

    n_points: about so many k in all. A sample matters at k = 0 itself alone, which is reported apart.

    Raises InputError for a lattice without a band path, and as `eigenvalues` does.
    """
    sites = magnetic_sites(crystal, sizes, tol)
    path = band_path(crystal, n_points)
    energies = sites.energies(path.k)
    is_limit = np.all(np.abs(path.k - np.round(path.k)) < 1e-12, axis=1)
    reciprocal = 2 * np.pi * np.linalg.inv(crystal.cell).T
    for i in np.flatnonzero(is_limit):
        along = np.flatnonzero(path.segment == path.segment[i])
        other = along[-1] if i == along[0] else along[0]
        direction = (path.k[other] - path.k[i]) @ reciprocal
        unit = direction / np.linalg.norm(direction)
        energies[i] = np.linalg.eigvalsh(sites.uniform_matrix(np.outer(unit, unit)))
    specimen = Sample() if sample is None else sample
    return Bands(
        path,
        frozen(energies),
        frozen(is_limit),
        frozen(np.linalg.eigvalsh(sites.uniform_matrix(specimen.demagnetizing_tensor))),
        mode_boundary(sample),
        crystal.notes,
    )


def mode_boundary(sample: Sample | None) -> str:
    """In words, what boundary the energies of modes assume."""
    shape = "N = 0 (no shape stated)" if sample is None else sample.shape
    return f"k = 0 itself: {shape}; k → 0: along the direction of k, transverse waves at the N = 0 value"
