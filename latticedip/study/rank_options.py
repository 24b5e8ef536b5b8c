"""What `rank` gives beside the energies: the bound, equal candidates, parts of the energy, energies from elsewhere."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.analysis.bounds import Bound
from latticedip.analysis.decompose import decompose
from latticedip.analysis.directions import mean_size
from latticedip.analysis.families import common_axis, freedom, relations
from latticedip.errors import StudyError
from latticedip.physics.boundary import has_net_moment
from latticedip.study.search import stated_sizes
from latticedip.units import EV_PER_MUB_T

if TYPE_CHECKING:
    from latticedip.analysis.rank import Ranking, RankingRow
    from latticedip.study.schema import Study

#: Magnetic sites up to which the bound is worked out without being asked for.
QUICK_SITES = 16
UEV_PER_EV, UEV_PER_MEV = 1e6, 1e3


@dataclass(frozen=True)
class RankOptions:
    """What is asked of a ranking.

    rotate: turn each pattern to its best orientation. bound: how far each stands above the lowest dipolar mode; None:
    where [moments] is given and there are at most 16 magnetic sites. parts: what each energy is made of, with so many
    ``shells`` of distance. orderings: names of those that count; none: all.
    """

    rotate: bool = False
    bound: bool | None = None
    parts: bool = False
    shells: int = 10
    orderings: Sequence[str] = ()
    tol: float = 1e-10


def check_bound(study: Study, options: RankOptions) -> None:
    """Raise StudyError where the bound is asked for and [moments] states no sizes."""
    if options.bound:
        stated_sizes(study)


def bound_results(study: Study, ranking: Ranking, options: RankOptions) -> tuple[dict[str, Any], list[dict[str, Any]]]:
    """For the document: `bound` (None where it was not worked out) with `bound_note`, and the keys of each row."""
    empty: list[dict[str, Any]] = [{"above_bound_ueV_per_ion": None, "bound_ueV_per_ion": None} for _ in ranking.rows]
    reason = _no_bound(study, options)
    if reason is not None:
        return {"bound": None, "bound_note": reason}, empty
    sizes = stated_sizes(study)
    bound = Bound(study.crystal, sizes, study.sample, options.tol)
    rows, scaled, without = [], [], []
    for row in ranking.rows:
        above = bound.above(row.ordering, row.energy)
        if above is None:
            without.append(row.ordering.name)
        elif abs(above.scale - 1) > 1e-6:
            scaled.append(row.ordering.name)
        rows.append(
            {
                "above_bound_ueV_per_ion": None if above is None else above.above_eV * UEV_PER_EV,
                "bound_ueV_per_ion": None if above is None else above.bound_eV * UEV_PER_EV,
            }
        )
    notes = ["no ordering of these moments lies below the bound, the lowest dipolar mode (Luttinger and Tisza 1946)"]
    if np.any(study.sample.applied_T):
        notes.append("the energy in the applied field is in neither the bound nor the height above it")
    if scaled:
        notes.append(
            f"the mean square moments of {', '.join(scaled)} are not those of [moments]: the bound is scaled to them"
        )
    if without:
        notes.append(f"no bound for {', '.join(without)}: moments at sites without a size in [moments]")
    return {"bound": {**bound.to_dict(), "notes": notes}, "bound_note": None}, rows


def _no_bound(study: Study, options: RankOptions) -> str | None:
    if options.bound is False:
        return "not asked for"
    if options.bound is None:
        try:
            sizes = stated_sizes(study)
        except StudyError:
            return "no bound: [moments] states no sizes"
        if not all(study.crystal.pbc):
            return "no bound: the crystal is not periodic in three directions"
        sites = {i for name in sizes for i in study.crystal.find(name)}
        if len(sites) > QUICK_SITES:
            return (
                f"how far the orderings stand above the lowest possible dipolar energy was not worked out for "
                f"{len(sites)} magnetic sites (more than {QUICK_SITES}); ask for it with --bound"
            )
    return None


def relation_results(study: Study, ranking: Ranking, options: RankOptions) -> list[dict[str, Any]]:
    """The keys of each row that say which candidates are the same by symmetry, and what may be turned freely."""
    found = {relation.row: relation for relation in relations(ranking.rows, sample=study.sample, tol=options.tol)}
    rows = []
    for place, row in enumerate(ranking.rows):
        relation = found.get(place)
        same = None
        if relation is not None:
            same = {"ordering": ranking.rows[relation.other].ordering.name, **relation.to_dict()}
        free = freedom(row.ordering, sample=study.sample, tol=options.tol)
        rows.append({"same_as": same, "free_turns": free.to_dict()})
    return rows


def part_results(study: Study, ranking: Ranking, options: RankOptions) -> list[dict[str, Any]]:
    """The key `parts` of each row; None where it was not asked for."""
    if not options.parts:
        return [{"parts": None} for _ in ranking.rows]
    rows = []
    for row in ranking.rows:
        found = decompose(row.ordering, sample=study.sample, shells=options.shells, tol=options.tol)
        rows.append({"parts": {**found.to_dict(), "label_pairs": found.pairs("label")}})
    return rows


def other_results(study: Study, ranking: Ranking) -> list[dict[str, Any]]:
    """Energies from elsewhere, the sums and the order that they give; the dipolar energy itself stays as it is."""
    stated = study.other_energies_meV_per_ion
    if not stated:
        return [{} for _ in ranking.rows]
    sums = [
        row.energy.per_ion_eV * UEV_PER_EV + stated[row.ordering.name] * UEV_PER_MEV
        if row.ordering.name in stated
        else None
        for row in ranking.rows
    ]
    known = sorted(value for value in sums if value is not None)
    return [
        {
            "other_energy_meV_per_ion": stated.get(row.ordering.name),
            "sum_with_other_ueV_per_ion": value,
            "sum_above_lowest_ueV_per_ion": None if value is None else value - known[0],
            "rank_by_sum": None if value is None else known.index(value) + 1,
        }
        for row, value in zip(ranking.rows, sums, strict=True)
    ]


def anisotropy_field_T(row: RankingRow, applied: bool) -> float | None:
    """2 ΔE/Σ|m| in T between hard and easy axis (see `latticedip.analysis.directions`).

    None where it has no meaning: without `rotate`, for patterns that are not collinear, and where a field is applied to
    a net moment.
    """
    if row.orientation is None or common_axis(row.ordering) is None or (applied and has_net_moment(row.ordering)):
        return None
    return 2 * (row.orientation.hard_eV - row.orientation.easy_eV) / (EV_PER_MUB_T * mean_size(row.ordering))
