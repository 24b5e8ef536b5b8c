"""Rankings as documents: one row per ordering, lowest first, with the field at every probe."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.study.documents import document, home_cell_notes, ordering_head
from latticedip.study.rank_options import (
    RankOptions,
    anisotropy_field_T,
    bound_results,
    other_results,
    part_results,
    relation_results,
)

if TYPE_CHECKING:
    from latticedip.analysis.rank import Ranking, RankingRow
    from latticedip.crystal.model import Crystal
    from latticedip.physics.field import LocalField
    from latticedip.study.schema import Study

UEV_PER_EV = 1e6
#: Fields at equivalent points that differ by less than this (relative to the largest) are listed once.
SAME_FIELD = 1e-6
#: Keys of a row that a flat table cannot hold, or holds otherwise.
NOT_IN_TABLE = ("fields", "rotation", "boundary", "same_as", "free_turns", "parts")


def rank_document(study: Study, ranking: Ranking, options: RankOptions) -> dict[str, Any]:
    """The document of `rank`: one row per ordering, lowest first, with the field at every probe.

    Raises what the bound, the relations and the parts raise.
    """
    rows = [_rank_row(number, row, study) for number, row in enumerate(ranking.rows, start=1)]
    bound, heights = bound_results(study, ranking, options)
    blocks = [
        heights,
        other_results(study, ranking),
        relation_results(study, ranking, options),
        part_results(study, ranking, options),
    ]
    for block in blocks:
        for row, keys in zip(rows, block, strict=True):
            row |= keys
    return document(
        "rank",
        files=study.files,
        options={
            "rotate": options.rotate,
            "bound": options.bound,
            "parts": options.parts,
            "shells": options.shells if options.parts else None,
            "orderings": list(options.orderings) or None,
            "tol": options.tol,
        },
        boundary=ranking.boundary,
        results={
            "title": study.title,
            "sample": study.sample.to_dict(),
            **bound,
            "rows": rows,
            "zero_parts": _zero_parts(rows, bool(np.any(study.sample.applied_T))),
            "notes": [*(home_cell_notes([r.ordering for r in ranking.rows]) if study.probes else []), *ranking.notes],
        },
    )


def _zero_parts(rows: Sequence[Mapping[str, Any]], field_applied: bool) -> dict[str, str]:
    """Parts of the energy that are zero for every ordering, and why."""
    reasons = {
        "shape": "no energy of the shape: no demagnetizing field for any of these orderings",
        "applied": "no energy in an applied field: "
        + ("no ordering has a net moment along it" if field_applied else "no field is applied"),
    }
    return {part: why for part, why in reasons.items() if not any(row[f"{part}_ueV_per_ion"] for row in rows)}


def _rank_row(number: int, row: RankingRow, study: Study) -> dict[str, Any]:
    energy, crystal = row.energy, study.crystal
    per_ion = UEV_PER_EV / energy.n_ions
    plain: dict[str, Any] = {
        "rank": number,
        **ordering_head(row.ordering),
        "net_moment_muB_per_ion": float(np.linalg.norm(energy.net_moment)) / energy.n_ions,
        "energy_ueV_per_ion": energy.per_ion_eV * UEV_PER_EV,
        "energy_K_per_ion": energy.per_ion_K,
        "above_lowest_ueV_per_ion": row.above_lowest_eV * UEV_PER_EV,
        "tie": bool(row.tie),
        "dipolar_ueV_per_ion": energy.dipolar_eV * per_ion,
        "shape_ueV_per_ion": energy.shape_eV * per_ion,
        "applied_ueV_per_ion": energy.applied_eV * per_ion,
        "error_bound_ueV_per_ion": energy.error_bound_eV * per_ion,
        "energy_eV_per_cell": energy.per_cell_eV,
        "boundary": energy.boundary,
        "notes": list(energy.notes),
    }
    if row.orientation is not None:
        plain["axis_meaning"] = row.orientation.axis_meaning
        for word, direction in (("easy", row.easy_axis_cart), ("hard", row.hard_axis_cart)):
            plain[f"{word}_axis_cart"] = None if direction is None else direction.tolist()
            plain[f"{word}_axis_abc"] = None if direction is None else axis_in_crystal(direction, crystal).tolist()
        plain["rotation"] = row.orientation.easy_rotation.tolist()
        plain["anisotropy_ueV_per_ion"] = (row.anisotropy_eV_per_ion or 0.0) * UEV_PER_EV
        plain["anisotropy_J_per_m3"] = row.anisotropy_J_per_m3
        plain["anisotropy_field_T"] = anisotropy_field_T(row, bool(np.any(study.sample.applied_T)))
        plain["orientation_notes"] = list(row.orientation.notes)
    plain["fields"] = {name: _brief_field(result) for name, result in row.fields.items()}
    return plain


def _brief_field(result: LocalField) -> list[dict[str, Any]]:
    """The whole field at each point of one probe; its parts are what `field` gives."""
    return [
        {
            "position": result.points[i].tolist(),
            "position_in_reference_cell": result.reference_points[i].tolist(),
            "field_T": result.total[i].tolist(),
            "field_size_T": float(result.size_T[i]),
            "frequency_MHz": float(result.frequency_MHz[i]),
            "error_bound_T": float(result.error_bound_T[i]),
        }
        for i in range(len(result.points))
    ]


def field_levels(points: Sequence[dict[str, Any]], zero_T: float = 0.0) -> list[tuple[float, float, int]]:
    """The distinct field sizes (T) of a probe's points, largest first, each with frequency (MHz) and number of points.

    Sizes within 1e-6 of the largest or within their error bounds are one level: symmetry makes them equal, rounding
    does not keep them so. zero_T: sizes below this are one level too.
    """
    ordered = sorted(points, key=lambda point: -point["field_size_T"])
    slack = SAME_FIELD * ordered[0]["field_size_T"] if ordered else 0.0
    levels: list[list[dict[str, Any]]] = []
    for point in ordered:
        first = levels[-1][0] if levels else point
        # A bound holds for each of three components.
        bound = 3**0.5 * (first["error_bound_T"] + point["error_bound_T"])
        alike = first["field_size_T"] - point["field_size_T"] <= max(slack, bound) or first["field_size_T"] < zero_T
        if levels and alike:
            levels[-1].append(point)
        else:
            levels.append([point])
    return [(level[0]["field_size_T"], level[0]["frequency_MHz"], len(level)) for level in levels]


def axis_in_crystal(direction: FloatArray, crystal: Crystal) -> FloatArray:
    """A unit vector as components along unit vectors parallel to a, b, c (as `along` in a study)."""
    return np.asarray(crystal.to_crystal_axes(direction / np.linalg.norm(direction)))


def rank_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a rank document with the field levels of each probe spread over columns, for CSV.

    What each energy is made of is left to the document.
    """
    table = []
    most_levels: dict[str, int] = {}
    for row in doc["rows"]:
        for name, points in row["fields"].items():
            most_levels[name] = max(most_levels.get(name, 1), len(field_levels(points)))
    for row in doc["rows"]:
        spread = {key: value for key, value in row.items() if key not in NOT_IN_TABLE}
        same, free = row["same_as"], row["free_turns"]
        spread["same_as"] = None if same is None else f"{same['ordering']}: {same['domain'] or same['kind']}"
        spread["free_turns"] = free["kind"]
        for i, line in enumerate(row.get("rotation", [])):
            spread.update({f"rotation_{i + 1}{j + 1}": value for j, value in enumerate(line)})
        for name, points in row["fields"].items():
            levels = field_levels(points)
            # Every row names the columns of all levels, so that those of one probe stand together.
            for number in range(most_levels[name]):
                level = levels[number] if number < len(levels) else (None, None, None)
                place = f" ({number + 1})" if number else ""
                keys = (f"{name}: {what}{place}" for what in ("field_size_T", "frequency_MHz", "points"))
                spread.update(zip(keys, level, strict=True))
        spread["boundary"] = row["boundary"]
        table.append(spread)
    return table
