"""The lowest dipolar mode: a lower bound of the dipolar energy of every ordering, and the ordering that reaches it.

Luttinger and Tisza, Phys. Rev. 70, 954 (1946); Lyons and Kaplan, Phys. Rev. 120, 1580 (1960). Energies and words as in
`latticedip.analysis.modes_bands`.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from latticedip.analysis.modes_balance import balance
from latticedip.analysis.modes_bands import MagneticSites, magnetic_sites, mode_boundary
from latticedip.analysis.modes_equal import Combination, combine
from latticedip.analysis.modes_search import EQUAL, local_minima, magnetic_lattice
from latticedip.analysis.rank import Ranking
from latticedip.checks import ComplexArray, FloatArray, as_floats, frozen
from latticedip.crystal.kpoints import star, wave_rotations
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering, is_self_conjugate, snap_k
from latticedip.sample import Sample

#: Eigenvalues closer than this part of their scale belong to one level.
LEVEL = 1e-7
#: Arms of a star combined at most.
MOST_ARMS = 4
#: Moments that agree within this part are of the stated size.
SAME_SIZE = 1e-6


@dataclass(frozen=True, eq=False)
class LowestMode:
    """A dipolar mode of locally or globally lowest energy.

    crystal: the Crystal. sizes: Shape (n_sites,) float in µB, 0 for sites without a moment.
    k: Shape (3,), reduced coordinates; shape (n_k, 3) where only several arms of the star together have equal moments;
        None where the energy is only approached as k → 0. direction: then the Cartesian unit vector along which k → 0,
        across the net moment; else None.
    energy_per_ion_eV: lowest eigenvalue; for the lowest mode a lower bound for all orderings with these sizes.
    components: Shape (n_sites, 3), or (n_k, n_sites, 3) with several k; µB, Cartesian, real where k and −k are the same
        vector. An Ordering of them at k (at 0 where k is None, with N = 0) has this energy. Their mean square over
        sites, each in units of its size, is 1; where equal_moments is True every moment has its size in every cell.
    equal_moments: whether an ordering with equal moments reaches the energy, as far as the search found.
    degeneracy: number of modes of the level at one k. star: Shape (n, 3), the arms, k first; at k = 0 one row.
    uniform_energy_per_ion_eV: lowest eigenvalue at k = 0 itself, with the sample's demagnetizing tensor.
    n_ions: ions per cell, with occupancy. error_bound_eV: bound of the error of the eigenvalue, per ion, from ``tol``.
    boundary: the assumed boundary in words. notes: sentences a report must repeat.
    """

    crystal: Crystal
    sizes: FloatArray
    k: FloatArray | None
    direction: FloatArray | None
    energy_per_ion_eV: float
    components: FloatArray | ComplexArray
    equal_moments: bool
    degeneracy: int
    star: FloatArray
    uniform_energy_per_ion_eV: float
    n_ions: float
    error_bound_eV: float
    boundary: str
    notes: tuple[str, ...] = field(default=())

    def ordering(self, name: str = "") -> Ordering:
        """The mode as an Ordering; where k is None, the uniform one whose N = 0 energy is approached."""
        return Ordering(self.crystal, self.components, np.zeros(3) if self.k is None else self.k, name)

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        return {
            "boundary": self.boundary,
            "k": None if self.k is None else self.k.tolist(),
            "direction_cart": None if self.direction is None else self.direction.tolist(),
            "energy_ueV_per_ion": self.energy_per_ion_eV * 1e6,
            "equal_moments": self.equal_moments,
            "degeneracy": self.degeneracy,
            "star": self.star.tolist(),
            "components_muB": self.components.tolist(),
            "sizes_muB": self.sizes.tolist(),
            "uniform_energy_ueV_per_ion": self.uniform_energy_per_ion_eV * 1e6,
            "ions_per_cell": self.n_ions,
            "error_bound_ueV_per_ion": self.error_bound_eV * 1e6,
            "notes": list(self.notes),
        }


def lowest_mode(
    crystal: Crystal, sizes: Mapping[str, float], *, sample: Sample | None = None, tol: float = 1e-10
) -> LowestMode:
    """The dipolar mode of lowest energy over all k: no ordering with moments of these sizes lies below it.

    crystal: periodic in three directions. sizes: label or element to moment size in µB, above zero; sites not named
    carry none. sample: changes k = 0 itself alone, where it adds the energy of its demagnetizing field; transverse
    waves with k → 0 keep the N = 0 value, so that the energy may be approached only. An applied field plays no part.
    tol: as `dipole_tensor`, for the tensors. Where several k are equally low, one with equal moments comes first.

    The minimum over k is searched from a mesh, not proved. Raises InputError and LimitError as `eigenvalues` does.
    """
    return _first(_modes(magnetic_sites(crystal, sizes, tol), sample, 6))


def balanced_mode(
    crystal: Crystal, sizes: Mapping[str, float], *, sample: Sample | None = None, tol: float = 1e-10
) -> LowestMode:
    """As `lowest_mode`, with the highest bound that weights of the sites can give (Lyons and Kaplan 1960).

    Where sites are not equivalent the plain mode may put most of its amplitude on a few of them, and its energy then
    lies far below every ordering. Here energy_per_ion_eV is the better bound; it is the energy of the components only
    where their moments are equal. The same as `lowest_mode` where all magnetic sites are equivalent.

    Raises InputError and LimitError as `eigenvalues` does.
    """
    sites = magnetic_sites(crystal, sizes, tol)
    plain = _first(_modes(sites, sample, 6))
    shift = balance(sites)
    if shift is None:
        return plain
    found = _first(_modes(replace(sites, shift=frozen(shift)), sample, 6))
    return found if found.energy_per_ion_eV > plain.energy_per_ion_eV else plain


def lowest_modes(
    crystal: Crystal,
    sizes: Mapping[str, float],
    *,
    sample: Sample | None = None,
    keep: int = 6,
    tol: float = 1e-10,
) -> tuple[LowestMode, ...]:
    """The modes at local minima over k, lowest first: k = 0 (and the limit k → 0) and up to ``keep`` others.

    With a sample that makes k = 0 itself higher, both k = 0 and the limit are listed. Where energies are equal, k = 0
    comes before k ≠ 0, and both before a limit that is not reached.

    Raises InputError for a ``keep`` that is not a whole number, and as `lowest_mode` does.
    """
    if isinstance(keep, bool) or not isinstance(keep, (int, np.integer)) or keep < 0:
        raise InputError(f"keep must be a whole number, at least 0, got {keep!r}.")
    return _modes(magnetic_sites(crystal, sizes, tol), sample, int(keep))


def modes_at(
    crystal: Crystal,
    sizes: Mapping[str, float],
    k_points: Any,
    *,
    sample: Sample | None = None,
    tol: float = 1e-10,
) -> tuple[LowestMode, ...]:
    """The lowest mode at each given k, in the order given; where it is not a minimum over k, it is no bound.

    k_points: Shape (n, 3), reduced coordinates. A whole vector means k = 0 itself, with the sample.

    Raises InputError for a wrong shape, and as `lowest_mode` does.
    """
    vectors = snap_k(as_floats("k_points", k_points, (None, 3)))
    sites = magnetic_sites(crystal, sizes, tol)
    rotations = wave_rotations(magnetic_lattice(sites))
    maker = _Maker.of(sites, sample)
    modes = []
    for k in vectors:
        if np.all(k == np.round(k)):
            modes.append(maker.at_zero(maker.shaped, reached=True))
        else:
            modes.append(maker.at_minimum(k, star(k, rotations)))
    return tuple(modes)


def half_vectors(include_zero: bool = True) -> FloatArray:
    """Shape (8 or 7, 3) float. The k for which k and −k are the same vector: every coordinate 0 or ½."""
    vectors = np.array(list(itertools.product((0.0, 0.5), repeat=3)))
    return vectors if include_zero else vectors[1:]


def _first(modes: tuple[LowestMode, ...]) -> LowestMode:
    equal = [mode for mode in modes if mode.energy_per_ion_eV <= modes[0].energy_per_ion_eV + _slack(mode)]
    return next((mode for mode in equal if mode.equal_moments), equal[0])


def _modes(sites: MagneticSites, sample: Sample | None, keep: int) -> tuple[LowestMode, ...]:
    minima, _ = local_minima(sites)
    maker = _Maker.of(sites, sample)
    modes = [maker.at_zero(maker.shaped, reached=True)]
    modes += [maker.at_minimum(minimum.k, minimum.star) for minimum in minima[:keep]]
    free = np.linalg.eigh(sites.uniform_matrix(np.zeros((3, 3))))
    if float(free[0][0]) < maker.uniform_eV - _slack(modes[0]):
        modes.append(maker.at_zero((free[0], free[1]), reached=False))
    # Among equal energies the order above holds.
    ranked: list[LowestMode] = []
    while modes:
        lowest = min(mode.energy_per_ion_eV for mode in modes)
        tied = [mode for mode in modes if mode.energy_per_ion_eV <= lowest + _slack(mode)]
        ranked += tied
        modes = [mode for mode in modes if not any(mode is other for other in tied)]
    return tuple(ranked)


def bound_above(ranking: Ranking, mode: LowestMode) -> FloatArray:
    """Shape (n_rows,) float in eV per ion. How far each row of a ranking stands above the bound that a mode gives.

    ranking: orderings with moments of the mode's sizes, in any cell; the energy in an applied field is left out.
    mode: of `lowest_mode` with the same sample. Without errors no value is below minus the two error bounds.

    Raises InputError where the moments of a row differ from the mode's sizes, for which the bound would not hold.
    """
    occupancies = mode.crystal.occupancies[mode.sizes > 0]
    wanted = float(occupancies @ mode.sizes[mode.sizes > 0] ** 2) / mode.n_ions
    above = []
    for row in ranking.rows:
        ordering = row.ordering
        weights = np.where(is_self_conjugate(ordering.k), 1.0, 0.5)
        square = np.einsum("k,kia,i->", weights, np.abs(ordering.components) ** 2, ordering.crystal.occupancies)
        mean = float(square) / ordering.n_ions
        if abs(mean - wanted) > SAME_SIZE * wanted:
            raise InputError(
                f"ordering {ordering.name!r} has a root-mean-square moment of {np.sqrt(mean):.6g} µB, the mode one of "
                f"{np.sqrt(wanted):.6g} µB: the bound holds for equal sizes alone. "
                "Make a mode with the sizes of the ordering."
            )
        part = row.energy.dipolar_eV + row.energy.shape_eV
        above.append(part / row.energy.n_ions - mode.energy_per_ion_eV)
    return np.array(above)


def _slack(mode: LowestMode) -> float:
    """Energies closer than this are equal: the resolution of the search, and the errors of both."""
    return 10 * EQUAL * abs(mode.energy_per_ion_eV) + 2 * mode.error_bound_eV


@dataclass(frozen=True, eq=False)
class _Maker:
    """What all modes of one crystal share. shaped: eigenvalues and vectors at k = 0 with the sample."""

    sites: MagneticSites
    shaped: tuple[FloatArray, FloatArray]
    boundary: str
    notes: tuple[str, ...]

    @classmethod
    def of(cls, sites: MagneticSites, sample: Sample | None) -> _Maker:
        specimen = Sample() if sample is None else sample
        values, vectors = np.linalg.eigh(sites.uniform_matrix(specimen.demagnetizing_tensor))
        notes = ("the applied field plays no part in the energies of the modes",) if np.any(specimen.applied_T) else ()
        return cls(sites, (values, vectors), mode_boundary(sample), notes)

    @property
    def uniform_eV(self) -> float:
        """The lowest energy at k = 0 itself."""
        return float(self.shaped[0][0])

    def at_zero(self, level: tuple[FloatArray, FloatArray], *, reached: bool) -> LowestMode:
        """The mode at k = 0 from eigenvalues and vectors, or the limit k → 0 across its net moment."""
        values, vectors = level
        space = vectors.astype(complex)[:, : _multiplicity(values, self.sites.scale_eV)]
        zero = np.zeros((1, 3))
        found = combine(zero, [space])
        assert found is not None
        direction = None
        if not reached:
            net = np.einsum("i,ia->a", self.sites.means, found.amplitudes[0].real)
            # Any direction across the net moment will do: the one nearest to the axis it has least of.
            axis = np.eye(3)[int(np.argmin(np.abs(net) - 1e-9 * np.arange(3) * np.abs(net).max()))]
            across = axis - net * (net @ axis) / (net @ net)
            direction = frozen(_tidy(across / np.linalg.norm(across)).real)
        return self._mode(zero[0] if reached else None, direction, float(values[0]), found, space.shape[1], zero)

    def at_minimum(self, k: FloatArray, arms: FloatArray) -> LowestMode:
        """The mode at k ≠ 0; other arms of the star (k first) are added where that makes the moments equal."""
        value, first = self._level(k)
        degeneracy = first.shape[1]
        found = combine(arms[:1], [first])
        assert found is not None
        used = 1
        spaces = [first]
        for n in range(2, min(len(arms), MOST_ARMS) + 1):
            if found.equal:
                break
            spaces.append(self._level(arms[n - 1])[1])
            several = combine(arms[:n], spaces)
            if several is not None and several.equal:
                found, used = several, n
        return self._mode(arms[0] if used == 1 else arms[:used], None, value, found, degeneracy, arms)

    def _level(self, k: FloatArray) -> tuple[float, ComplexArray]:
        """The lowest eigenvalue at k and a basis of its modes, real where k and −k are the same vector."""
        matrix = self.sites.matrices(k[None])[0]
        values, vectors = np.linalg.eigh(matrix.real if is_self_conjugate(k[None])[0] else matrix)
        return float(values[0]), vectors[:, : _multiplicity(values, self.sites.scale_eV)]

    def _mode(
        self,
        k: FloatArray | None,
        direction: FloatArray | None,
        energy: float,
        found: Combination,
        degeneracy: int,
        star: FloatArray,
    ) -> LowestMode:
        sites = self.sites
        crystal = sites.crystal
        parts = np.zeros((len(found.amplitudes), crystal.n_sites, 3), dtype=complex)
        parts[:, sites.ions] = found.amplitudes * sites.of_site[sites.ions][None, :, None]
        components = _tidy(parts if len(parts) > 1 else parts[0])
        own_opposite = k is None or bool(np.all(is_self_conjugate(np.atleast_2d(k))))
        kept: FloatArray | ComplexArray = components.real if own_opposite else components
        return LowestMode(
            crystal, sites.of_site, None if k is None else frozen(k), direction, energy, frozen(kept), found.equal,
            degeneracy, frozen(star), self.uniform_eV, sites.n_ions, sites.error_bound_eV, self.boundary,
            (*crystal.notes, *self.notes),
        )  # fmt: skip


def _multiplicity(values: FloatArray, scale: float) -> int:
    return int(np.sum(values - values[0] <= LEVEL * scale))


def _tidy(components: ComplexArray) -> ComplexArray:
    """Parts that are rounding of zero set to it."""
    floor = 1e-13 * float(np.abs(components).max(initial=0.0))
    real, imaginary = components.real, components.imag
    return np.where(np.abs(real) > floor, real, 0.0) + 1j * np.where(np.abs(imaginary) > floor, imaginary, 0.0)
