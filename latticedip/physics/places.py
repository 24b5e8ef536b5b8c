"""Where a field is asked for: points and probes as columns, in the cell of an ordering and put onto its sites."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, as_floats
from latticedip.crystal.model import OVERLAP_A, SAME_PLACE_A, Crystal
from latticedip.crystal.spread import carried_spreads, covariance_of
from latticedip.errors import InputError
from latticedip.kernels.jit import over_rows
from latticedip.kernels.nearest import nearest_distances
from latticedip.ordering.model import Ordering
from latticedip.physics.contact import contacts_of_site
from latticedip.physics.spread import probe_words
from latticedip.probe import Contact, Probe
from latticedip.sums.lattice import reduce_cell

#: A site carried over from another crystal is the atom of its element this close (Å): as far as matching lets it lie.
CARRIED_SITE_A = 0.2
#: Pairs of points and sites above which a compiled loop first picks the points that lie near an atom.
FEW_PAIRS = 4096


@dataclass(eq=False)
class Places:
    """Columns with one entry per point to evaluate.

    points, reference: Shape (n, 3) float, fractional in the ordering's own cell, and in the cell probes are given in.
    names, particles, MHz_per_T: of the probe; "point 1", empty and NaN for a bare point. multiplicity: rows that share
    the row's probe. sites: Shape (n,) int, the site a point sits on, −1 elsewhere. elements: of the site a row stands
    for where that was carried from another crystal, else empty. contacts: contact terms. spreads: None, rms
    displacement or covariance; one for all bare points. probes: empty for bare points.
    """

    points: FloatArray
    reference: FloatArray
    names: tuple[str, ...]
    particles: tuple[str, ...]
    MHz_per_T: FloatArray
    multiplicity: np.ndarray
    sites: np.ndarray
    contacts: tuple[tuple[Contact, ...], ...]
    spreads: tuple[float | FloatArray | None, ...]
    elements: tuple[str, ...] = ()
    probes: tuple[Probe, ...] = field(default=(), repr=False)

    def __len__(self) -> int:
        return len(self.points)

    def clouds(self) -> FloatArray:
        """Shape (n, 3, 3) float in Å². Covariances of the spreads, zero where there is none."""
        out = np.zeros((len(self), 3, 3))
        if not self.probes:
            if len(self) and self.spreads[0] is not None:
                out[:] = covariance_of(self.spreads[0])
            return out
        for row, spread in enumerate(self.spreads):
            if spread is not None:
                out[row] = covariance_of(spread)
        return out

    def position_su_cart(self, home: Crystal) -> FloatArray:
        """Shape (n, 3, 3) float in Å. Rows: vectors of the home cell times the uncertainties of the coordinates."""
        out = np.zeros((len(self), 3, 3))
        for row, probe in enumerate(self.probes):
            if probe.position_su is not None:
                out[row] = probe.position_su[:, None] * home.cell
        return out

    def notes(self) -> list[str]:
        """Sentences on how the points and probes move, for reports."""
        if not self.probes:
            return probe_words("every point", self.spreads[0], ()) if len(self) else []
        found = []
        for name, spread, probe in zip(self.names, self.spreads, self.probes, strict=True):
            found += probe_words(name, spread, probe.displaced)
        return found


def places_of(ordering: Ordering, points: Any, spread: float | FloatArray | None) -> Places:
    """Points (n, 3) fractional in the ordering's own cell, a Probe or several, as columns; put onto sites they are on.

    spread: of bare points, and of Probes that state none.

    Raises InputError for a mixture of points and Probes, an unknown site, and a point too close to an atom without
    being on it.
    """
    if isinstance(points, Probe):
        points = [points]
    if isinstance(points, Sequence) and points and all(isinstance(p, Probe) for p in points):
        found = _of_probes(ordering, points, spread)
    elif isinstance(points, Sequence) and any(isinstance(p, Probe) for p in points):
        raise InputError("points must be all Probes or all fractional positions, not a mixture.")
    else:
        positions = np.zeros((0, 3)) if np.size(points) == 0 else as_floats("points", points, (None, 3))
        found = _of_points(positions, spread)
    _put_on_sites(ordering, found)
    return found


def targets_cart(crystal: Crystal, points: FloatArray, sites: np.ndarray) -> FloatArray:
    """Shape (n, 3) float in Å. Cartesian points; on a site with the rounding of the site itself."""
    targets = points @ crystal.cell
    on = sites >= 0
    if np.any(on):
        # The same rounding, so that the source is recognised as its own.
        cells = np.round(points[on] - crystal.positions[sites[on]])
        targets[on] = crystal.places_cart[sites[on]] + cells @ crystal.cell
    return np.asarray(targets)


def _of_points(positions: FloatArray, spread: float | FloatArray | None) -> Places:
    n = len(positions)
    return Places(
        points=positions.copy(),
        reference=positions,
        names=tuple([f"point {i}" for i in range(1, n + 1)]),
        particles=("",) * n,
        MHz_per_T=np.full(n, np.nan),
        multiplicity=np.ones(n, dtype=int),
        sites=np.full(n, -1),
        contacts=((),) * n,
        spreads=(spread,) * n,
    )


def _of_probes(ordering: Ordering, probes: Sequence[Probe], spread: float | FloatArray | None) -> Places:
    rows = [row for probe in probes for row in _rows_of(ordering, probe, spread)]
    points, reference, sites, elements, spreads, contacts, counts, owners = zip(*rows, strict=True)
    return Places(
        points=np.array(points),
        reference=np.array(reference),
        names=tuple(probe.name for probe in owners),
        particles=tuple(probe.particle for probe in owners),
        MHz_per_T=np.array([probe.MHz_per_T for probe in owners]),
        multiplicity=np.array(counts, dtype=int),
        sites=np.array(sites, dtype=int),
        contacts=contacts,
        spreads=spreads,
        elements=elements,
        probes=owners,
    )


def _rows_of(ordering: Ordering, probe: Probe, spread: float | FloatArray | None) -> Iterator[tuple[Any, ...]]:
    """Point, reference, site, element, spread, contact terms, multiplicity and probe of each row of one probe."""
    home = ordering.crystal if ordering.reference is None else ordering.reference.crystal
    own = spread if probe.spread is None else probe.spread
    if probe.site is None:
        sites, spreads, contacts = [-1], [own], [probe.contact]
    else:
        sites = [int(site) for site in home.find(probe.site)]
        spreads = carried_spreads(home, sites, own, probe.name)
        contacts = contacts_of_site(home, home.positions[sites], probe.contact, probe.name)
    found: list[tuple[Any, ...]] = []
    for site, cloud, terms in zip(sites, spreads, contacts, strict=True):
        position = probe.position if site < 0 else home.positions[site]
        if ordering.reference is None:
            found.append((position, position, site, "", cloud, terms))
        else:
            element = "" if site < 0 else home.symbols[site]
            found += [(point, position, -1, element, cloud, terms) for point in ordering.reference.carry(position)]
    for row in found:
        yield (*row, len(found), probe)


def _put_on_sites(ordering: Ordering, places: Places) -> None:
    """Put points within 1e-3 Å of an atom onto it, and note its site."""
    crystal = ordering.crystal
    if crystal.n_sites == 0 or not len(places):
        return
    lattice = reduce_cell(crystal.cell)
    to_reduced = crystal.cell @ lattice.inverse
    for row in _near_rows(crystal, places, to_reduced, lattice.cell):
        # In a reduced cell rounding each coordinate finds the nearest image, wherever that is as near as matters here.
        gap = (places.points[row] - crystal.positions) @ to_reduced
        whole = np.round(gap)
        distance = np.linalg.norm((gap - whole) @ lattice.cell, axis=1)
        if distance.min() >= OVERLAP_A and not (places.elements and places.elements[row]):
            continue
        known = int(places.sites[row])
        site = known if known >= 0 else _site_at(ordering, places, row, distance)
        places.sites[row] = site
        places.points[row] = crystal.positions[site] + whole[site] @ lattice.steps
        apart = np.linalg.norm((gap - whole - (gap[site] - whole[site])) @ lattice.cell, axis=1)
        split = np.flatnonzero(ordering.is_magnetic & (apart > SAME_PLACE_A) & (apart < OVERLAP_A))
        if len(split):
            other = int(split[0])
            raise InputError(
                f"{places.names[row]} sits on atom {crystal.labels[site]} at {_text(places.points[row])}, "
                f"{apart[other]:.4f} Å from the magnetic atom {crystal.labels[other]}: only one of them is there "
                "at a time. Give both the same position."
            )


def _near_rows(crystal: Crystal, places: Places, to_reduced: FloatArray, cell: FloatArray) -> np.ndarray:
    """Rows that may sit on an atom: all of a few; of many those that a compiled loop finds near one."""
    if any(places.elements) or len(places) * crystal.n_sites <= FEW_PAIRS:
        return np.arange(len(places))
    distance = np.empty(len(places))
    over_rows(
        nearest_distances, len(places), places.points @ to_reduced, crystal.positions @ to_reduced,
        np.ascontiguousarray(cell), distance, at_least=max(16, 20_000 // crystal.n_sites),
    )  # fmt: skip
    # A hair more, for distances that rounding puts on either side of the limit.
    return np.flatnonzero(distance < OVERLAP_A * (1 + 1e-6))


def _site_at(ordering: Ordering, places: Places, row: int, distance: FloatArray) -> int:
    """The site a row near an atom sits on; InputError where it is too close to an atom without being on it."""
    crystal, name, point = ordering.crystal, places.names[row], places.points[row]
    element = places.elements[row] if places.elements else ""
    if element:
        alike = np.where([symbol == element for symbol in crystal.symbols], distance, np.inf)
        site = int(np.argmin(alike))
        if alike[site] > CARRIED_SITE_A:
            raise InputError(
                f"{name}: the ordering {ordering.name!r} has no {element} within {CARRIED_SITE_A} Å of "
                f"{_text(point)}, where the site comes to lie in its cell."
            )
        return site
    site = int(np.argmin(distance))
    if distance[site] > SAME_PLACE_A:
        raise InputError(
            f"{name} at {_text(point)} lies {distance[site]:.4f} Å from atom {crystal.labels[site]} at "
            f"{_text(crystal.positions[site])}. A point must be at least {OVERLAP_A} Å from every atom, or on a site "
            f"(within {SAME_PLACE_A} Å)."
        )
    return site


def _text(position: FloatArray) -> str:
    return "(" + ", ".join(f"{x:.5g}" for x in position) + ")"
