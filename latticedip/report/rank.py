"""A ranking on screen: energies, turns, fields, and what the ranking does not say."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from latticedip.report.energy_parts import made_of_text
from latticedip.report.field import k_text, placed_words
from latticedip.report.tables import (
    Column,
    bullets,
    decimals_for,
    direction,
    fixed,
    heading,
    pairs,
    paragraph,
    table,
    vector,
)
from latticedip.study.rankings import field_levels
from latticedip.units import K_PER_EV


def rank_text(document: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return a ranking as tables, with the boundary it assumed and what it leaves out."""
    rows = document["rows"]
    rotate = document["inputs"]["options"]["rotate"]
    lead = [("boundary", document["boundary"])]
    if any(document["sample"]["applied_T"]):
        lead.append(("applied field", f"{vector(document['sample']['applied_T'])} T, Cartesian"))
    if rotate:
        lead.append(("orientation", "each pattern turned as a whole to its lowest energy"))
    if document["bound"] is not None:
        lead.append(("bound", bound_words(document["bound"])))
    parts = [heading(document["title"]), "", pairs(lead, width=width), "", _energies(rows, width)]
    if any(row["tie"] for row in rows):
        parts += ["", paragraph("= : a tie; the energies differ by less than the error bound.", width=width)]
    if any(row.get("other_energy_meV_per_ion") is not None for row in rows):
        parts += ["", "With the energies from elsewhere", "", _sums(rows, width)]
    zero = document["zero_parts"]
    if len(zero) < 2:
        parts += ["", "Parts of the energy", "", _energy_parts(rows, zero, width)]
    if zero:
        parts += ["", bullets(zero.values(), width=width)]
    if rotate:
        parts += ["", "Easy and hard axis", "", _turns(rows, width)]
        remarks = _turn_remarks(rows)
        parts += ["", bullets(remarks, width=width)] if remarks else []
    if any(row["fields"] for row in rows):
        parts += ["", "Field at the probes", "", _fields(rows, width)]
    if document["inputs"]["options"]["parts"]:
        parts += ["", made_of_text(rows, width=width)]
    placed = [
        f"{row['ordering']}: has a cell of its own, {placed_words(row['own_cell_placed'])}"
        for row in rows
        if row["own_cell_placed"]
    ]
    notes = [
        f"{row['ordering']}: {note}"
        for row in rows
        for note in row["notes"]
        if note not in (row["own_cell_placed"] or "")
    ]
    common = [note for row in rows for note in row["notes"] if all(note in other["notes"] for other in rows)]
    own = [line for line in notes if line.split(": ", 1)[1] not in common]
    remarks = [*common, *placed, *own, *_equals(rows), *_bound_notes(document), *_sum_notes(rows)]
    parts += ["", bullets([*remarks, *document["notes"]], width=width)]
    return "\n".join(parts)


def _column(rows: Sequence[Mapping[str, Any]], key: str, *, like: str = "", scale: float = 1.0) -> list[str]:
    """A column of energies in 1e-3 or five digits, whichever is finer, but none that the error bound reaches.

    like: another key whose values set the digits. scale: turns the error bound in µeV into the unit of the column.
    """
    error = max((row["error_bound_ueV_per_ion"] for row in rows), default=0.0) * scale
    values = [row[like or key] for row in rows if row[like or key] is not None]
    finest = decimals_for(values, significant=15, error=error)
    digits = min(finest, max(3, decimals_for(values, significant=5, error=error)))
    return [fixed(row[key], digits) for row in rows]


def _energies(rows: Sequence[Mapping[str, Any]], width: int | None) -> str:
    micro = _column(rows, "energy_ueV_per_ion")
    above = _column(rows, "above_lowest_ueV_per_ion", like="energy_ueV_per_ion")
    kelvin = _column(rows, "energy_K_per_ion", scale=K_PER_EV * 1e-6)
    net_digits = decimals_for([row["net_moment_muB_per_ion"] for row in rows], significant=4, error=1e-9)
    bounded = any(row["above_bound_ueV_per_ion"] is not None for row in rows)
    columns = [
        Column("rank"),
        Column("ordering", words=True),
        Column("energy", "µeV/ion"),
        Column("energy", "K/ion"),
        Column("above\nlowest", "µeV/ion"),
        *([Column("above\nbound", "µeV/ion")] if bounded else []),
        Column("tie", words=True),
        Column("net\nmoment", "µB/ion"),
    ]
    height = _column(rows, "above_bound_ueV_per_ion", like="energy_ueV_per_ion")
    cells = [
        [
            str(row["rank"]),
            row["ordering"],
            micro[i],
            kelvin[i],
            above[i],
            *([height[i]] if bounded else []),
            "=" if row["tie"] else "",
            fixed(row["net_moment_muB_per_ion"], min(net_digits, 4)),
        ]
        for i, row in enumerate(rows)
    ]
    return table(columns, cells, width=width, keys=2)


def bound_words(bound: Mapping[str, Any]) -> str:
    """The lowest dipolar mode in one line: its energy, where it is, whether an ordering reaches it."""
    energy = bound["energy_ueV_per_ion"]
    shown = fixed(energy, max(3, decimals_for([energy], significant=5, error=bound["error_bound_ueV_per_ion"])))
    if bound["k"] is None:
        return f"{shown} µeV/ion, approached as k → 0"
    reached = "reached by equal moments" if bound["equal_moments"] else "no equal moments found that reach it"
    return f"{shown} µeV/ion, at k = {k_text(bound['k'])}; {reached}"


def _bound_notes(document: Mapping[str, Any]) -> list[str]:
    if document["bound"] is not None:
        return list(document["bound"]["notes"])
    asked = document["inputs"]["options"]["bound"]
    return [] if asked is False else [document["bound_note"]]


def _equals(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    """Which candidates are the same by symmetry, and what may be turned without a change of energy."""
    lines = [f"{row['ordering']}: {row['same_as']['words']}" for row in rows if row["same_as"] is not None]
    for row in rows:
        # A turn that was asked for says the same of its easy direction.
        told = row.get("orientation_notes") or row["same_as"] is not None
        if row["free_turns"]["words"] and not told:
            lines.append(f"{row['ordering']}: {row['free_turns']['words']}")
    return lines


def _sums(rows: Sequence[Mapping[str, Any]], width: int | None) -> str:
    """The energies that the study gives from elsewhere beside the dipolar ones, lowest sum first."""
    given = [row for row in rows if row["other_energy_meV_per_ion"] is not None]
    given.sort(key=lambda row: row["sum_with_other_ueV_per_ion"])
    columns = [
        Column("order"),
        Column("ordering", words=True),
        Column("energy", "µeV/ion"),
        Column("from\nelsewhere", "µeV/ion"),
        Column("sum", "µeV/ion"),
        Column("above\nlowest", "µeV/ion"),
    ]
    values = [{**row, "other": 1e3 * row["other_energy_meV_per_ion"]} for row in given]
    shown = [
        _column(values, key)
        for key in ("energy_ueV_per_ion", "other", "sum_with_other_ueV_per_ion", "sum_above_lowest_ueV_per_ion")
    ]
    cells = [[str(row["rank_by_sum"]), row["ordering"], *(part[i] for part in shown)] for i, row in enumerate(given)]
    return table(columns, cells, width=width, keys=2)


def _sum_notes(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    if not any(row.get("other_energy_meV_per_ion") is not None for row in rows):
        return []
    notes = ["energies from elsewhere are as the study states them; the ranking and its ties leave them out"]
    without = [row["ordering"] for row in rows if row["other_energy_meV_per_ion"] is None]
    if without:
        notes.append(f"the study states no other energy for {', '.join(without)}: not among the sums")
    if any(row.get("rotation") for row in rows):
        notes.append("energies from elsewhere are taken as the same for every orientation of a pattern")
    return notes


def _energy_parts(rows: Sequence[Mapping[str, Any]], zero: Mapping[str, str], width: int | None) -> str:
    names = [name for name in ("dipolar", "shape", "applied") if name not in zero]
    columns = [Column("rank"), Column("ordering", words=True), *(Column(name, "µeV/ion") for name in names)]
    shown = [_column(rows, f"{name}_ueV_per_ion") for name in names]
    cells = [[str(row["rank"]), row["ordering"], *(part[i] for part in shown)] for i, row in enumerate(rows)]
    return table(columns, cells, width=width, keys=2)


def _turns(rows: Sequence[Mapping[str, Any]], width: int | None) -> str:
    columns = [
        Column("rank"),
        Column("ordering", words=True),
        Column("easy axis", "along a b c"),
        Column("hard axis", "along a b c"),
        Column("energy\nbetween", "µeV/ion"),
        Column("energy\nbetween", "J/m³"),
    ]
    micro = _column(rows, "anisotropy_ueV_per_ion")
    largest = max((abs(row["anisotropy_ueV_per_ion"]) for row in rows), default=0.0)
    density = max((abs(row["anisotropy_J_per_m3"]) for row in rows), default=0.0)
    bound = max(row["error_bound_ueV_per_ion"] for row in rows)
    density_digits = decimals_for([density], significant=5, error=bound * density / largest if largest > 0 else 0.0)
    cells = [
        [
            str(row["rank"]),
            row["ordering"],
            _axis(row, "easy_axis_abc"),
            _axis(row, "hard_axis_abc"),
            micro[i],
            fixed(row["anisotropy_J_per_m3"], density_digits),
        ]
        for i, row in enumerate(rows)
    ]
    return table(columns, cells, width=width, keys=2)


def _axis(row: Mapping[str, Any], key: str) -> str:
    """An axis has no head unless a field picks one: its largest component is shown positive."""
    components = row[key]
    if components is None:
        return direction(None)
    if row["applied_ueV_per_ion"] == 0.0 and max(components, key=abs) < 0:
        components = [-x for x in components]
    return direction(components)


def _turn_remarks(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    lines = []
    meaning = {"plane normal": "; its axes are normals of the plane of the moments", "none": "; it has no axis"}
    for row in rows:
        if row["axis_meaning"] in meaning:
            axis, angle = axis_and_angle(row["rotation"])
            turned = f"turned by {angle:.2f} degrees about {direction(axis)} (Cartesian)"
            lines.append(f"{row['ordering']}: {turned}{meaning[row['axis_meaning']]}{_within_plane(row)}")
        lines += [f"{row['ordering']}: {note}" for note in row["orientation_notes"]]
    return lines


def _within_plane(row: Mapping[str, Any]) -> str:
    easy, hard = row["easy_axis_cart"], row["hard_axis_cart"]
    if easy is None or hard is None or abs(float(np.dot(easy, hard))) < 1 - 1e-6:
        return ""
    return "; easy and hard orientation differ by a turn within that plane"


def axis_and_angle(rotation: Sequence[Sequence[float]]) -> tuple[list[float], float]:
    """Return the axis (unit vector, Cartesian) and the angle (degrees, 0 to 180) of a rotation matrix."""
    matrix = np.asarray(rotation, dtype=float)
    turn = np.array([matrix[2, 1] - matrix[1, 2], matrix[0, 2] - matrix[2, 0], matrix[1, 0] - matrix[0, 1]])
    # Sine and cosine together keep small angles and those near 180 degrees exact.
    angle = float(np.degrees(np.arctan2(np.linalg.norm(turn), np.trace(matrix) - 1)))
    # The axis is the eigenvector of eigenvalue 1; the antisymmetric part says which way round.
    values, vectors = np.linalg.eig(matrix)
    axis = np.real(vectors[:, int(np.argmin(np.abs(values - 1)))])
    axis = -axis if turn @ axis < 0 else axis
    return (axis / np.linalg.norm(axis)).tolist(), angle


def _fields(rows: Sequence[Mapping[str, Any]], width: int | None) -> str:
    columns = [
        Column("rank"),
        Column("ordering", words=True),
        Column("probe", words=True),
        Column("|B|", "T"),
        Column("frequency", "MHz"),
        Column("points"),
    ]
    points = [point for row in rows for several in row["fields"].values() for point in several]
    error = max((point["error_bound_T"] for point in points), default=0.0)
    per_tesla = [p["frequency_MHz"] / p["field_size_T"] for p in points if p["field_size_T"] > 0]
    digits = decimals_for([point["field_size_T"] for point in points], error=error)
    listed = [
        [
            (name, *level)
            for name, several in row["fields"].items()
            for level in field_levels(several, zero_T=0.5 * 10.0**-digits)
        ]
        for row in rows
    ]
    frequencies = [level[2] for levels in listed for level in levels]
    frequency_digits = decimals_for(frequencies, error=error * max(per_tesla, default=0.0))
    cells = []
    for row, levels in zip(rows, listed, strict=True):
        for i, (name, size, frequency, count) in enumerate(levels):
            repeated = i > 0 and levels[i - 1][0] == name
            lead = [str(row["rank"]), row["ordering"]] if i == 0 else ["", ""]
            shown = [fixed(size, digits), fixed(frequency, frequency_digits), str(count)]
            cells.append([*lead, "" if repeated else name, *shown])
    return table(columns, cells, width=width, keys=2)
