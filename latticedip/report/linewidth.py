"""Static linewidths on screen: widths of every probe, then what each isotope adds."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from latticedip.report.points import Rows, kind_name, kinds
from latticedip.report.tables import (
    Column,
    bullets,
    decimals_for,
    direction,
    fixed,
    heading,
    pairs,
    short,
    table,
)

#: T² in mT².
MT2_PER_T2 = 1e6
#: Isotopes that add less than this part of a second moment are named together.
SMALL_SHARE = 1e-4


def linewidth_text(document: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return the widths of every probe as tables."""
    along = document["direction"]
    strong = "powder average" if along is None else f"along {direction(along['abc'])} (along a b c)"
    if along is not None and direction(along["abc"]) != direction(along["cartesian"]):
        strong += f", {direction(along['cartesian'])} Cartesian"
    parts = [heading(document["title"]), "", pairs([("strong field", strong)], width=width), ""]
    parts += [
        _widths(document["rows"], width),
        "",
        "What each isotope adds",
        "",
        _contributions(document["rows"], width),
    ]
    return "\n".join([*parts, "", bullets([*document["conventions"], *document["notes"]], width=width)])


def _sized(value: float | None) -> str:
    """A quantity with five digits of its own: those of different probes differ by orders of magnitude."""
    return "" if value is None else fixed(value, decimals_for([value], significant=5))


def _widths(rows: Rows, width: int | None) -> str:
    groups = kinds(rows)
    muon = any(row["zero_field_width_per_us"] is not None for row in rows)
    columns = [
        Column("probe", words=True),
        Column("particle", words=True),
        Column("points"),
        Column("M2", "mT²"),
        Column("√M2", "mT"),
        Column("√M2", "kHz"),
        Column("sigma", "1/µs"),
    ]
    columns += [Column("Delta", "mT"), Column("Delta", "1/µs")] if muon else []
    keys = ["root_second_moment_mT", "root_second_moment_kHz", "transverse_width_per_us"]
    keys += ["zero_field_width_mT", "zero_field_width_per_us"] if muon else []
    cells = [
        [
            kind_name(group, rows),
            group[0]["particle"],
            str(len(group)),
            _sized(MT2_PER_T2 * group[0]["second_moment_T2"]),
            *(_sized(group[0][key]) for key in keys),
        ]
        for group in groups
    ]
    return table(columns, cells, width=width, keys=1)


def _contributions(rows: Rows, width: int | None) -> str:
    columns = [
        Column("probe", words=True),
        Column("isotope", words=True),
        Column("spins", words=True),
        Column("atoms\nper cell"),
        Column("M2", "mT²"),
        Column("share", "%"),
    ]
    cells = []
    for group in kinds(rows):
        digits = decimals_for([MT2_PER_T2 * group[0]["second_moment_T2"]], significant=5)
        parts = sorted(group[0]["contributions"], key=lambda part: -part["second_moment_T2"])
        large = [part for part in parts if part["share"] >= SMALL_SHARE]
        small = [part for part in parts if part["share"] < SMALL_SHARE]
        lines = [
            [
                part["isotope"],
                "like" if part["like"] else "unlike",
                short(part["atoms_per_cell"], 4),
                fixed(MT2_PER_T2 * part["second_moment_T2"], digits),
                fixed(100 * part["share"], 2),
            ]
            for part in large
        ]
        if small:
            rest = sum(part["second_moment_T2"] for part in small)
            share = sum(part["share"] for part in small)
            names = ", ".join(part["isotope"] for part in small)
            lines.append([names, "", "", fixed(MT2_PER_T2 * rest, digits), fixed(100 * share, 2)])
        if not parts:
            lines.append(["no nuclei with a moment", "", "", "", ""])
        cells += [[kind_name(group, rows) if i == 0 else "", *line] for i, line in enumerate(lines)]
    return table(columns, cells, width=width, keys=1)
