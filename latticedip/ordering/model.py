"""The Ordering: moments over the sites of one Crystal, as Fourier components.

Words used here and nowhere renamed:

k            propagation vector, in reduced coordinates of the crystal's own reciprocal cell
component    S_kj, complex Cartesian vector in µB of site j at k
moment       m_j(R) = Σ_k Re[S_kj exp(−2πi k·R)] of site j in the cell at lattice vector R: the phase counts cells
ion          a site whose component is not zero at some k; counted with its occupancy
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_complex, as_floats, frozen
from latticedip.crystal.model import Crystal, site_order
from latticedip.errors import InputError
from latticedip.ordering.uncertain import (
    AmplitudeUncertainty,
    aligned_parameters,
    moments_covariance,
    without_imaginary,
)

if TYPE_CHECKING:
    from ase import Atoms

#: A coordinate of k this close to an integer or a half is taken as it.
K_SNAP = 1e-9
#: Carried points closer than this in every fractional coordinate are one.
SAME_POINT = 1e-6
#: Below this size (µB) a component counts as zero; beyond the second it is a slip of units.
ZERO_MOMENT_MUB, LARGEST_MOMENT_MUB = 1e-12, 1e6
#: Relative rounding left by moments that cancel.
ROUNDING = 1e-13


@dataclass(frozen=True, eq=False)
class ParentTransform:
    """How the cell of an ordering derives from a parent cell: (a, b, c) = (a, b, c)_parent P, origin shift p.

    P: Shape (3, 3) float; columns give the child vectors in terms of the parent vectors (IUCr convention).
    p: Shape (3,) float; the child origin in parent fractional coordinates. x_parent = P x_child + p.
    """

    P: FloatArray
    p: FloatArray


@dataclass(frozen=True, eq=False)
class Reference:
    """The crystal in whose cell probe positions are given, where an ordering lives in another cell.

    crystal: the reference Crystal; the ordering's own cell is already turned into its Cartesian frame.
    transform: from the reference cell (parent) to the ordering's own cell (child).
    how: one sentence on where the transform comes from, for reports.
    """

    crystal: Crystal
    transform: ParentTransform
    how: str = ""

    def carry(self, position: Any) -> FloatArray:
        """Shape (n, 3) float. All points of the ordering's own cell that one reference position stands for.

        The reference lattice may be finer than the lattice of the ordering: one position then becomes several,
        in [0, 1), ordered by x, y, z.
        """
        inverse = np.linalg.inv(self.transform.P)
        # Whole reference cells that fit into the child cell: images of a box that covers it, made distinct.
        reach = int(np.ceil(np.abs(self.transform.P).sum(axis=1).max())) + 1
        steps = np.arange(-reach, reach + 1)
        shifts = np.stack(np.meshgrid(steps, steps, steps, indexing="ij"), axis=-1).reshape(-1, 3)
        points = ((np.asarray(position, dtype=float) + shifts - self.transform.p) @ inverse.T) % 1.0
        # The remainder of a tiny negative number rounds to 1.
        points[points == 1.0] = 0.0
        kept: list[FloatArray] = []
        while len(points):
            kept.append(points[0])
            gap = points - points[0]
            points = points[np.abs(gap - np.round(gap)).max(axis=1) > SAME_POINT]
        distinct = np.array(kept)
        return np.asarray(distinct[site_order(distinct)])


@dataclass(frozen=True, eq=False)
class SizeUncertainty:
    """Atoms whose moments were given one size with a standard uncertainty: all their components change by one factor.

    sites: indices of the atoms. relative: standard uncertainty of the factor, which is 1.
    """

    sites: tuple[int, ...]
    relative: float


@dataclass(frozen=True, eq=False)
class Ordering:
    """A named arrangement of moments over the sites of one Crystal; frozen, arrays read-only.

    crystal: the Crystal whose sites carry the moments.
    components: Shape (n, 3) or (n_k, n, 3), real or complex, Cartesian µB; stored as (n_k, n, 3).
    k: Shape (3,) or (n_k, 3) float. Stored as (n_k, 3).
    name: what tables call it.
    moment_su: Shape (n, 3) float in µB. Standard uncertainties of the crystal-axis components, NaN where unknown; at
        k ≠ 0 those of the amplitude.
    parent: how the cell derives from a parent cell, where a file states it.
    reference: the crystal in whose cell probes are given, where it is not ``crystal`` (set when a study is read).
    notes: sentences a report must repeat.
    size_su: where a size is uncertain and its direction is not; it then counts in the place of moment_su.
    amplitude_su: the independent parameters of the components, at any number of k, where their uncertainties are known
        one by one; for the atoms they change they count in the place of moment_su.

    Components at k equal or opposite modulo 1 are merged (S_k + conj S_−k). Where k and −k are the same vector
    only the real part has a meaning.

    Raises InputError for wrong shapes, values that are not finite, components or uncertainties beyond 1e6 µB, an
    imaginary part at such a k,    such a k, or an atom in both size_su and amplitude_su.
    """

    crystal: Crystal
    components: Any
    k: Any = (0.0, 0.0, 0.0)
    name: str = ""
    moment_su: Any = None
    parent: ParentTransform | None = None
    reference: Reference | None = field(default=None, repr=False)
    notes: tuple[str, ...] = field(default=(), repr=False)
    size_su: tuple[SizeUncertainty, ...] = field(default=(), repr=False)
    amplitude_su: tuple[AmplitudeUncertainty, ...] = field(default=(), repr=False)

    def __post_init__(self) -> None:
        if not isinstance(self.crystal, Crystal):
            raise InputError(f"an Ordering needs a Crystal, got {type(self.crystal).__name__}.")
        n = self.crystal.n_sites
        k = as_floats("k", self.k, (3,) if _depth(self.k) == 1 else (None, 3)).reshape(-1, 3)
        if len(k) == 0:
            raise InputError("an Ordering needs at least one propagation vector.")
        flat = _depth(self.components) == 2 and len(k) == 1
        components = as_complex("components", self.components, (n, 3) if flat else (len(k), n, 3)).reshape(-1, n, 3)
        largest = float(np.abs(components).max(initial=0.0))
        if largest > LARGEST_MOMENT_MUB:
            raise InputError(f"a moment of {largest:.6g} µB is beyond {LARGEST_MOMENT_MUB:g} µB. Give Bohr magnetons.")
        for axis, periodic in enumerate(self.crystal.pbc):
            if not periodic and np.any(np.abs(k[:, axis]) > K_SNAP):
                raise InputError(f"k has a component along direction {axis + 1}, in which the crystal is not periodic.")
        parameters = aligned_parameters(self.amplitude_su, len(k), n)
        given = snap_k(k)
        k, components = merge_components(given, components)
        if len(k) != len(given):
            parameters = tuple(
                AmplitudeUncertainty(one.sites, merge_components(given, one.steps)[1]) for one in parameters
            )
        own_opposite = is_self_conjugate(k)
        parameters = tuple(without_imaginary(one, own_opposite) for one in parameters)
        self._refuse_two_uncertainties(parameters)
        scale = max(1.0, float(np.abs(components).max(initial=0.0)))
        for i in np.flatnonzero(own_opposite):
            imaginary = np.abs(components[i].imag)
            if imaginary.max(initial=0.0) > 1e-9 * scale:
                site = int(np.argmax(imaginary.max(axis=1)))
                raise InputError(
                    f"at k = {k[i].tolist()} (k and −k are the same vector) the component of site {site + 1} "
                    f"({self.crystal.labels[site]}) has an imaginary part of {imaginary[site].max():.6g} µB, which "
                    "has no meaning there. Give real components."
                )
            components[i].imag = 0.0
        su = np.full((n, 3), np.nan)
        if self.moment_su is not None:
            su = np.asarray(self.moment_su)
            if su.dtype.kind not in "iuf" or su.shape != (n, 3) or np.any(su < 0):
                raise InputError(f"moment_su must hold numbers of at least 0 or NaN in shape ({n}, 3).")
            if np.any(su > LARGEST_MOMENT_MUB):
                raise InputError(
                    f"moment_su holds {np.nanmax(su):.6g} µB, beyond {LARGEST_MOMENT_MUB:g} µB. Give Bohr magnetons."
                )
            su = su.astype(float)
        for key, value in (("components", components), ("k", k), ("moment_su", su)):
            object.__setattr__(self, key, frozen(value))
        object.__setattr__(self, "amplitude_su", parameters)

    def _refuse_two_uncertainties(self, parameters: Sequence[AmplitudeUncertainty]) -> None:
        sized = {site for group in self.size_su for site in group.sites}
        both = sorted(sized & {site for one in parameters for site in one.sites})
        if both:
            raise InputError(
                f"site {both[0] + 1} ({self.crystal.labels[both[0]]}) stands in size_su and in amplitude_su, which "
                "would count its uncertainty twice. Leave one out."
            )

    def moments(self, cells: Sequence[Sequence[int]] | Any = ((0, 0, 0),)) -> FloatArray:
        """Shape (n_cells, n_sites, 3) float in µB. Cartesian moments in the cells at lattice vectors ``cells``."""
        lattice = as_floats("cells", cells, (None, 3))
        if np.any(lattice != np.round(lattice)):
            raise InputError("cells must be whole numbers: they count lattice vectors.")
        turns = (lattice @ self.k.T) % 1.0
        phases = np.exp(-2j * np.pi * turns)
        return np.asarray(np.einsum("ck,kja->cja", phases, self.components).real)

    def moments_covariance(self, cells: Sequence[Sequence[int]] | Any = ((0, 0, 0),)) -> FloatArray:
        """Shape (n_cells, n_sites, 3, 3) float in µB². What ``amplitude_su`` makes uncertain of Cartesian moments.

        cells: as `moments`. NaN for atoms that ``amplitude_su`` does not change.
        """
        lattice = as_floats("cells", cells, (None, 3))
        return moments_covariance(self.amplitude_su, self.k, lattice, self.crystal.n_sites)

    @cached_property
    def is_magnetic(self) -> np.ndarray:
        """Shape (n_sites,) bool. True for sites that carry a component at some k."""
        return frozen(np.abs(self.components).max(axis=(0, 2)) > ZERO_MOMENT_MUB)

    @cached_property
    def n_ions(self) -> float:
        """Magnetic ions per cell, counted with their occupancy."""
        return float(self.crystal.occupancies[self.is_magnetic].sum())

    @cached_property
    def mean_components(self) -> ComplexArray:
        """Shape (n_k, n_sites, 3) complex in µB. Components times occupancy, which is what every sum takes."""
        return frozen(self.components * self.crystal.occupancies[None, :, None])

    @cached_property
    def net_moment(self) -> FloatArray:
        """Shape (3,) float in µB per cell. Σ p m over the cell, averaged over cells (the k = 0 part).

        Components that are no more than the rounding of the sum are zero.
        """
        uniform = np.all(self.k == np.round(self.k), axis=1)
        moments = self.mean_components[uniform].real
        total = moments.sum(axis=(0, 1))
        return frozen(np.where(np.abs(total) > ROUNDING * np.abs(moments).sum(), total, 0.0))

    def rotated(self, rotation: Any, name: str | None = None) -> Ordering:
        """The same pattern with every moment turned by a (3, 3) rotation matrix; sites stay.

        Raises InputError where the matrix is not a rotation (to 1e-6).
        """
        matrix = as_floats("rotation", rotation, (3, 3))
        if np.abs(matrix @ matrix.T - np.eye(3)).max() > 1e-6 or np.linalg.det(matrix) < 0:
            raise InputError(f"rotation must be a proper rotation matrix, got {matrix.tolist()}.")
        return Ordering(
            self.crystal,
            self.components @ matrix.T,
            self.k,
            self.name if name is None else name,
            parent=self.parent,
            reference=self.reference,
            notes=self.notes,
            size_su=self.size_su,
            amplitude_su=tuple(one.turned(matrix) for one in self.amplitude_su),
        )

    @classmethod
    def from_ase(cls, atoms: Atoms, name: str = "") -> Ordering:
        """Build an Ordering (k = 0) from the magnetic moments of ASE atoms; scalar moments lie along z."""
        from latticedip.ordering.convert import ordering_from_ase

        return ordering_from_ase(atoms, name)

    def to_ase(self, repeat: Sequence[int] = (1, 1, 1)) -> Atoms:
        """Return ASE atoms of ``repeat`` cells with vector initial magnetic moments (of the ions, µB)."""
        from latticedip.ordering.convert import ordering_to_ase

        return ordering_to_ase(self, repeat)


def _depth(value: Any) -> int:
    try:
        return np.ndim(value)
    except ValueError:
        # Rows of unequal length; the gate for arrays says so.
        return -1


def snap_k(k: FloatArray) -> FloatArray:
    """Return k with every coordinate within 1e-9 of an integer or a half set to it."""
    halves = np.round(2 * k) / 2
    return np.where(np.abs(k - halves) <= K_SNAP, halves, k)


def is_self_conjugate(k: FloatArray) -> np.ndarray:
    """Shape (n_k,) bool. True where k and −k are the same vector modulo 1 (k snapped before)."""
    return np.all(2 * k == np.round(2 * k), axis=1)


def merge_components(k: FloatArray, components: ComplexArray) -> tuple[FloatArray, ComplexArray]:
    """Merge components whose k are equal (added) or opposite (conjugate added) modulo 1."""
    kept_k: list[FloatArray] = []
    kept: list[ComplexArray] = []
    for vector, part in zip(k, components, strict=True):
        for i, other in enumerate(kept_k):
            if _same_modulo_one(vector, other):
                kept[i] = kept[i] + part
                break
            if _same_modulo_one(vector, -other):
                kept[i] = kept[i] + part.conj()
                break
        else:
            kept_k.append(vector)
            kept.append(np.array(part))
    return np.array(kept_k), np.array(kept)


def _same_modulo_one(first: FloatArray, second: FloatArray) -> bool:
    difference = first - second
    return bool(np.all(np.abs(difference - np.round(difference)) <= K_SNAP))
