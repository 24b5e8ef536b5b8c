"""Local magnetic field at points and probes, in its five parts."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_floats, check_tol, frozen
from latticedip.crystal.model import OVERLAP_A, SAME_PLACE_A, Crystal
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.physics.boundary import boundary_words, magnetization_T
from latticedip.physics.contact import contact_field
from latticedip.physics.coupling import require_bulk
from latticedip.probe import Contact, Probe
from latticedip.sample import Sample
from latticedip.sums.bulk import lattice_sum
from latticedip.sums.fields import field_plan, lattice_field
from latticedip.sums.lattice import reduce_cell

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
    For k ≠ 0 the field is that in the home cell. Field gradients are worked out when asked for.
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
        """Shape (n, 3) float in T/Å. Gradient of |B_total| with position, the contact part held fixed.

        NaN where the field vanishes, since the direction of B is then not defined.
        """
        jacobian = np.zeros((len(self.points), 3, 3))
        targets = self._targets_cart()
        for k, moments, sources in _components(self.ordering):
            plan = lattice_sum(self.crystal.cell, k, self.tol)
            placed = plan.place(sources)
            for rows in _blocks(len(targets)):
                jacobian[rows] += plan.field_gradient(plan.place(targets[rows]), placed, moments).real
        with np.errstate(invalid="ignore", divide="ignore"):
            gradient = np.einsum("na,nac->nc", self.total, jacobian) / self.size_T[:, None]
        gradient[self.size_T < ZERO_FIELD_T] = np.nan
        return frozen(gradient)

    def _targets_cart(self) -> FloatArray:
        return _targets_cart(self.crystal, self.points, self.sites)

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
        return {
            "ordering": self.ordering.name,
            "boundary": self.boundary,
            "net_moment_muB_per_cell": self.net_moment.tolist(),
            "rows": rows,
            "notes": list(self.notes),
        }


@dataclass(frozen=True, eq=False)
class _Row:
    """One point to evaluate: where it is, what it was called and which contact terms act there.

    site: the site it sits on, where that is known. element: of the site it stands for, carried from another crystal.
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


def local_field(ordering: Ordering, points: Any, *, sample: Sample | None = None, tol: float = 1e-10) -> LocalField:
    """Local field at points or probes, split into dipolar, Lorentz, demagnetizing, contact and applied parts.

    ordering: periodic in three directions. points: Shape (n, 3) fractional in the ordering's own cell, or one Probe or
    several. A Probe on a site gives one row per atom; its position or site is that of ``ordering.reference`` where
    there is one, and one position may then become several rows. sample: None means N = 0 and no applied field.
    tol: as `dipole_tensor`.
    A point within 1e-3 Å of an atom is that site, and leaves that atom out.

    Raises InputError for a point between 1e-3 and 0.1 Å from an atom (on a site: from another magnetic one), an unknown
    site, or a crystal that is not periodic in three directions.
    """
    require_bulk(ordering.crystal)
    check_tol(tol)
    specimen = Sample() if sample is None else sample
    rows = _rows(ordering, points)
    crystal = ordering.crystal
    placed, sites = _snap(ordering, rows)
    whole = _whole_sum(ordering, _targets_cart(crystal, placed, sites), tol)
    magnetization = magnetization_T(ordering)
    n = len(rows)
    contact = [contact_field(ordering, point, row.contact) for point, row in zip(placed, rows, strict=True)]
    notes = [*crystal.notes, *ordering.notes]
    if ordering.reference is not None and any(row.particle for row in rows):
        notes.append(ordering.reference.how)
    return LocalField(
        ordering=ordering,
        points=frozen(placed),
        reference_points=frozen(np.array([row.reference for row in rows]).reshape(-1, 3)),
        probe_names=tuple(row.name for row in rows),
        particles=tuple(row.particle for row in rows),
        sites=frozen(sites),
        multiplicity=frozen(np.array([row.multiplicity for row in rows], dtype=int)),
        MHz_per_T=frozen(np.array([row.MHz_per_T for row in rows], dtype=float)),
        dipolar=frozen(whole[0] - magnetization / 3),
        lorentz=frozen(np.tile(magnetization / 3, (n, 1))),
        demagnetizing=frozen(np.tile(-specimen.demagnetizing_tensor @ magnetization, (n, 1))),
        contact=frozen(np.array(contact).reshape(-1, 3)),
        applied=frozen(np.tile(specimen.applied_T, (n, 1))),
        error_bound_T=frozen(whole[1]),
        boundary=boundary_words(ordering, sample),
        tol=tol,
        notes=tuple(dict.fromkeys(note for note in notes if note)),
    )


def _rows(ordering: Ordering, points: Any) -> list[_Row]:
    if isinstance(points, Probe):
        points = [points]
    if isinstance(points, Sequence) and points and all(isinstance(p, Probe) for p in points):
        return [row for probe in points for row in _probe_rows(ordering, probe)]
    if isinstance(points, Sequence) and any(isinstance(p, Probe) for p in points):
        raise InputError("points must be all Probes or all fractional positions, not a mixture.")
    positions = np.zeros((0, 3)) if np.size(points) == 0 else as_floats("points", points, (None, 3))
    return [_Row(p, p, f"point {i + 1}", "", float("nan"), (), 1) for i, p in enumerate(positions)]


def _probe_rows(ordering: Ordering, probe: Probe) -> Iterator[_Row]:
    home = ordering.crystal if ordering.reference is None else ordering.reference.crystal
    sites = [-1] if probe.site is None else list(home.find(probe.site))
    found = []
    for site in sites:
        position = probe.position if site < 0 else home.positions[site]
        if ordering.reference is None:
            found.append((position, position, site, ""))
        else:
            element = "" if site < 0 else home.symbols[site]
            found += [(point, position, -1, element) for point in ordering.reference.carry(position)]
    for point, position, site, element in found:
        yield _Row(
            point, position, probe.name, probe.particle, probe.MHz_per_T, probe.contact, len(found), site, element
        )


def _snap(ordering: Ordering, rows: list[_Row]) -> tuple[FloatArray, np.ndarray]:
    """Put points within 1e-3 Å of an atom onto it; returns points and the site of each (−1: none)."""
    crystal = ordering.crystal
    placed = np.array([row.point for row in rows], dtype=float).reshape(-1, 3)
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
