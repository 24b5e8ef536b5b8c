"""Ranking of candidate orderings by dipolar energy, with the field at every probe beside it.

A dipole-only ranking leaves out exchange, crystal field and the probe's own distortion; it is no proof of an
ordering.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from latticedip.analysis.rotate import Orientation, best_orientation
from latticedip.checks import FloatArray, check_tol
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.physics.energy import Energy, dipolar_energy
from latticedip.physics.field import LocalField, local_field
from latticedip.physics.spread import counting_spread, moment_spread_words
from latticedip.probe import Probe
from latticedip.sample import Sample
from latticedip.units import J_PER_M3_PER_EV_A3

CAVEAT = (
    "Dipolar energies only: exchange, crystal field and the probe's own distortion of its surroundings are left out. "
    "A ranking is no proof of an ordering."
)
#: What is said of energies where moments are extended.
POINT_ENERGIES = "energies are those of point dipoles: the spread of the moments counts in fields at probes alone"
#: Rounding of an energy, as a part of its size; added to the bound that follows from tol when ties are found.
ROUNDING = 1e-13


@dataclass(frozen=True, eq=False)
class RankingRow:
    """One row of a Ranking.

    ordering: as evaluated; turned to its best orientation if the ranking was made with rotate.
    energy: its Energy. above_lowest_eV: per ion, against the first row.
    tie: True where the energy per ion equals that of a neighbouring row within the error bounds.
    fields: probe name to LocalField (one row per position the probe stands for).
    orientation: None without rotate.
    """

    ordering: Ordering
    energy: Energy
    above_lowest_eV: float
    tie: bool
    fields: dict[str, LocalField]
    orientation: Orientation | None = None

    @property
    def easy_axis_cart(self) -> FloatArray | None:
        """Shape (3,) unit vector of lowest energy, or None (no rotate, or a pattern that is not coplanar)."""
        return None if self.orientation is None else self.orientation.easy_axis_cart

    @property
    def hard_axis_cart(self) -> FloatArray | None:
        """Shape (3,) unit vector of highest energy, or None (no rotate, or a pattern that is not coplanar)."""
        return None if self.orientation is None else self.orientation.hard_axis_cart

    @property
    def rotation(self) -> FloatArray | None:
        """Shape (3, 3). The turn from the ordering as given to the ordering of this row, or None without rotate."""
        return None if self.orientation is None else self.orientation.easy_rotation

    @property
    def anisotropy_eV_per_ion(self) -> float | None:
        """Energy between hard and easy orientation in eV per magnetic ion, or None without rotate."""
        if self.orientation is None:
            return None
        return (self.orientation.hard_eV - self.orientation.easy_eV) / self.energy.n_ions

    @property
    def anisotropy_J_per_m3(self) -> float | None:
        """Energy between hard and easy orientation in J/m³, or None without rotate."""
        if self.orientation is None:
            return None
        difference = self.orientation.hard_eV - self.orientation.easy_eV
        return difference / self.ordering.crystal.volume_A3 * J_PER_M3_PER_EV_A3

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        out: dict[str, Any] = {
            "ordering": self.ordering.name,
            **self.energy.to_dict(),
            "above_lowest_ueV_per_ion": self.above_lowest_eV * 1e6,
            "tie": self.tie,
            "fields": {name: found.to_dict() for name, found in self.fields.items()},
        }
        if self.orientation is not None:
            turned = self.orientation
            out |= {
                "axis_meaning": turned.axis_meaning,
                "easy_axis_cart": None if turned.easy_axis_cart is None else turned.easy_axis_cart.tolist(),
                "hard_axis_cart": None if turned.hard_axis_cart is None else turned.hard_axis_cart.tolist(),
                "rotation": turned.easy_rotation.tolist(),
                "anisotropy_ueV_per_ion": None
                if self.anisotropy_eV_per_ion is None
                else self.anisotropy_eV_per_ion * 1e6,
                "anisotropy_J_per_m3": self.anisotropy_J_per_m3,
                "stationary_directions": [
                    {"direction_cart": direction.tolist(), "energy_eV_per_cell": energy}
                    for direction, energy in turned.stationary
                ],
                "orientation_notes": list(turned.notes),
            }
        return out


@dataclass(frozen=True, eq=False)
class Ranking:
    """Orderings by energy per magnetic ion, lowest first, ties in the order given. notes: what every report repeats."""

    rows: tuple[RankingRow, ...]
    rotated: bool
    boundary: str
    notes: tuple[str, ...] = field(default=())

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        return {
            "boundary": self.boundary,
            "rotated": self.rotated,
            "rows": [row.to_dict() for row in self.rows],
            "notes": list(self.notes),
        }


def rank(
    orderings: Sequence[Ordering],
    *,
    sample: Sample | None = None,
    rotate: bool = False,
    probes: Sequence[Probe] = (),
    moment_spread: Any = None,
    tol: float = 1e-10,
) -> Ranking:
    """Rank orderings by energy per magnetic ion (dipolar, shape and applied field), lowest first, ties as given.

    orderings: in one Cartesian frame, each on its own crystal. sample: one for all; None means N = 0.
    rotate: also turn each pattern rigidly as a whole to its best orientation, and rank those.
    probes: fields are worked out at each, under every ordering as ranked. moment_spread: of the moments, as
    `local_field`, in these fields alone; energies stay those of point dipoles. tol: as `dipole_tensor`.

    Raises InputError for an empty list, an ordering without moments, two probes of one name, or another kind of object.
    """
    check_tol(tol)
    orderings = [orderings] if isinstance(orderings, Ordering) else list(orderings)
    probes = [probes] if isinstance(probes, Probe) else list(probes)
    if not orderings:
        raise InputError("there is no ordering to rank; give at least one.")
    for i, item in enumerate(orderings, start=1):
        if not isinstance(item, Ordering):
            raise InputError(f"rank takes Orderings, got {type(item).__name__} as number {i}.")
    for probe in probes:
        if not isinstance(probe, Probe):
            raise InputError(f"probes must be Probes, got {probe!r}.")
    names = [probe.name for probe in probes]
    for name in names:
        if names.count(name) > 1:
            raise InputError(f"two probes are named {name!r}; names must differ.")
    evaluated = []
    for ordering in orderings:
        energy = dipolar_energy(ordering, sample=sample, tol=tol)
        orientation = None
        if rotate:
            orientation = best_orientation(ordering, sample=sample, tol=tol)
            ordering = ordering.rotated(orientation.easy_rotation)
            energy = dipolar_energy(ordering, sample=sample, tol=tol)
        fields = {
            probe.name: local_field(ordering, probe, moment_spread=moment_spread, sample=sample, tol=tol)
            for probe in probes
        }
        evaluated.append((ordering, energy, orientation, fields))
    numbers, ties = by_energy([energy for _, energy, _, _ in evaluated])
    evaluated = [evaluated[number] for number in numbers]
    lowest = min(energy.per_ion_eV for _, energy, _, _ in evaluated)
    rows = tuple(
        RankingRow(ordering, energy, energy.per_ion_eV - lowest, tie, fields, orientation)
        for (ordering, energy, orientation, fields), tie in zip(evaluated, ties, strict=True)
    )
    extended = moment_spread_words(counting_spread(orderings, moment_spread))
    notes = [*extended, POINT_ENERGIES] if extended else []
    return Ranking(rows, rotate, ranking_boundary(rows), (*notes, CAVEAT))


def by_energy(energies: list[Energy]) -> tuple[list[int], list[bool]]:
    """Numbers of the energies, lowest first and tied ones in the order given; and for each place whether it is tied."""
    numbers = sorted(range(len(energies)), key=lambda i: energies[i].per_ion_eV)
    close = _close_to_next([energies[i] for i in numbers])
    ties = [below or above for below, above in zip([*close, False], [False, *close], strict=True)]
    placed: list[int] = []
    group: list[int] = []
    for number, tied_to_next in zip(numbers, [*close, False], strict=True):
        group.append(number)
        if not tied_to_next:
            placed += sorted(group)
            group = []
    return placed, ties


def _close_to_next(energies: list[Energy]) -> list[bool]:
    """Shape (n − 1). Whether each energy per ion (sorted) equals the next one within their bounds."""
    values = np.array([energy.per_ion_eV for energy in energies])
    bounds = np.array([energy.error_bound_eV / energy.n_ions for energy in energies]) + ROUNDING * np.abs(values)
    return [bool(close) for close in np.diff(values) <= bounds[:-1] + bounds[1:]]


def ranking_boundary(rows: tuple[RankingRow, ...]) -> str:
    """The assumed boundary of all rows in one sentence; rows with a net moment speak for the shape."""
    words = dict.fromkeys(row.energy.boundary for row in rows)
    with_moment = [text for text in words if not text.startswith("no net moment")]
    return "; ".join(with_moment or list(words))
