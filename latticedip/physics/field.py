"""Local magnetic field at points and probes, in its five parts."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_floats, check_tol, frozen
from latticedip.crystal.displace import MovedPairs
from latticedip.crystal.model import OVERLAP_A, SAME_PLACE_A, Crystal
from latticedip.crystal.spread import as_spread, carried_spreads, covariance_of
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.physics.boundary import boundary_words, check_sample, magnetization_T
from latticedip.physics.contact import contact_field
from latticedip.physics.coupling import require_bulk
from latticedip.physics.spread import (
    cloud_fields,
    cloud_gradients,
    exchanged,
    exchanged_tensors,
    moment_clouds,
    moments_of,
    probe_words,
)
from latticedip.probe import Contact, Probe
from latticedip.sample import Sample
from latticedip.sums.bulk import lattice_sum
from latticedip.sums.fields import field_plan, lattice_field
from latticedip.sums.lattice import reduce_cell

if TYPE_CHECKING:
    from latticedip.physics.uncertainty import FieldUncertainty

#: A site carried over from another crystal is the atom of its element this close (Å): as far as matching lets it lie.
CARRIED_SITE_A = 0.2
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
        return _targets_cart(self.crystal, self.points, self.sites)

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


@dataclass(eq=False, slots=True)
class _Row:
    """One point to evaluate: where it is, what it was called and which contact terms act there.

    site: the site it sits on, where that is known. element: of the site it stands for, carried from another crystal.
    spread: None, rms displacement or covariance. probe: None for a bare point.
    """

    point: FloatArray
    reference: FloatArray
    name: str
    particle: str
    MHz_per_T: float
    contact: tuple[Contact, ...]
    multiplicity: int
    site: int = -1
    element: str = ""
    spread: float | FloatArray | None = None
    probe: Probe | None = None


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
    moment_spread: the same for the moments (extended ions), for all or as a mapping of labels or elements to spreads.
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
    rows = _rows(ordering, points, as_spread("spread", spread))
    crystal = ordering.crystal
    placed, sites = _snap(ordering, rows)
    clouds = _filled(rows, (3, 3), lambda i, row: None if row.spread is None else covariance_of(row.spread))
    extended = moment_clouds(ordering, moment_spread)
    targets = _targets_cart(crystal, placed, sites)
    smeared = _is_smeared(clouds, extended)
    whole, bound = np.zeros((len(rows), 3)), np.zeros(len(rows))
    whole[~smeared], bound[~smeared] = _whole_sum(ordering, targets[~smeared], tol)
    reached: list[str] = []
    if np.any(smeared):
        names = [row.name for row, is_smeared in zip(rows, smeared, strict=True) if is_smeared]
        whole[smeared], bound[smeared], reached = cloud_fields(
            ordering, targets[smeared], clouds[smeared], extended, tol, names
        )
    moved: tuple[MovedPairs | None, ...] = (None,) * len(rows)
    if not _are_bare(rows):
        moved = tuple(_moved(ordering, row, point) for row, point in zip(rows, placed, strict=True))
    for i, pairs in enumerate(moved):
        if pairs is not None:
            change, _ = exchanged_tensors(ordering, pairs, clouds[i], extended, rows[i].name)
            whole[i] += np.einsum("nab,nb->a", change, moments_of(ordering, pairs))
    magnetization = magnetization_T(ordering)
    n = len(rows)
    contact = _filled(rows, (3,), lambda i, row: _contact_at(ordering, row, placed[i]))
    notes = [*crystal.notes, *ordering.notes, *_spread_notes(rows, moment_spread), *reached]
    if ordering.reference is not None and any(row.particle for row in rows):
        notes.append(ordering.reference.how)
    return LocalField(
        ordering=ordering,
        points=frozen(placed),
        reference_points=frozen(_stacked([row.reference for row in rows])),
        probe_names=tuple(row.name for row in rows),
        particles=tuple(row.particle for row in rows),
        sites=frozen(sites),
        multiplicity=frozen(np.array([row.multiplicity for row in rows], dtype=int)),
        MHz_per_T=frozen(np.array([row.MHz_per_T for row in rows], dtype=float)),
        dipolar=frozen(whole - magnetization / 3),
        lorentz=frozen(np.tile(magnetization / 3, (n, 1))),
        demagnetizing=frozen(np.tile(-specimen.demagnetizing_tensor @ magnetization, (n, 1))),
        contact=frozen(contact),
        applied=frozen(np.tile(specimen.applied_T, (n, 1))),
        error_bound_T=frozen(bound),
        boundary=boundary_words(ordering, sample),
        tol=tol,
        demagnetizing_tensor=frozen(specimen.demagnetizing_tensor),
        contacts=tuple(row.contact for row in rows),
        moved=moved,
        clouds_A2=frozen(clouds),
        moment_clouds_A2=extended,
        position_su_cart=frozen(_filled(rows, (3, 3), lambda i, row: _position_su(ordering, row))),
        notes=tuple(dict.fromkeys(note for note in notes if note)),
    )


def _is_smeared(clouds: FloatArray, of_moments: FloatArray) -> np.ndarray:
    """Shape (n,) bool. True for rows that are averages over a cloud, of the probe or of any moment."""
    return np.any(clouds != 0.0, axis=(1, 2)) | bool(np.any(of_moments))


def _moved(ordering: Ordering, row: _Row, point: FloatArray) -> MovedPairs | None:
    if row.probe is None or not row.probe.displaced:
        return None
    return exchanged(ordering, point, row.reference, row.probe)


def _stacked(vectors: list[FloatArray]) -> FloatArray:
    """Shape (n, 3) float. Several times faster than an array of a list of small arrays."""
    return np.concatenate(vectors).reshape(-1, 3) if vectors else np.zeros((0, 3))


def _are_bare(rows: list[_Row]) -> bool:
    """True for points without a Probe and without a spread: rows are all of one kind, and a million may come."""
    return not rows or (rows[0].probe is None and rows[0].spread is None)


def _filled(rows: list[_Row], shape: tuple[int, ...], value: Callable[[int, _Row], FloatArray | None]) -> FloatArray:
    """Shape (n, *shape) float. One value per row, zero where there is none, as for most of a million points."""
    out = np.zeros((len(rows), *shape))
    if _are_bare(rows):
        return out
    for i, row in enumerate(rows):
        found = value(i, row)
        if found is not None:
            out[i] = found
    return out


def _contact_at(ordering: Ordering, row: _Row, point: FloatArray) -> FloatArray | None:
    if not row.contact:
        return None
    try:
        return contact_field(ordering, point, row.contact)
    except InputError as error:
        raise InputError(f"{row.name}, ordering {ordering.name!r}: {error}") from None


def _position_su(ordering: Ordering, row: _Row) -> FloatArray | None:
    """Shape (3, 3) float in Å. Rows: the cell vectors times the standard uncertainties of the coordinates."""
    if row.probe is None or row.probe.position_su is None:
        return None
    home = ordering.crystal if ordering.reference is None else ordering.reference.crystal
    return np.asarray(row.probe.position_su[:, None] * home.cell)


def _spread_notes(rows: list[_Row], moment_spread: Any) -> list[str]:
    notes = [] if moment_spread is None else [f"moments are extended: Gaussian spread {moment_spread} (Å rms, or Å²)"]
    for row in rows[:1] if _are_bare(rows) else rows:
        name = "every point" if row.probe is None else row.name
        notes += probe_words(name, row.spread, () if row.probe is None else row.probe.displaced)
    return notes


def _rows(ordering: Ordering, points: Any, spread: float | FloatArray | None) -> list[_Row]:
    if isinstance(points, Probe):
        points = [points]
    if isinstance(points, Sequence) and points and all(isinstance(p, Probe) for p in points):
        return [row for probe in points for row in _probe_rows(ordering, probe, spread)]
    if isinstance(points, Sequence) and any(isinstance(p, Probe) for p in points):
        raise InputError("points must be all Probes or all fractional positions, not a mixture.")
    positions = np.zeros((0, 3)) if np.size(points) == 0 else as_floats("points", points, (None, 3))
    return [_Row(p, p, f"point {i + 1}", "", float("nan"), (), 1, spread=spread) for i, p in enumerate(positions)]


def _probe_rows(ordering: Ordering, probe: Probe, spread: float | FloatArray | None) -> Iterator[_Row]:
    home = ordering.crystal if ordering.reference is None else ordering.reference.crystal
    sites = [-1] if probe.site is None else list(home.find(probe.site))
    own = spread if probe.spread is None else probe.spread
    spreads = [own] if probe.site is None else carried_spreads(home, sites, own, probe.name)
    found = []
    for site, cloud in zip(sites, spreads, strict=True):
        position = probe.position if site < 0 else home.positions[site]
        if ordering.reference is None:
            found.append((position, position, site, "", cloud))
        else:
            element = "" if site < 0 else home.symbols[site]
            found += [(point, position, -1, element, cloud) for point in ordering.reference.carry(position)]
    for point, position, site, element, cloud in found:
        yield _Row(
            point, position, probe.name, probe.particle, probe.MHz_per_T, probe.contact, len(found), site, element,
            cloud, probe,
        )  # fmt: skip


def _snap(ordering: Ordering, rows: list[_Row]) -> tuple[FloatArray, np.ndarray]:
    """Put points within 1e-3 Å of an atom onto it; returns points and the site of each (−1: none)."""
    crystal = ordering.crystal
    placed = _stacked([row.point for row in rows])
    sites = np.array([row.site for row in rows], dtype=int)
    carried = np.array([bool(row.element) for row in rows], dtype=bool)
    if crystal.n_sites == 0:
        return placed, sites
    lattice = reduce_cell(crystal.cell)
    for block in _blocks(len(rows), max(1, 2**20 // crystal.n_sites)):
        # In a reduced cell rounding each coordinate finds the nearest image, wherever that is as near as matters here.
        gap = (placed[block, None, :] - crystal.positions[None]) @ crystal.cell @ lattice.inverse
        whole = np.round(gap)
        distance = np.linalg.norm((gap - whole) @ lattice.cell, axis=2)
        close = (distance.min(axis=1) < OVERLAP_A) | carried[block]
        for i in np.flatnonzero(close):
            row = block.start + int(i)
            site = sites[row] if sites[row] >= 0 else _site_at(ordering, rows[row], distance[i])
            sites[row] = site
            placed[row] = crystal.positions[site] + whole[i, site] @ lattice.steps
            apart = np.linalg.norm((gap[i] - whole[i] - (gap[i, site] - whole[i, site])) @ lattice.cell, axis=1)
            split = np.flatnonzero(ordering.is_magnetic & (apart > SAME_PLACE_A) & (apart < OVERLAP_A))
            if len(split):
                other = int(split[0])
                raise InputError(
                    f"{rows[row].name} sits on atom {crystal.labels[site]} at {_text(placed[row])}, "
                    f"{apart[other]:.4f} Å from the magnetic atom {crystal.labels[other]}: only one of them is there "
                    "at a time. Give both the same position."
                )
    return placed, sites


def _site_at(ordering: Ordering, row: _Row, distance: FloatArray) -> int:
    """The site a row near an atom sits on; InputError where it is too close to an atom without being on it."""
    crystal = ordering.crystal
    if row.element:
        alike = np.where([symbol == row.element for symbol in crystal.symbols], distance, np.inf)
        site = int(np.argmin(alike))
        if alike[site] > CARRIED_SITE_A:
            raise InputError(
                f"{row.name}: the ordering {ordering.name!r} has no {row.element} within {CARRIED_SITE_A} Å of "
                f"{_text(row.point)}, where the site comes to lie in its cell."
            )
        return site
    site = int(np.argmin(distance))
    if distance[site] > SAME_PLACE_A:
        raise InputError(
            f"{row.name} at {_text(row.point)} lies {distance[site]:.4f} Å from atom {crystal.labels[site]} at "
            f"{_text(crystal.positions[site])}. A point must be at least {OVERLAP_A} Å from every atom, or on a site "
            f"(within {SAME_PLACE_A} Å)."
        )
    return site


def _targets_cart(crystal: Crystal, points: FloatArray, sites: np.ndarray) -> FloatArray:
    targets = points @ crystal.cell
    on = sites >= 0
    if np.any(on):
        # On a site the same rounding as the site itself, so that the source is recognised as its own.
        cells = np.round(points[on] - crystal.positions[sites[on]])
        targets[on] = crystal.places_cart[sites[on]] + cells @ crystal.cell
    return np.asarray(targets)


def _whole_sum(ordering: Ordering, targets: FloatArray, tol: float) -> tuple[FloatArray, FloatArray]:
    """N = 0 lattice sum at Cartesian targets in T, and the bound of its error."""
    total, bound = np.zeros((len(targets), 3)), np.zeros(len(targets))
    for k, moments, sources in _components(ordering):
        plan = field_plan(ordering.crystal.cell, k, tol, len(sources))
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


def _text(position: FloatArray) -> str:
    return "(" + ", ".join(f"{x:.5g}" for x in position) + ")"
