"""The points of the crystal of a study that its probes stand for."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.displace import Displaced
from latticedip.crystal.model import Crystal
from latticedip.crystal.spread import carried_spreads
from latticedip.crystal.symmetry import operations_of
from latticedip.crystal.uncertain import carried_su
from latticedip.observables.orbits import equivalent_probes
from latticedip.physics.contact import contacts_of_site
from latticedip.probe import Contact, Probe


@dataclass(frozen=True, eq=False)
class Point:
    """One point that a probe stands for: its position, Shape (3,) fractional, and how many the probe has.

    probe: the probe, its tensors turned where the point is one that symmetry makes equal to its position. spread: that
    of the probe, turned for the other atoms of a site, as are its contact terms. position_su: Shape (3,) fractional,
    where the probe states it.
    """

    probe: Probe
    position: FloatArray
    multiplicity: int
    spread: float | FloatArray | None = None
    position_su: FloatArray | None = None
    contact: tuple[Contact, ...] = ()

    @property
    def displaced(self) -> tuple[Displaced, ...]:
        """The neighbours that the probe moves."""
        return self.probe.displaced

    def head(self) -> dict[str, Any]:
        """What every row says of its point."""
        return {
            "probe": self.probe.name,
            "particle": self.probe.particle,
            "MHz_per_T": self.probe.MHz_per_T,
            "multiplicity": self.multiplicity,
        }

    def notes(self, crystal: Crystal, sentences: Iterable[str]) -> list[str]:
        """What a result says of this point, with the name of its probe; that a site lies on its atom goes without."""
        kept = [text for text in sentences if self.probe.site is None or not text.startswith("the position is that of")]
        return [text if text in crystal.notes else f"{self.probe.name}: {text}" for text in kept]


def points_of(crystal: Crystal, probes: Iterable[Probe], *, all_equivalent: bool = False) -> list[Point]:
    """The points of all probes, in order: the atoms of a site, or the position.

    all_equivalent: a position stands for every one that the symmetry of the crystal makes equal to it; contact tensors,
    covariances and displaced neighbours are turned with it.

    Raises InputError for a covariance or contact tensor without the symmetry of its site, and what `equivalent_probes`
    raises.
    """
    points: list[Point] = []
    for probe in probes:
        if probe.site is not None:
            sites = crystal.find(probe.site)
            places = crystal.positions[list(sites)]
            spreads = carried_spreads(crystal, sites, probe.spread, probe.name)
            contacts = contacts_of_site(crystal, places, probe.contact, probe.name)
            points += [
                Point(probe, position, len(sites), spread, contact=contact)
                for position, spread, contact in zip(places, spreads, contacts, strict=True)
            ]
            continue
        images = equivalent_probes(crystal, probe) if all_equivalent else [probe]
        for image in images:
            su = probe.position_su if image is probe else _su_there(crystal, probe, np.asarray(image.position))
            points.append(Point(image, np.asarray(image.position), len(images), image.spread, su, image.contact))
    return points


def _su_there(crystal: Crystal, probe: Probe, position: FloatArray) -> FloatArray | None:
    """Standard uncertainties of the coordinates at an equivalent position, by an operation that leads there."""
    if probe.position_su is None:
        return None
    operations = operations_of(crystal)
    gaps = operations.rotations @ probe.position + operations.translations - position
    distance = np.linalg.norm((gaps - np.round(gaps)) @ crystal.cell, axis=1)
    return carried_su(operations.rotations[int(np.argmin(distance))].astype(float), np.eye(3), probe.position_su)


def alike(tensors: list[FloatArray], error: float) -> list[list[int]]:
    """Numbers of the tensors that are equal within twice an error, or 1e-9 of the largest element, group by group."""
    groups: list[list[int]] = []
    for number, tensor in enumerate(tensors):
        for group in groups:
            first = tensors[group[0]]
            slack = max(2 * error, 1e-9 * float(np.abs(first).max(initial=0.0)))
            if float(np.abs(tensor - first).max(initial=0.0)) <= slack:
                group.append(number)
                break
        else:
            groups.append([number])
    return groups
