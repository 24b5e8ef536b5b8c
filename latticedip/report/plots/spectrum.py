"""Spectra of |B| and frequency, beside them the polarization with time."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.report.field import k_text
from latticedip.report.plots.style import (
    FAINT,
    HEAD_IN,
    INK,
    PALE,
    ROW_IN,
    SMALL_PT,
    WIDTH_IN,
    above_axis,
    check_count,
    check_plot,
    plain,
    save,
)
from latticedip.report.spectrum import spectrum_name

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: Lines that get their field written beside them.
MOST_LABELLED = 8


def draw_spectrum(document: Mapping[str, Any], path: Path) -> None:
    """Draw the spectra of a document, one row of panels for each, beside them P(t) where there is one.

    Lines are stems as high as their share, bands the density of the histogram.

    Raises InputError as `check_plot`, and for more than 12 spectra in one picture; FileError where the file cannot be
    written.
    """
    check_plot(path)
    save(lambda: spectrum_figure(document), path)


def spectrum_figure(document: Mapping[str, Any]) -> Figure:
    """The picture of `draw_spectrum`; raises InputError for more than 12 spectra."""
    rows = [(entry, found) for entry in document["orderings"] for found in entry["spectra"]]
    check_count(len(rows), "spectra", "Name an ordering or a probe.")
    from matplotlib.figure import Figure

    timed = document["inputs"]["options"]["time_us"] is not None
    figure = Figure(figsize=(WIDTH_IN, ROW_IN * len(rows) + HEAD_IN), layout="constrained")
    figure.suptitle(plain(document["title"]))
    panels = figure.subplots(len(rows), 2 if timed else 1, squeeze=False)
    for (entry, found), row in zip(rows, panels, strict=True):
        _spectrum_panel(row[0], entry, found)
        if timed:
            _time_panel(row[1], found, document)
    return figure


def _spectrum_panel(panel: Axes, entry: Mapping[str, Any], found: Mapping[str, Any]) -> None:
    bins = found["histogram"]
    limits, density = np.array(bins["field_limits_T"]), np.array(bins["density_per_T"])
    smeared = found["width_T"] or found["nuclear_width_T"]
    lines = [] if smeared else found["lines"]
    wave = f", k = {k_text(entry['k'])}" if any(x for k in entry["k"] for x in k) else ""
    panel.set_title(plain(f"{spectrum_name(found)}: {entry['ordering']}{wave}"), loc="left")
    if smeared or found["bands"]:
        shown = density if smeared else _without_lines(limits, density, lines)
        panel.stairs(shown, limits, color=INK, fill=False)
        panel.stairs(shown, limits, color=FAINT, fill=True)
        panel.set_ylabel("density (1/T)")
        panel.set_ylim(0, 1.08 * float(shown.max()))
        if lines:
            shares = panel.twinx()
            _stems(shares, lines)
        panel.set_xlim(limits[0], limits[-1])
    else:
        _stems(panel, lines)
        panel.set_xlim(0.0, max(1.08 * lines[-1]["field_T"], 1e-6))
    panel.set_xlabel("|B| (T)")
    above_axis(panel, found["MHz_per_T"], "frequency (MHz)")


def _without_lines(limits: np.ndarray, density: np.ndarray, lines: list[dict[str, float]]) -> np.ndarray:
    """A histogram of the bands alone."""
    rest = density.copy()
    for line in lines:
        place = int(np.clip(np.searchsorted(limits, line["field_T"], side="left") - 1, 0, len(rest) - 1))
        rest[place] = max(0.0, rest[place] - line["share"] / (limits[place + 1] - limits[place]))
    return rest


def _stems(panel: Axes, lines: list[dict[str, float]]) -> None:
    at, share = np.array([line["field_T"] for line in lines]), np.array([line["share"] for line in lines])
    panel.vlines(at, 0, share, color=INK, linewidth=1.6)
    panel.plot(at, share, "o", color=INK, markersize=3.5)
    if len(lines) <= MOST_LABELLED:
        for x, y in zip(at, share, strict=True):
            right = x > 0.5 * at[-1]
            panel.annotate(
                f"{x:.5g} T", (x, y), xytext=(-4 if right else 4, 4), textcoords="offset points", fontsize=SMALL_PT,
                ha="right" if right else "left",
            )  # fmt: skip
    panel.set_ylim(0, 1.25 * float(share.max()))
    panel.set_ylabel("share")


def _time_panel(panel: Axes, found: Mapping[str, Any], document: Mapping[str, Any]) -> None:
    options = document["inputs"]["options"]
    signal = found["polarization"]
    title = "powder"
    if document["specimen"] == "crystal":
        title = f"starts along {options['initial']}, seen along {options['detector'] or options['initial']}"
    panel.set_title(plain(title), loc="left")
    panel.plot(signal["time_us"], signal["polarization"], color=INK)
    panel.axhline(0.0, color=PALE, linewidth=0.6)
    panel.set_xlim(0, signal["time_us"][-1])
    panel.set_ylim(min(-0.45, min(signal["polarization"]) - 0.05), 1.05)
    panel.set_xlabel("time (µs)")
    panel.set_ylabel("polarization")
