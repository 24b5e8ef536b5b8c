"""Energies against direction on screen."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from latticedip.report.field import ordering_lines
from latticedip.report.tables import Column, bullets, decimals_for, direction, fixed, heading, pairs, table, vector

ANISOTROPY = (
    "the anisotropy field is 2 ΔE/m: ΔE per ion from the easy axis to the axis named, m the mean size of a moment; a "
    "field along each moment's own direction that holds it as stiffly"
)


def directions_text(document: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return, for each ordering, its principal axes and its energy along three great circles."""
    parts = [heading(document["title"])]
    if any(document["sample"]["applied_T"]):
        applied = f"{vector(document['sample']['applied_T'])} T, Cartesian"
        parts += ["", pairs([("applied field", applied)], width=width)]
    for entry in document["orderings"]:
        lead = [
            *ordering_lines(entry),
            ("moments along", f"{direction(entry['given_direction_abc'])} as given (along a b c)"),
            ("boundary", entry["boundary"]),
        ]
        parts += [
            "",
            "",
            heading(entry["ordering"]),
            pairs(lead, width=width),
            "",
            _axes(entry, width),
            "",
            _circles(entry, width),
        ]
        notes = list(entry["notes"])
        if entry["free_turns"]["words"]:
            notes.append(entry["free_turns"]["words"])
        parts += ["", bullets(notes, width=width)] if notes else []
    return "\n".join([*parts, "", bullets([*document["notes"], ANISOTROPY], width=width)])


def _digits(entry: Mapping[str, Any]) -> int:
    values = [row["energy_ueV_per_ion"] for row in entry["rows"]]
    error = entry["error_bound_ueV_per_ion"]
    return min(
        decimals_for(values, significant=15, error=error), max(3, decimals_for(values, significant=5, error=error))
    )


def _axes(entry: Mapping[str, Any], width: int | None) -> str:
    columns = [
        Column("axis", words=True),
        Column("direction", "along a b c", words=True, whole=True),
        Column("direction", "Cartesian", words=True, whole=True),
        Column("energy", "µeV/ion"),
        Column("anisotropy\nfield", "T"),
    ]
    digits = _digits(entry)
    fields = [None, entry["anisotropy_field_towards_middle_T"], entry["anisotropy_field_towards_hard_T"]]
    field_digits = decimals_for([value for value in fields if value is not None], significant=5, error=1e-9)
    cells = [
        [
            axis["axis"],
            direction(axis["direction_abc"]),
            direction(axis["direction_cart"]),
            fixed(axis["energy_without_field_ueV_per_ion"], digits),
            fixed(field, field_digits),
        ]
        for axis, field in zip(entry["axes"], fields, strict=True)
    ]
    return table(columns, cells, width=width, keys=1)


def _circles(entry: Mapping[str, Any], width: int | None) -> str:
    """One line per angle, one column per great circle."""
    circles = list(dict.fromkeys((row["from"], row["towards"]) for row in entry["rows"]))
    columns = [Column("angle", "degrees"), *(Column(f"{a}\nto {b}", "µeV/ion") for a, b in circles)]
    digits = _digits(entry)
    by_circle = [[row for row in entry["rows"] if (row["from"], row["towards"]) == circle] for circle in circles]
    angles = [row["angle_deg"] for row in by_circle[0]]
    places = 0 if all(float(angle).is_integer() for angle in angles) else 2
    cells = [
        [fixed(angle, places), *(fixed(rows[i]["energy_ueV_per_ion"], digits) for rows in by_circle)]
        for i, angle in enumerate(angles)
    ]
    return table(columns, cells, width=width, keys=1)
