"""Spectra on screen: the lines and bands of every probe, then the polarization at a few moments."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from latticedip.report.field import k_text, ordering_lines
from latticedip.report.tables import Column, bullets, caption, decimals_for, fixed, heading, pairs, short, table, vector

#: Moments in time shown on screen; the document and the CSV file hold all.
TIMES_SHOWN = 21
#: Lines and bands shown for one probe.
MOST_ROWS = 40


def spectrum_text(document: Mapping[str, Any], *, signals: bool = True, width: int | None = None) -> str:
    """Return the spectra of every ordering as tables; signals: P(t), too, where the document holds it."""
    options = document["inputs"]["options"]
    lead = [("specimen", document["specimen"])]
    if any(document["applied_T"]):
        size = float(np.linalg.norm(document["applied_T"]))
        words = f"{vector(document['applied_T'])} T, Cartesian" if document["specimen"] == "crystal" else f"{size:g} T"
        lead.append(("applied field", words))
    lead.append(("counted", "all positions equivalent to a probe, in every cell"))
    if options["domains"] == "average":
        lead.append(("domains", "averaged, equally large"))
    if options["width_T"]:
        lead.append(("smeared by", f"a Gaussian of standard deviation {options['width_T']:g} T (not in this table)"))
    parts = [heading(document["title"]), "", pairs(lead, width=width)]
    for entry in document["orderings"]:
        parts += [
            "",
            "",
            heading(entry["ordering"]),
            pairs([*ordering_lines(entry), ("boundary", entry["boundary"]), *_cells(entry)], width=width),
            "",
            _levels(entry, width),
        ]
        if options["domains"] == "list":
            parts += ["", _domains(entry, width)]
        if signals and options["time_us"] is not None:
            parts += ["", _signals(document, entry, width)]
        if entry["notes"]:
            parts += ["", bullets(entry["notes"], width=width)]
    return "\n".join(parts)


def spectrum_name(found: Mapping[str, Any]) -> str:
    """The probe of a spectrum, with its domain where domains are listed."""
    domain = found["domain"]
    return str(found["probe"]) + ("" if domain is None else f", domain {domain['number']}")


def field_words(document: Mapping[str, Any]) -> str:
    """How the polarization of a powder lies to the applied field; nothing where none is applied."""
    if not any(document["applied_T"]):
        return ""
    angle = document["inputs"]["options"]["angle_deg"]
    return f", at {angle:g}° to the applied field" if angle else ", along the applied field"


def _cells(entry: Mapping[str, Any]) -> list[tuple[str, str]]:
    words = list(dict.fromkeys(found["cells"] for found in entry["spectra"]))
    lines = [("field", "; ".join(words))]
    counts = {found["domains"] for found in entry["spectra"]}
    if counts != {1}:
        lines.append(("domains", f"{max(counts)}, averaged"))
    return lines


def _levels(entry: Mapping[str, Any], width: int | None) -> str:
    """One row per line and band: |B| and frequency, from and to, and the share of all probes that feel it."""
    bounds = [value for found in entry["spectra"] for row in _rows(found) for value in row[0]]
    error = max(found["error_bound_T"] for found in entry["spectra"])
    digits = decimals_for(bounds, error=error)
    bands = any(found["bands"] for found in entry["spectra"])
    upper = [Column("to", "T")] if bands else []
    columns = [Column("probe", words=True), Column("equivalent\npositions"), Column("|B|", "T"), *upper]
    columns += [Column("frequency", "MHz"), *([Column("to", "MHz")] if bands else []), Column("share", "%")]
    cells = []
    for found in entry["spectra"]:
        factor = found["MHz_per_T"]
        frequency_digits = decimals_for([b * factor for b in bounds], error=error * factor)
        name, count = spectrum_name(found), str(found["equivalent_positions"])
        rows = _rows(found)
        for (low, high), share in rows[:MOST_ROWS]:
            line = [name, count, fixed(low, digits)]
            line += [fixed(high, digits) if high > low else ""] if bands else []
            line += [fixed(low * factor, frequency_digits)]
            line += [fixed(high * factor, frequency_digits) if high > low else ""] if bands else []
            cells.append([*line, fixed(100 * share, 2)])
            name = count = ""
        if len(rows) > MOST_ROWS:
            cells.append([f"and {len(rows) - MOST_ROWS} more", *([""] * (len(columns) - 1))])
    return table(columns, cells, width=width, keys=1)


def _rows(found: Mapping[str, Any]) -> list[tuple[tuple[float, float], float]]:
    """(lowest and highest |B|, share) of every line and band, by size; bands with the same edges are one."""
    rows = [((line["field_T"], line["field_T"]), line["share"]) for line in found["lines"]]
    bands: dict[tuple[float, float], float] = {}
    for band in found["bands"]:
        ends = (band["edges_T"][0], band["edges_T"][-1])
        scale = 1e-6 * found["rms_T"]
        same = next((e for e in bands if abs(e[0] - ends[0]) <= scale and abs(e[1] - ends[1]) <= scale), ends)
        bands[same] = bands.get(same, 0.0) + band["share"]
    return sorted([*rows, *bands.items()])


def _domains(entry: Mapping[str, Any], width: int | None) -> str:
    listed = {found["domain"]["number"]: found["domain"] for found in entry["spectra"]}
    columns = [
        Column("domain"),
        Column("kind", words=True),
        Column("k", words=True),
        Column("operation", "in the cell of [crystal]", words=True),
    ]
    rows = [[str(n), d["kind"], k_text(d["k"]), d["operation"]] for n, d in sorted(listed.items())]
    return table(columns, rows, width=width, keys=1)


def _signals(document: Mapping[str, Any], entry: Mapping[str, Any], width: int | None) -> str:
    """P(t) of every probe at evenly spaced moments."""
    options = document["inputs"]["options"]
    time = entry["spectra"][0]["polarization"]["time_us"]
    shown = np.unique(np.round(np.linspace(0, len(time) - 1, min(TIMES_SHOWN, len(time)))).astype(int))
    columns = [Column("time", "µs"), *(Column(spectrum_name(found)) for found in entry["spectra"])]
    digits = decimals_for([time[-1]], significant=4)
    rows = [
        [fixed(time[i], digits), *(fixed(found["polarization"]["polarization"][i], 4) for found in entry["spectra"])]
        for i in shown
    ]
    title = f"Polarization in a powder{field_words(document)}"
    if document["specimen"] == "crystal":
        seen = options["detector"] or options["initial"]
        title = f"Polarization along {seen} of a spin that starts along {options['initial']}"
    # A mixture has no width of its own in P(t): it is the mean of signals, each with the width at its position.
    used = {found["nuclear_width_per_us"] for found in entry["spectra"] if "weights" not in found}
    widths = list(dict.fromkeys(short(value, 4) for value in sorted(used - {0.0})))
    if widths:
        listed = " and ".join([", ".join(widths[:-1]), widths[-1]] if len(widths) > 1 else widths)
        title += f", nuclear moments with a width of {listed} 1/µs"
    return f"{caption(title)}\n\n" + table(columns, rows, width=width, keys=1)
