"""Fields on the orbit of a probe: every position that the crystal makes equal, in every cell of the ordering.

Magnetic order splits an orbit: positions that the non-magnetic space group relates feel different fields. Under waves
at k the field at one position differs from cell to cell as well:

    B(r + R) = B₀ + Σ_k Re[F_k exp(−2πi k·R)]

with complex vectors F_k. One k that never repeats carries B round an ellipse, whose half axes are the conjugate
diameters Re F, Im F made perpendicular.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, frozen
from latticedip.crystal.model import Crystal
from latticedip.crystal.orbit import orbit
from latticedip.crystal.symmetry import operations_of
from latticedip.errors import InputError
from latticedip.ordering.domains import orthogonal
from latticedip.ordering.model import Ordering, is_self_conjugate
from latticedip.ordering.phases import PhaseSpace, nearly_commensurate, phase_space
from latticedip.physics.contact import carried_contacts, contacts_of_site, has_direction, shell_neighbours, turned_term
from latticedip.physics.field import LocalField, local_field
from latticedip.probe import Contact, Probe
from latticedip.sample import Sample
from latticedip.units import MU0_T_A3_PER_MUB

#: Fields that differ by less than this part of the largest one are one level: six digits are printed.
SAME_FIELD = 1e-6
#: Distance (Å) within which an operation carries a position onto one of its orbit.
SAME_POSITION_A = 0.02
#: Relative size of what a tensor may change under the site symmetry of its position.
SAME_TENSOR = 1e-3
#: Positions closer than this (fractional) are one.
SAME_POINT = 1e-6


@dataclass(frozen=True, eq=False)
class Level:
    """Fields of one size on an orbit.

    field_T: |B| in T. share: fraction of all positions in all cells that feel it; number: of the listed ones.
    """

    field_T: float
    share: float
    number: int


@dataclass(frozen=True, eq=False)
class OrbitField:
    """Fields at all positions equivalent to a probe, as waves; arrays have one row per position in the ordering's cell.

    ordering, probe: what was asked. positions: Shape (n, 3) fractional in the ordering's own cell.
    reference_positions: Shape (n, 3), in the cell that the probe is given in. multiplicity: size of the orbit there.
    steady: Shape (n, 3) float in T. What is the same in every cell: Lorentz, demagnetizing and applied field and the
        field of the part at k = 0.
    applied: Shape (3,) float in T, the part of it that is applied.
    k: Shape (n_k, 3). waves: Shape (n_k, n, 3) complex in T, F_k, none of them at k = 0.
    phases: the phases that the waves take over all cells.
    error_bound_T: bound of the error of each component, T. MHz_per_T: |γ|/2π of the particle; gamma_sign: sign of γ.
    boundary, notes: as in `LocalField`.
    """

    ordering: Ordering
    probe: Probe
    positions: FloatArray
    reference_positions: FloatArray
    multiplicity: int
    steady: FloatArray
    applied: FloatArray
    k: FloatArray
    waves: ComplexArray
    phases: PhaseSpace
    error_bound_T: float
    boundary: str
    notes: tuple[str, ...] = ()

    @property
    def MHz_per_T(self) -> float:
        """|γ|/2π of the particle in MHz/T."""
        return self.probe.MHz_per_T

    @property
    def is_commensurate(self) -> bool:
        """True where a finite number of cells shows every field."""
        return self.phases.n_free == 0 and self.phases.complete

    @cached_property
    def offsets(self) -> FloatArray:
        """Shape (n, n_listed, 3) float in T. Steady field plus, where nothing is free, the waves at each phase."""
        if self.phases.n_free:
            raise InputError("the ordering is incommensurate: its fields fill curves and cannot be listed.")
        return frozen(self.steady[:, None] + self._at(self.phases.listed))

    def fields(self, cells: Any) -> FloatArray:
        """Shape (n, n_cells, 3) float in T. Fields at every position in the cells (n_cells, 3) named."""
        turns = (np.asarray(cells, dtype=float) @ self.k.T) % 1.0
        return np.asarray(self.steady[:, None] + self._at(turns))

    def _at(self, turns: FloatArray) -> FloatArray:
        """Shape (n, m, 3). Waves at phases (m, n_k)."""
        return np.asarray(np.einsum("mk,kna->nma", np.exp(-2j * np.pi * turns), self.waves).real)

    @cached_property
    def levels(self) -> tuple[Level, ...]:
        """Distinct |B| over all positions and cells, smallest first; only for commensurate orderings.

        Two are one level where they differ by no more than their error bounds, or by 1e-6 of the largest.
        Raises InputError for an incommensurate ordering.
        """
        sizes = np.sort(np.linalg.norm(self.offsets, axis=2).ravel())
        gap = max(2 * np.sqrt(3) * self.error_bound_T, SAME_FIELD * float(sizes[-1])) if len(sizes) else 0.0
        groups = np.split(sizes, np.flatnonzero(np.diff(sizes) > gap) + 1) if len(sizes) else []
        return tuple(Level(float(group.mean()), len(group) / len(sizes), len(group)) for group in groups)


def orbit_field(
    ordering: Ordering,
    probe: Probe,
    *,
    moment_spread: Any = None,
    sample: Sample | None = None,
    equivalent: bool = True,
    tol: float = 1e-10,
) -> OrbitField:
    """Fields at all positions equivalent to a probe under the space group of the non-magnetic structure.

    ordering: periodic in three directions; its non-magnetic structure is that of ``ordering.reference`` where there is
    one. probe: at a position or on a site (then every atom that is equivalent to one of that label). sample: None
    means N = 0 and no applied field. moment_spread, tol: as `local_field`. equivalent: False takes the probe's own
    position or site alone. What a probe has of tensors and vectors is turned with its position (`equivalent_probes`).

    Raises what `local_field` raises, and InputError for a moment density where the orbit has several positions, or a
    contact tensor of a site that lacks its symmetry.
    """
    home = ordering.crystal if ordering.reference is None else ordering.reference.crystal
    probes, reached, count = _probes(home, probe, equivalent)
    terms = [found.contact for found in probes]
    probes = [dataclasses.replace(found, contact=()) for found in probes]
    whole = local_field(ordering, probes, moment_spread=moment_spread, sample=sample, tol=tol)
    chosen = _on_sites(home, whole, reached)
    places = whole.reference_points[chosen]
    k = ordering.k
    waves = np.array([_wave(ordering, i, probes, whole, moment_spread, tol)[chosen] for i in range(len(k))])
    if probe.site is None:
        # Every probe gives the same number of rows.
        by_row = [terms[i * len(terms) // len(places)] for i in range(len(places))]
    elif not equivalent:
        by_row = contacts_of_site(home, places, probe.contact, probe.name)
    else:
        first = home.positions[home.find(probe.site)[0]]
        by_row = carried_contacts(home, first, places, probe.contact, probe.name)
    contact, constant = _contact(ordering, probe.name, whole.points[chosen], by_row)
    waves = waves + contact
    still = np.all(k == np.round(k), axis=1)
    steady = (whole.lorentz + whole.demagnetizing + whole.applied)[chosen] + constant + waves[still].real.sum(axis=0)
    moving = k[~still]
    phases = phase_space(moving)
    # Displacements are turned with the position; the one that was stated is told, not each of its images.
    turned = {f"{probe.name}: displaced {term.words()}" for found in probes[1:] for term in found.displaced}
    stated = {f"{probe.name}: displaced {term.words()}" for term in probe.displaced}
    notes = [note for note in whole.notes if note not in turned - stated]
    for value, fraction in nearly_commensurate(moving):
        notes.append(
            f'the coordinate {value:.6g} of k is taken as it stands; for a commensurate ordering write "{fraction}"'
        )
    if not phases.complete:
        notes.append("too many propagation vectors to relate their phases: cells drawn at random stand for all")
    return OrbitField(
        ordering=ordering,
        probe=probe,
        positions=frozen(whole.points[chosen]),
        reference_positions=frozen(places),
        multiplicity=count,
        steady=frozen(steady),
        applied=frozen(np.zeros(3) if sample is None else sample.applied_T),
        k=frozen(moving),
        waves=frozen(waves[~still]),
        phases=phases,
        error_bound_T=float(whole.error_bound_T[chosen].max(initial=0.0)),
        boundary=whole.boundary,
        notes=tuple(dict.fromkeys(notes)),
    )


def _probes(home: Crystal, probe: Probe, equivalent: bool) -> tuple[list[Probe], list[int], int]:
    """Probes that cover the orbit, the atoms it consists of (none for a position), and its size.

    A probe on a site stays one, so that a site carried into another cell still finds its atom.
    """
    if probe.site is None:
        found = equivalent_probes(home, probe) if equivalent else [probe]
        return found, [], len(found)
    sites = list(home.find(probe.site))
    if not equivalent:
        return [probe], sites, len(sites)
    points = np.vstack([orbit(home, home.positions[site]) for site in sites])
    gaps = points[:, None] - home.positions
    distance = np.linalg.norm((gaps - np.round(gaps)) @ home.cell, axis=-1)
    alike = np.array([symbol == home.symbols[sites[0]] for symbol in home.symbols])
    reached = [int(i) for i in np.flatnonzero((distance.min(axis=0) < SAME_POSITION_A) & alike)]
    labels = dict.fromkeys(home.labels[i] for i in reached)
    return [dataclasses.replace(probe, site=label) for label in labels], reached, len(reached)


def _on_sites(home: Crystal, whole: LocalField, reached: list[int]) -> np.ndarray:
    """Rows that belong to the orbit: a label may also hold atoms that symmetry does not relate to those asked for."""
    if not reached:
        return np.arange(len(whole.points))
    gaps = np.abs(whole.reference_points[:, None] - home.positions[reached]).max(axis=2)
    return np.flatnonzero(gaps.min(axis=1) < SAME_POINT)


def _wave(
    ordering: Ordering, i: int, probes: list[Probe], whole: LocalField, moment_spread: Any, tol: float
) -> ComplexArray:
    """Shape (n, 3) complex in T. F_k of the dipolar field at one k, at all rows of the probes.

    The field is linear in the components: those turned by a quarter give its imaginary part in the home cell.
    """
    real_only = bool(is_self_conjugate(ordering.k[i : i + 1])[0])
    if len(ordering.k) == 1 and real_only:
        return whole.dipolar.astype(complex)
    out = np.zeros(whole.dipolar.shape, dtype=complex)
    for factor, unit in ((1.0, 1.0),) if real_only else ((1.0, 1.0), (-1j, 1j)):
        part = Ordering(
            ordering.crystal, factor * ordering.components[i], ordering.k[i], ordering.name,
            reference=ordering.reference,
        )  # fmt: skip
        out += unit * local_field(part, probes, moment_spread=moment_spread, tol=tol).dipolar
    return out


def _contact(
    ordering: Ordering, name: str, points: FloatArray, terms: list[tuple[Contact, ...]]
) -> tuple[ComplexArray, FloatArray]:
    """Contact field at points of the ordering's cell: waves (n_k, n, 3) complex and what is constant (3,), in T."""
    waves = np.zeros((len(ordering.k), len(points), 3), dtype=complex)
    constant = np.zeros(3)
    for row, point in enumerate(points):
        for term in terms[row]:
            if term.moment_density_muB_per_A3 is not None:
                if len(points) > 1 or np.any(ordering.k != np.round(ordering.k)):
                    raise InputError(
                        f"{name}: a moment density holds at one position in one cell, and under this ordering the "
                        "probe feels different fields in several. Give a coupling with shell or within instead."
                    )
                constant = constant + 2 / 3 * MU0_T_A3_PER_MUB * term.moment_density_muB_per_A3
                continue
            sites, cells, _ = shell_neighbours(ordering, point, term)
            phases = np.exp(-2j * np.pi * ((cells @ ordering.k.T) % 1.0))
            moments = np.einsum("nk,nka->ka", phases, ordering.mean_components[:, sites].transpose(1, 0, 2))
            waves[:, row] += moments @ term.coupling_T_per_muB.T
    return waves, constant


def equivalent_probes(crystal: Crystal, probe: Probe) -> list[Probe]:
    """The probes that the operations of a crystal make of one at a position, each once.

    A contact tensor, a covariance and displaced neighbours are turned with the position. Where they lack its symmetry
    one position carries several probes: the distortion round it may lie in as many ways.

    Raises InputError where no operation leads to a position of the orbit.
    """
    points = orbit(crystal, probe.position)
    if not _has_direction(probe):
        return [dataclasses.replace(probe, position=point) for point in points]
    operations = operations_of(crystal)
    found: list[Probe] = []
    names: list[FloatArray] = []
    reached = np.zeros(len(points), dtype=bool)
    for rotation, translation in zip(operations.rotations, operations.translations, strict=True):
        image = rotation @ probe.position + translation
        gaps = points - image
        cells = np.round(gaps)
        distance = np.linalg.norm((gaps - cells) @ crystal.cell, axis=1)
        i = int(np.argmin(distance))
        if distance[i] > SAME_POSITION_A:
            continue
        reached[i] = True
        turned = _turned(crystal, probe, rotation, translation + cells[i], points[i])
        name = _name_of(turned)
        if not any(np.allclose(name, other, rtol=SAME_TENSOR, atol=1e-9) for other in names):
            found.append(turned)
            names.append(name)
    if not np.all(reached):
        place = ", ".join(f"{x:.5g}" for x in points[~reached][0])
        raise InputError(
            f"{probe.name}: no operation of the cell given carries its tensors or vectors to the equivalent position "
            f"({place}). Give numbers instead, or take the primitive cell."
        )
    return found


def _has_direction(probe: Probe) -> bool:
    """True where something of the probe must be turned with its position."""
    return (
        any(has_direction(term) for term in probe.contact)
        or (probe.spread is not None and np.ndim(probe.spread) == 2)
        or any(moved.vector_A is not None or moved.atom is not None for moved in probe.displaced)
    )


def _turned(
    crystal: Crystal, probe: Probe, rotation: np.ndarray, translation: FloatArray, position: FloatArray
) -> Probe:
    """A probe carried by an operation, to a position that is its image."""
    turn = orthogonal(crystal, rotation)
    spread = probe.spread
    if spread is not None and np.ndim(spread) == 2:
        spread = turn @ spread @ turn.T
    moved = []
    for neighbour in probe.displaced:
        changes: dict[str, Any] = {}
        if neighbour.vector_A is not None:
            changes["vector_A"] = turn @ neighbour.vector_A
        if neighbour.atom is not None:
            site, cell = neighbour.atom
            changes["atom"] = _carried_atom(crystal, site, cell, rotation, translation)
        moved.append(dataclasses.replace(neighbour, **changes))
    contact = tuple(turned_term(term, turn) for term in probe.contact)
    # Uncertainties are of the coordinates as given; the size of the field on an orbit needs none.
    return dataclasses.replace(
        probe, position=position, contact=contact, spread=spread, displaced=tuple(moved), position_su=None
    )


def _carried_atom(
    crystal: Crystal, site: int, cell: tuple[int, int, int], rotation: np.ndarray, translation: FloatArray
) -> tuple[int, tuple[int, int, int]]:
    place = rotation @ (crystal.positions[site] + np.array(cell)) + translation
    gaps = place - crystal.positions
    whole = np.round(gaps)
    alike = np.array([symbol == crystal.symbols[site] for symbol in crystal.symbols])
    distance = np.where(alike, np.linalg.norm((gaps - whole) @ crystal.cell, axis=1), np.inf)
    other = int(np.argmin(distance))
    return other, (int(whole[other, 0]), int(whole[other, 1]), int(whole[other, 2]))


def _name_of(probe: Probe) -> FloatArray:
    """Numbers that are the same for probes that are."""
    parts = [np.asarray(probe.position)]
    parts += [t.coupling_T_per_muB.ravel() for t in probe.contact if t.coupling_T_per_muB is not None]
    if probe.spread is not None:
        parts.append(np.ravel(probe.spread))
    for moved in probe.displaced:
        parts += [moved.vector_A] if moved.vector_A is not None else []
        parts += [np.array([moved.atom[0], *moved.atom[1]], dtype=float)] if moved.atom is not None else []
    return np.concatenate([np.asarray(part, dtype=float) for part in parts])
