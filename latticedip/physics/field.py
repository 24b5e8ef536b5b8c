"""Local magnetic field at points and probes, in its five parts."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, check_tol, frozen
from latticedip.crystal.displace import MovedPairs
from latticedip.crystal.model import Crystal
from latticedip.crystal.spread import as_spread
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.physics.boundary import boundary_words, check_sample, magnetization_T
from latticedip.physics.contact import contact_field
from latticedip.physics.coupling import require_bulk
from latticedip.physics.places import Places, places_of, targets_cart
from latticedip.physics.spread import (
    cloud_fields,
    cloud_gradients,
    counting_spread,
    exchanged,
    exchanged_tensors,
    moment_clouds,
    moment_spread_words,
    moments_of,
)
from latticedip.probe import Contact
from latticedip.sample import Sample
from latticedip.sums.bulk import lattice_sum
from latticedip.sums.fields import field_plan, lattice_field

if TYPE_CHECKING:
    from latticedip.physics.uncertainty import FieldUncertainty

#: Points evaluated together, for gradients and for fields.
BLOCK, FIELD_BLOCK = 4096, 2**18
#: Below this field (T) the direction of B, and so the gradient of |B|, has no meaning.
ZERO_FIELD_T = 1e-12


@dataclass(frozen=True, eq=False)
class LocalField:
    """Fields at points of one ordering; all arrays have one row per point, Cartesian, in tesla.

    points: Shape (n, 3) float, fractional in the ordering's own cell. reference_points: in the cell probes come in.
    dipolar: Lorentz-sphere sum. lorentz: µ0 M/3. demagnetizing: −µ0 N·M. contact, applied: as stated. total: their sum.
    sites: Shape (n,) int. The site a point sits on (left out of its own field), −1 elsewhere.
    probe_names, particles: per row; empty particle for bare points. multiplicity: rows that share the row's probe.
    MHz_per_T: |γ|/2π of each row's particle, NaN for bare points.
    error_bound_T: Shape (n,) float. Bound of the error of each component of the dipolar part that follows from tol.
    demagnetizing_tensor: Shape (3, 3) float, N. contacts: per row. moved: per row, the pairs that displaced neighbours
        change. clouds_A2, moment_clouds_A2: Shape (n, 3, 3) and (n_sites, 3, 3) float, covariances that fields are
        averaged over. position_su_cart: Shape (n, 3, 3) float in Å: rows are one standard uncertainty of a coordinate.
    For k ≠ 0 the field is that in the home cell. Gradients and uncertainties are worked out when asked for.
    """

    ordering: Ordering
    points: FloatArray
    reference_points: FloatArray
    probe_names: tuple[str, ...]
    particles: tuple[str, ...]
    sites: np.ndarray
    multiplicity: np.ndarray
    MHz_per_T: FloatArray
    dipolar: FloatArray
    lorentz: FloatArray
    demagnetizing: FloatArray
    contact: FloatArray
    applied: FloatArray
    error_bound_T: FloatArray
    boundary: str
    tol: float
    demagnetizing_tensor: FloatArray = field(repr=False)
    contacts: tuple[tuple[Contact, ...], ...] = field(repr=False)
    moved: tuple[MovedPairs | None, ...] = field(repr=False)
    clouds_A2: FloatArray = field(repr=False)
    moment_clouds_A2: FloatArray = field(repr=False)
    position_su_cart: FloatArray = field(repr=False)
    notes: tuple[str, ...] = field(default=(), repr=False)

    @property
    def crystal(self) -> Crystal:
        """The crystal of the ordering."""
        return self.ordering.crystal

    @property
    def net_moment(self) -> FloatArray:
        """Shape (3,) float in µB per cell."""
        return self.ordering.net_moment

    @cached_property
    def total(self) -> FloatArray:
        """Shape (n, 3) float in T. Sum of the five parts."""
        return frozen(self.dipolar + self.lorentz + self.demagnetizing + self.contact + self.applied)

    @cached_property
    def size_T(self) -> FloatArray:
        """Shape (n,) float in T. |B_total|."""
        return frozen(np.linalg.norm(self.total, axis=1))

    @cached_property
    def frequency_MHz(self) -> FloatArray:
        """Shape (n,) float in MHz. |B_total| γ/2π, NaN for bare points."""
        return frozen(self.size_T * self.MHz_per_T)

    @cached_property
    def gradient_T_per_A(self) -> FloatArray:
        """Shape (n, 3) float in T/Å. Gradient of |B_total| with position, the contact part and all atoms held fixed.

        NaN where the field vanishes, since the direction of B is then not defined.
        """
        jacobian = np.zeros((len(self.points), 3, 3))
        targets = self.targets_cart
        smeared = _is_smeared(self.clouds_A2, self.moment_clouds_A2)
        still = np.flatnonzero(~smeared)
        for k, moments, sources in _components(self.ordering):
            plan = lattice_sum(self.crystal.cell, k, self.tol)
            placed = plan.place(sources)
            for rows in _blocks(len(still)):
                jacobian[still[rows]] += plan.field_gradient(plan.place(targets[still[rows]]), placed, moments).real
        jacobian[smeared] = cloud_gradients(
            self.ordering, targets[smeared], self.clouds_A2[smeared], self.moment_clouds_A2, self.tol
        )
        for row, pairs in enumerate(self.moved):
            if pairs is not None:
                _, slopes = exchanged_tensors(self.ordering, pairs, self.clouds_A2[row], self.moment_clouds_A2)
                jacobian[row] += np.einsum("nabc,nb->ac", slopes, moments_of(self.ordering, pairs))
        with np.errstate(invalid="ignore", divide="ignore"):
            gradient = np.einsum("na,nac->nc", self.total, jacobian) / self.size_T[:, None]
        gradient[self.size_T < ZERO_FIELD_T] = np.nan
        return frozen(gradient)

    @property
    def targets_cart(self) -> FloatArray:
        """Shape (n, 3) float in Å. Cartesian points; on a site with the rounding of the site itself."""
        return targets_cart(self.crystal, self.points, self.sites)

    @cached_property
    def uncertainty(self) -> FieldUncertainty:
        """Standard uncertainties that follow from those of moments and positions, where any is stated."""
        from latticedip.physics.uncertainty import field_uncertainty

        return field_uncertainty(self)

    @property
    def field_su_T(self) -> FloatArray:
        """Shape (n, 3) float in T. Standard uncertainty of each component of the total field; NaN: none stated."""
        return self.uncertainty.field_su_T

    @property
    def size_su_T(self) -> FloatArray:
        """Shape (n,) float in T. Standard uncertainty of |B_total|; NaN where none is stated."""
        return self.uncertainty.size_su_T

    @property
    def frequency_su_MHz(self) -> FloatArray:
        """Shape (n,) float in MHz. Standard uncertainty of the frequency; NaN where none is stated."""
        return self.uncertainty.frequency_su_MHz

    def to_dict(self) -> dict[str, Any]:
        """Plain dict with one entry per row; keys carry their units, vectors are Cartesian."""
        rows = []
        for i in range(len(self.points)):
            site = int(self.sites[i])
            rows.append(
                {
                    "probe": self.probe_names[i],
                    "particle": self.particles[i] or None,
                    "position": self.points[i].tolist(),
                    "position_in_reference_cell": self.reference_points[i].tolist(),
                    "site": self.crystal.labels[site] if site >= 0 else None,
                    "multiplicity": int(self.multiplicity[i]),
                    "dipolar_T": self.dipolar[i].tolist(),
                    "lorentz_T": self.lorentz[i].tolist(),
                    "demagnetizing_T": self.demagnetizing[i].tolist(),
                    "contact_T": self.contact[i].tolist(),
                    "applied_T": self.applied[i].tolist(),
                    "field_T": self.total[i].tolist(),
                    "field_size_T": float(self.size_T[i]),
                    "frequency_MHz": float(self.frequency_MHz[i]),
                    "gradient_of_size_T_per_A": self.gradient_T_per_A[i].tolist(),
                    "error_bound_T": float(self.error_bound_T[i]),
                }
            )
            if np.isfinite(self.size_su_T[i]):
                rows[-1]["field_size_su_T"] = float(self.size_su_T[i])
                rows[-1]["frequency_su_MHz"] = float(self.frequency_su_MHz[i])
        return {
            "ordering": self.ordering.name,
            "boundary": self.boundary,
            "net_moment_muB_per_cell": self.net_moment.tolist(),
            "rows": rows,
            "notes": [*self.notes, *self.uncertainty.notes],
        }


def local_field(
    ordering: Ordering,
    points: Any,
    *,
    spread: Any = None,
    moment_spread: Any = None,
    sample: Sample | None = None,
    tol: float = 1e-10,
) -> LocalField:
    """Local field at points or probes, split into dipolar, Lorentz, demagnetizing, contact and applied parts.

    ordering: periodic in three directions. points: Shape (n, 3) fractional in the ordering's own cell, or one Probe or
    several. A Probe on a site gives one row per atom; its position or site is that of ``ordering.reference`` where
    there is one, and one position may then become several rows. sample: None means N = 0 and no applied field.
    tol: as `dipole_tensor`.
    spread: of points, and of Probes that state none of their own: rms displacement along each axis in Å, or a (3, 3)
        Cartesian covariance in Å². The dipolar part is then the average over a Gaussian cloud. An isotropic cloud
        changes nothing until it reaches an ion; where it does, the traceless (principal-value) part is meant, and the
        rest is contact. An atom that a point sits on stays left out.
    moment_spread: the same for the moments (extended ions), one for all as it stands, or by label or element (of the
        crystal that probes are given in): there a covariance is that of the first atom, carried to the others.
    A point within 1e-3 Å of an atom is that site, and leaves that atom out.

    Raises InputError for a point between 1e-3 and 0.1 Å from an atom (on a site: from another magnetic one), an unknown
    site, a crystal that is not periodic in three directions, a spread as `Probe` refuses it, and one that is flat and
    reaches an ion.
    """
    if not isinstance(ordering, Ordering):
        raise InputError(f"local_field needs an Ordering, got {type(ordering).__name__}.")
    require_bulk(ordering.crystal)
    check_tol(tol)
    check_sample(sample)
    specimen = Sample() if sample is None else sample
    places = places_of(ordering, points, as_spread("spread", spread))
    crystal, n = ordering.crystal, len(places)
    home = crystal if ordering.reference is None else ordering.reference.crystal
    clouds, extended = places.clouds(), moment_clouds(ordering, moment_spread)
    targets = targets_cart(crystal, places.points, places.sites)
    smeared = _is_smeared(clouds, extended)
    reached: list[str] = []
    if np.any(smeared):
        whole, bound = np.zeros((n, 3)), np.zeros(n)
        whole[~smeared], bound[~smeared] = _whole_sum(ordering, targets[~smeared], tol)
        names = [name for name, is_smeared in zip(places.names, smeared, strict=True) if is_smeared]
        whole[smeared], bound[smeared], reached = cloud_fields(
            ordering, targets[smeared], clouds[smeared], extended, tol, names
        )
    else:
        whole, bound = _whole_sum(ordering, targets, tol)
    moved = _moved(ordering, places)
    for i, pairs in enumerate(moved):
        if pairs is not None:
            change, _ = exchanged_tensors(ordering, pairs, clouds[i], extended, places.names[i])
            whole[i] += np.einsum("nab,nb->a", change, moments_of(ordering, pairs))
    magnetization = magnetization_T(ordering)
    spreads = moment_spread_words(counting_spread([ordering], moment_spread))
    notes = [*crystal.notes, *ordering.notes, *spreads, *places.notes(), *reached]
    if ordering.reference is not None and places.probes:
        notes.append(ordering.reference.how)
    return LocalField(
        ordering=ordering,
        points=frozen(places.points),
        reference_points=frozen(places.reference),
        probe_names=places.names,
        particles=places.particles,
        sites=frozen(places.sites),
        multiplicity=frozen(places.multiplicity),
        MHz_per_T=frozen(places.MHz_per_T),
        dipolar=frozen(whole - magnetization / 3),
        lorentz=frozen(np.tile(magnetization / 3, (n, 1))),
        demagnetizing=frozen(np.tile(-specimen.demagnetizing_tensor @ magnetization, (n, 1))),
        contact=frozen(_contact(ordering, places)),
        applied=frozen(np.tile(specimen.applied_T, (n, 1))),
        error_bound_T=frozen(bound),
        boundary=boundary_words(ordering, sample),
        tol=tol,
        demagnetizing_tensor=frozen(specimen.demagnetizing_tensor),
        contacts=places.contacts,
        moved=moved,
        clouds_A2=frozen(clouds),
        moment_clouds_A2=extended,
        position_su_cart=frozen(places.position_su_cart(home)),
        notes=tuple(dict.fromkeys(note for note in notes if note)),
    )


def _is_smeared(clouds: FloatArray, of_moments: FloatArray) -> np.ndarray:
    """Shape (n,) bool. True for rows that are averages over a cloud, of the probe or of any moment."""
    return np.any(clouds != 0.0, axis=(1, 2)) | bool(np.any(of_moments))


def _moved(ordering: Ordering, places: Places) -> tuple[MovedPairs | None, ...]:
    """Per row, the pairs that displaced neighbours change."""
    found: list[MovedPairs | None] = [None] * len(places)
    for row, probe in enumerate(places.probes):
        if probe.displaced:
            found[row] = exchanged(ordering, places.points[row], places.reference[row], probe)
    return tuple(found)


def _contact(ordering: Ordering, places: Places) -> FloatArray:
    """Shape (n, 3) float in T. Contact fields, zero for bare points."""
    out = np.zeros((len(places), 3))
    for row in range(len(places.probes)):
        terms = places.contacts[row]
        if not terms:
            continue
        try:
            out[row] = contact_field(ordering, places.points[row], terms)
        except InputError as error:
            raise InputError(f"{places.names[row]}, ordering {ordering.name!r}: {error}") from None
    return out


def _whole_sum(ordering: Ordering, targets: FloatArray, tol: float) -> tuple[FloatArray, FloatArray]:
    """N = 0 lattice sum at Cartesian targets in T, and the bound of its error."""
    total, bound = np.zeros((len(targets), 3)), np.zeros(len(targets))
    for k, moments, sources in _components(ordering):
        plan = field_plan(ordering.crystal.cell, k, tol, len(sources), len(targets))
        placed = plan.place(sources)
        size = float(np.abs(moments).sum())
        for rows in _blocks(len(targets), FIELD_BLOCK):
            fields, added = lattice_field(plan, plan.place(targets[rows]), placed, moments)
            total[rows] += fields.real
            bound[rows] += tol * (size + added)
    return total, bound


def _components(ordering: Ordering) -> Iterator[tuple[FloatArray, ComplexArray, FloatArray]]:
    """For each k the mean components (n, 3) in µB and Cartesian positions (n, 3) of the sites that carry one."""
    ions = np.flatnonzero(ordering.is_magnetic)
    if not len(ions):
        return
    for k, mean in zip(ordering.k, ordering.mean_components, strict=True):
        yield k, mean[ions], ordering.crystal.places_cart[ions]


def _blocks(n: int, size: int = BLOCK) -> Iterator[slice]:
    for start in range(0, n, size):
        yield slice(start, min(n, start + size))
