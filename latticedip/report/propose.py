"""Proposed orderings on screen: the table lowest first, and the moments of the lowest one."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from latticedip.report.field import k_text
from latticedip.report.rank import bound_words
from latticedip.report.show import moments_table
from latticedip.report.tables import (
    Column,
    bullets,
    decimals_for,
    direction,
    fixed,
    heading,
    pairs,
    paragraph,
    short,
    table,
    vector,
)


def propose_text(document: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return the candidates as a table, then the moments of the lowest one."""
    rows = document["rows"]
    sizes = ", ".join(f"{name} {short(size)}" for name, size in document["sizes_muB"].items())
    lead = [("moments", f"{sizes} µB"), ("boundary", document["boundary"]), ("searched", _searched(document))]
    if any(document["sample"]["applied_T"]):
        lead.append(("applied field", f"{vector(document['sample']['applied_T'])} T, Cartesian"))
    if document["bound"] is not None:
        lead.append(("bound", bound_words(document["bound"])))
    parts = [heading(document["title"]), "", pairs(lead, width=width), "", _candidates(document, width), ""]
    parts.append(
        paragraph(
            "copies: arrangements that are the same by symmetry, counted once here; BNS: number of the magnetic space "
            f"group.{_ties(document)}",
            width=width,
        )
    )
    first = rows[0]["moments"]
    lines = [("k", k_text(first["k"])), ("cells listed", first["cells_are"])]
    if first["direction_abc"] is not None:
        lines.insert(1, ("moments along", f"{direction(first['direction_abc'])} (components along a, b, c)"))
    parts += ["", f"Moments of {rows[0]['ordering']}", "", pairs(lines, width=width), ""]
    parts += [moments_table(first, width=width), "", bullets([*_row_notes(document), *document["notes"]], width=width)]
    return "\n".join(parts)


def _ties(document: Mapping[str, Any]) -> str:
    """Which candidates have one energy within the error bounds."""
    groups: list[list[str]] = []
    last = None
    for row in document["rows"]:
        bound = 2 * row["error_bound_ueV_per_ion"] + 1e-12 * abs(row["energy_ueV_per_ion"])
        if row["tie"] and last is not None and row["energy_ueV_per_ion"] - last <= bound:
            groups[-1].append(str(row["rank"]))
        elif row["tie"]:
            groups.append([str(row["rank"])])
        last = row["energy_ueV_per_ion"] if row["tie"] else None
    listed = "; ".join(" = ".join(group) for group in groups if len(group) > 1)
    return f" Equal in energy within the error bound: {listed}." if listed else ""


def _row_notes(document: Mapping[str, Any]) -> list[str]:
    """Notes of the candidates, each once with the numbers it belongs to."""
    found: dict[str, list[str]] = {}
    for row in document["rows"]:
        for note in row["notes"]:
            found.setdefault(note, []).append(str(row["rank"]))
    whole = len(document["rows"])
    return [note if len(numbers) == whole else f"{', '.join(numbers)}: {note}" for note, numbers in found.items()]


def _searched(document: Mapping[str, Any]) -> str:
    options = document["inputs"]["options"]
    counts = list(options["supercell"])
    where = "one cell" if counts == [1, 1, 1] else " × ".join(str(n) for n in counts) + " cells"
    if options["k"] is not None:
        where = f"k = {k_text(options['k'])}"
    words = {"ising": "± patterns", "planar": "moments free in a plane", "heisenberg": "free moments"}
    kind = words[options["moments"]]
    if options["along"] is not None:
        kind += f", {'normal' if options['moments'] == 'planar' else 'along'} {direction(options['along'])} (Cartesian)"
    elif options["axes"] is not None:
        kind += ", an axis of its own for each site"
    elif options["moments"] == "ising" and options["fixed"] is None:
        kind += " each on its own best axis, what symmetry allows, the lowest mode"
    extra = [", some signs fixed"] if options["fixed"] is not None else []
    extra += [", net moment zero"] if options["net_zero"] else []
    return f"{where}; {kind}{''.join(extra)}"


def _candidates(document: Mapping[str, Any], width: int | None) -> str:
    rows = document["rows"]
    error = max(row["error_bound_ueV_per_ion"] for row in rows)
    energies = [row["energy_ueV_per_ion"] for row in rows]
    digits = min(
        decimals_for(energies, significant=15, error=error), max(3, decimals_for(energies, significant=5, error=error))
    )
    bounded = document["bound"] is not None
    columns = [
        Column("candidate", words=True),
        Column("energy", "µeV/ion"),
        Column("above\nlowest", "µeV/ion"),
        *([Column("above\nbound", "µeV/ion")] if bounded else []),
        Column("net\nmoment", "µB/ion"),
        Column("copies"),
        Column("BNS"),
        Column("found by", words=True),
    ]
    cells = [
        [
            row["ordering"],
            fixed(row["energy_ueV_per_ion"], digits),
            fixed(row["above_lowest_ueV_per_ion"], digits),
            *([fixed(row["above_bound_ueV_per_ion"], digits)] if bounded else []),
            fixed(row["net_moment_muB_per_ion"], 4),
            str(row["multiplicity"]),
            row["bns_number"] or "-",
            ", ".join(row["found_by"]),
        ]
        for row in rows
    ]
    return table(columns, cells, width=width, keys=1)
