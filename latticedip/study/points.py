"""The points of the crystal of a study that its probes stand for."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.displace import Displaced
from latticedip.crystal.model import Crystal
from latticedip.crystal.orbit import orbit
from latticedip.errors import InputError
from latticedip.probe import Probe


@dataclass(frozen=True, eq=False)
class Point:
    """One point that a probe stands for: its position, Shape (3,) fractional, and how many the probe has."""

    probe: Probe
    position: FloatArray
    multiplicity: int

    @property
    def displaced(self) -> tuple[Displaced, ...]:
        """The neighbours that the probe moves."""
        return displaced_of(self.probe)

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
        if self.probe.spread is not None:
            kept.append("its spread is not taken into account here, the place of the probe is taken as sharp")
        return [text if text in crystal.notes else f"{self.probe.name}: {text}" for text in kept]


def displaced_of(probe: Probe) -> tuple[Displaced, ...]:
    """The neighbours that a probe moves."""
    return tuple(probe.displaced)


def points_of(crystal: Crystal, probes: Iterable[Probe], *, all_equivalent: bool = False) -> list[Point]:
    """The points of all probes, in order: the atoms of a site, or the position.

    all_equivalent: a position stands for every one that the symmetry of the crystal makes equal to it.

    Raises InputError where that is asked for a probe with a tensor or a vector that holds at its own position only.
    """
    points: list[Point] = []
    for probe in probes:
        if probe.site is not None:
            positions = crystal.positions[list(crystal.find(probe.site))]
        elif all_equivalent:
            _require_no_direction(probe)
            positions = orbit(crystal, probe.position)
        else:
            positions = np.asarray(probe.position)[None]
        points += [Point(probe, position, len(positions)) for position in positions]
    return points


def _require_no_direction(probe: Probe) -> None:
    """Refuse what is stated for one position and would have to be turned for the others."""
    for term in probe.contact:
        tensor = term.coupling_T_per_muB
        if tensor is not None and not np.array_equal(tensor, tensor[0, 0] * np.eye(3)):
            raise InputError(
                f"probe {probe.name!r} has a contact tensor, which holds at its own position only, so its equivalent "
                "positions cannot be taken. Give the coupling as a number, or list the positions as probes."
            )
    for moved in displaced_of(probe):
        if moved.vector_A is not None or moved.atom is not None:
            raise InputError(
                f"probe {probe.name!r} moves a named atom or by a vector, which holds at its own position only, so its "
                "equivalent positions cannot be taken. Move whole shells outward, or list the positions as probes."
            )


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
