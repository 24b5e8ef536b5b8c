"""Local fields on screen: an overview of all points, then the five parts of each."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from latticedip.report.averages import averages_lines
from latticedip.report.su import with_su
from latticedip.report.tables import (
    Column,
    bullets,
    decimals_for,
    fixed,
    fraction,
    heading,
    pairs,
    short,
    table,
    vector,
)
from latticedip.study.fields import PARTS, SU_NOTE

_COMPONENTS = {"cartesian": ("x", "y", "z"), "crystal": ("along a", "along b", "along c")}
_AXES_WORDS = {
    "cartesian": "along Cartesian x, y, z",
    "crystal": "along unit vectors parallel to a, b, c of the study's crystal",
    "polar": "as size, angle theta from Cartesian z, angle phi from x in the xy plane",
}


def field_text(document: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return the fields of every ordering as tables."""
    options = document["inputs"]["options"]
    axes, unit = options["axes"], options["unit"]
    lead = [("vectors", _AXES_WORDS[axes])]
    if any(document["sample"]["applied_T"]):
        lead.append(("applied field", f"{vector(document['sample']['applied_T'])} T, Cartesian"))
    parts = [heading(document["title"]), "", pairs(lead, width=width)]
    for entry in document["orderings"]:
        parts += [
            "",
            "",
            heading(entry["ordering"]),
            pairs([*ordering_lines(entry), ("boundary", entry["boundary"])], width=width),
            "",
            _overview(entry, unit, width),
            *averages_lines(entry, axes, unit, width),
            "",
            _parts_table(entry, axes, unit, width),
        ]
        bracketed = any("(" in text for texts in _sizes_shown(entry["rows"], unit) for text in texts)
        notes = [note for note in entry["notes"] if bracketed or note != SU_NOTE]
        if notes:
            parts += ["", bullets(notes, width=width)]
    return "\n".join(parts)


def ordering_lines(entry: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Return k, ions and net moment of an ordering in words."""
    lines = [
        ("k", k_text(entry["k"])),
        ("magnetic ions", f"{short(entry['ions_per_cell'])} per cell"),
        ("net moment", f"{vector(entry['net_moment_muB_per_cell'])} µB per cell, Cartesian"),
    ]
    if entry.get("own_cell_placed"):
        lines.append(("its own cell", placed_words(entry["own_cell_placed"])))
    return lines


def placed_words(how: str) -> str:
    """Return in words how the cell of an ordering was placed in the crystal of the study."""
    return f"placed {how}" if how.startswith("by ") else how


def k_text(vectors: Sequence[Sequence[float]]) -> str:
    """Return propagation vectors with their fractions."""
    return " and ".join("(" + ", ".join(fraction(x) for x in k) + ")" for k in vectors)


def _overview(entry: Mapping[str, Any], unit: str, width: int | None) -> str:
    rows = entry["rows"]
    elsewhere = any(row["position"] != row["position_in_reference_cell"] for row in rows)
    columns = [
        Column("point"),
        Column("probe", words=True),
        Column("|B|", unit),
        Column("frequency", "MHz"),
        Column("gradient\nof |B|", f"{unit}/Å"),
        Column("position", "in the study's cell", words=True, whole=True),
    ]
    columns += [Column("position", "in its own cell", words=True, whole=True)] if elsewhere else []
    slopes = [_length(row, unit) for row in rows]
    slope_digits = decimals_for(slopes, significant=4, error=_error_bound(rows, unit))
    shown = _sizes_shown(rows, unit)
    cells = []
    counted: dict[str, int] = {}
    for number, row in enumerate(rows, start=1):
        counted[row["probe"]] = counted.get(row["probe"], 0) + 1
        name = row["probe"] + (f" ({row['site']})" if row["site"] and row["site"] not in row["probe"] else "")
        name += f", {counted[row['probe']]} of {row['multiplicity']}" if row["multiplicity"] > 1 else ""
        line = [str(number), name, *shown[number - 1]]
        line += [fixed(slopes[number - 1], slope_digits), coordinates(row["position_in_reference_cell"])]
        line += [coordinates(row["position"])] if elsewhere else []
        cells.append(line)
    return table(columns, cells, width=width, keys=1)


def _sizes_shown(rows: Sequence[Mapping[str, Any]], unit: str) -> list[tuple[str, str]]:
    """|B| and frequency of every row, with uncertainties in brackets where they show."""
    sizes = [row[f"field_size_{unit}"] for row in rows]
    frequencies = [math.nan if row["frequency_MHz"] is None else row["frequency_MHz"] for row in rows]
    error = _error_bound(rows, unit)
    digits = decimals_for(sizes, error=error)
    per_unit = max((f / s for f, s in zip(frequencies, sizes, strict=True) if f > 0), default=0.0)
    frequency_digits = decimals_for(frequencies, error=error * per_unit)
    return [
        (
            with_su(size, digits, row.get(f"field_size_su_{unit}")),
            with_su(frequency, frequency_digits, row.get("frequency_su_MHz")),
        )
        for row, size, frequency in zip(rows, sizes, frequencies, strict=True)
    ]


def _error_bound(rows: Sequence[Mapping[str, Any]], unit: str) -> float:
    return max((row[f"error_bound_{unit}"] for row in rows), default=0.0)


def _length(row: Mapping[str, Any], unit: str) -> float:
    """Size of the gradient of |B|, whatever axes its row is given in."""
    return float(row[f"gradient_of_size_length_{unit}_per_A"])


def coordinates(position: Sequence[float]) -> str:
    """Return fractional coordinates with at most five decimals."""
    return " ".join(short(round(x, 5) + 0.0) for x in position)


def _parts_table(entry: Mapping[str, Any], axes: str, unit: str, width: int | None) -> str:
    rows = entry["rows"]
    values = [[_values(row, part, axes, unit) for part in PARTS] for row in rows]
    lengths = [v for row in values for part in row for v in (part[:1] if axes == "polar" else part)]
    digits = decimals_for([v for v in lengths if v is not None], error=_error_bound(rows, unit))
    columns = [Column("point"), Column("part", words=True)]
    if axes == "polar":
        columns += [Column("size", unit), Column("theta", "degrees"), Column("phi", "degrees")]
        decimals = (digits, 2, 2)
    else:
        columns += [Column(letter, unit) for letter in _COMPONENTS[axes]]
        decimals = (digits, digits, digits)
    words = list(PARTS.values())
    # The Lorentz, demagnetizing and applied field are the same everywhere; they, and a part that is nowhere, come once.
    alike = [len(values) > 1 and all(row[i] == values[0][i] for row in values) for i in range(len(words) - 1)] + [False]
    blocks = [("all", values[0], alike)] if any(alike) else []
    blocks += [(str(number), row, [not same for same in alike]) for number, row in enumerate(values, start=1)]
    cells = []
    for name, row, listed in blocks:
        for i in np.flatnonzero(listed):
            shown = [fixed(v, d) for v, d in zip(row[i], decimals, strict=True)]
            cells.append([name, words[i], *shown])
            name = ""
    return table(columns, cells, width=width, keys=2)


def _values(row: Mapping[str, Any], part: str, axes: str, unit: str) -> list[float | None]:
    if axes == "polar":
        return [row[f"{part}_size_{unit}"], row[f"{part}_theta_deg"], row[f"{part}_phi_deg"]]
    return list(row[f"{part}_{unit}"] if axes == "cartesian" else row[f"{part}_abc_{unit}"])
