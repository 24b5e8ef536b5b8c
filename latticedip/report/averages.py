"""Averages over the positions of one probe on screen."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from latticedip.report.tables import Column, decimals_for, fixed, short, table

_LETTERS = {"cartesian": ("x", "y", "z"), "crystal": ("along a", "along b", "along c"), "polar": ("theta", "phi")}


def averages_lines(entry: Mapping[str, Any], axes: str, unit: str, width: int | None) -> list[str]:
    """Return tables of the averages of an ordering with an empty line before each; nothing where it has none."""
    averages = entry["averages"]
    if not averages:
        return []
    return ["", _weights(entry, width), "", _averages(entry, axes, unit, width)]


def _name(average: Mapping[str, Any]) -> str:
    return str(average["probe"]) + (f", {average['copy']} of {average['copies']}" if average["copies"] > 1 else "")


def _weights(entry: Mapping[str, Any], width: int | None) -> str:
    columns = [Column("average", words=True), Column("point"), Column("weight")]
    cells = []
    for average in entry["averages"]:
        digits = decimals_for(average["weights"], significant=4)
        name = _name(average)
        for point, weight in zip(average["points"], average["weights"], strict=True):
            cells.append([name, str(point), fixed(weight, digits)])
            name = ""
    return table(columns, cells, width=width, keys=1)


def _averages(entry: Mapping[str, Any], axes: str, unit: str, width: int | None) -> str:
    """The mean field as a vector, its size with the frequency, then the averages of the sizes."""
    averages = entry["averages"]
    error = max(average[f"mean_error_bound_{unit}"] for average in averages)
    vectors = [_vector(average, axes, unit) for average in averages]
    keys = (f"size_of_mean_field_{unit}", f"mean_size_{unit}", f"rms_size_{unit}", f"rms_deviation_{unit}")
    sizes = [[average[key] for key in keys] for average in averages]
    lengths = [x for row in sizes for x in row]
    lengths += [] if axes == "polar" else [x for row in vectors for x in row if x is not None]
    digits = decimals_for(lengths, error=error)
    frequencies = [average["frequency_of_mean_field_MHz"] for average in averages]
    per_unit = max((f / row[0] for f, row in zip(frequencies, sizes, strict=True) if row[0] > 0), default=0.0)
    frequency_digits = decimals_for(frequencies, error=error * per_unit)
    kind = "degrees" if axes == "polar" else unit
    columns = [
        Column("average", words=True),
        *(Column(f"mean\n{letter}", kind) for letter in _LETTERS[axes]),
        Column("size of\nmean", unit),
        Column("frequency\nof mean", "MHz"),
        Column("mean\n|B|", unit),
        Column("rms\n|B|", unit),
        Column("rms\ndeviation", unit),
    ]
    cells = []
    for average, vector, row, frequency in zip(averages, vectors, sizes, frequencies, strict=True):
        shown = [fixed(math.nan if x is None else x, 2 if axes == "polar" else digits) for x in vector]
        cells.append(
            [_name(average), *shown, fixed(row[0], digits), fixed(frequency, frequency_digits)]
            + [fixed(x, digits) for x in row[1:]]
        )
    return table(columns, cells, width=width, keys=1)


def _vector(average: Mapping[str, Any], axes: str, unit: str) -> list[float | None]:
    if axes == "polar":
        return [average["mean_field_theta_deg"], average["mean_field_phi_deg"]]
    return list(average[f"mean_field_{unit}" if axes == "cartesian" else f"mean_field_abc_{unit}"])


def weight_lines(mean: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Return the positions of a probe, each with its weight, as a line under a heading."""
    listed = [
        f"{' '.join(short(round(x, 5) + 0.0) for x in position)} (weight {short(weight, 4)})"
        for position, weight in zip(mean["positions"], mean["weights"], strict=True)
    ]
    return [("positions", "; ".join(listed))]
