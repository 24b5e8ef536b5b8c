"""Spectra of |B| and frequency, beside them the polarization with time."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.report.field import k_text
from latticedip.report.plots.style import (
    FAINT,
    HALF_LETTERS,
    HEAD_IN,
    INK,
    MOST_PANELS,
    PALE,
    ROW_IN,
    SMALL_PT,
    TITLE_LETTERS,
    WIDTH_IN,
    above_axis,
    check_count,
    check_plot,
    few_ticks,
    in_lines,
    save,
    set_title,
)
from latticedip.report.spectrum import field_words, spectrum_name

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: Spectra in one picture without P(t), and how many of them stand below each other in one column.
MOST_ALONE, ONE_COLUMN = 24, 6
#: Height of a line of a title of a panel, in inches.
LINE_IN = 0.15
#: Two lines this close (part of the axis) get their labels above each other; a field below the second part of the
#: largest one, or below its error bound, is drawn as none.
CLOSE, NO_FIELD = 0.2, 1e-12
#: Lines that get their field written beside them.
MOST_LABELLED = 8


def draw_spectrum(document: Mapping[str, Any], path: Path) -> None:
    """Draw the spectra of a document, one panel for each, beside it P(t) where there is one.

    Lines are stems as high as their share, bands the density of the histogram.

    Raises InputError as `check_plot`, and for more spectra than one picture holds (24, or 12 with P(t)); FileError
    where the file cannot be written.
    """
    check_plot(path)
    save(lambda: spectrum_figure(document), path)


def spectrum_figure(document: Mapping[str, Any]) -> Figure:
    """The picture of `draw_spectrum`; raises InputError for more than 24 spectra, or 12 with P(t)."""
    rows = [(entry, found) for entry in document["orderings"] for found in entry["spectra"]]
    timed = document["inputs"]["options"]["time_us"] is not None
    check_count(len(rows), "spectra", "Name an ordering or a probe.", MOST_PANELS if timed else MOST_ALONE)
    from matplotlib.figure import Figure

    columns = 2 if not timed and len(rows) > ONE_COLUMN else 1
    letters = HALF_LETTERS if timed or columns > 1 else TITLE_LETTERS
    titles = [in_lines(_title(entry, found), letters) for entry, found in rows]
    extra = LINE_IN * max(title.count("\n") for title in titles)
    largest = max(line["field_T"] for _, found in rows for line in (*found["lines"], {"field_T": 0.0}))
    deep = -(-len(rows) // columns)
    figure = Figure(figsize=(WIDTH_IN, (ROW_IN + extra) * deep + HEAD_IN), layout="constrained")
    set_title(figure, document["title"])
    panels = figure.subplots(deep, 2 if timed else columns, squeeze=False)
    shown = panels[:, 0] if timed else panels.ravel()
    for panel, (_, found), title in zip(shown, rows, titles, strict=False):
        panel.set_title(title, loc="left")
        _spectrum_panel(panel, found, largest)
    for panel in shown[len(rows) :]:
        panel.set_axis_off()
    for panel, (_, found) in zip(panels[:, 1] if timed else (), rows, strict=False):
        _time_panel(panel, found, document)
    return figure


def _title(entry: Mapping[str, Any], found: Mapping[str, Any]) -> str:
    # A k is not broken over two lines.
    wave = (
        ", " + f"k = {k_text(entry['k'])}".replace(" ", "\N{NO-BREAK SPACE}")
        if any(x for k in entry["k"] for x in k)
        else ""
    )
    return f"{spectrum_name(found)}: {entry['ordering']}{wave}"


def _spectrum_panel(panel: Axes, found: Mapping[str, Any], largest: float) -> None:
    """largest: field (T) of the scale where there is none at this probe."""
    bins = found["histogram"]
    limits, density = np.array(bins["field_limits_T"]), np.array(bins["density_per_T"])
    smeared = found["width_T"] or found["nuclear_width_T"]
    lines = [] if smeared else found["lines"]
    if smeared or found["bands"]:
        shown = density if smeared else _without_lines(limits, density, lines)
        panel.stairs(shown, limits, color=INK, fill=False)
        panel.stairs(shown, limits, color=FAINT, fill=True)
        panel.set_ylabel("density (1/T)")
        panel.set_ylim(0, 1.08 * float(shown.max()))
        if lines:
            shares = panel.twinx()
            panel.set_xlim(limits[0], limits[-1])
            _stems(shares, lines)
        panel.set_xlim(limits[0], limits[-1])
    else:
        none = lines[-1]["field_T"] <= max(2 * found["error_bound_T"], NO_FIELD * largest)
        if none:
            lines = [{**line, "field_T": 0.0} for line in lines]
        reach = 1.08 * (largest if none else lines[-1]["field_T"]) or 1.0
        panel.set_xlim(-0.02 * reach if none else 0.0, reach)
        _stems(panel, lines)
    panel.set_xlabel("|B| (T)")
    few_ticks(panel)
    above_axis(panel, found["MHz_per_T"], "frequency (MHz)")


def _without_lines(limits: np.ndarray, density: np.ndarray, lines: list[dict[str, float]]) -> np.ndarray:
    """A histogram of the bands alone."""
    rest = density.copy()
    for line in lines:
        place = int(np.clip(np.searchsorted(limits, line["field_T"], side="left") - 1, 0, len(rest) - 1))
        rest[place] = max(0.0, rest[place] - line["share"] / (limits[place + 1] - limits[place]))
    return rest


def _stems(panel: Axes, lines: list[dict[str, float]]) -> None:
    from matplotlib.ticker import MaxNLocator

    at, share = np.array([line["field_T"] for line in lines]), np.array([line["share"] for line in lines])
    panel.vlines(at, 0, share, color=INK, linewidth=1.6)
    panel.plot(at, share, "o", color=INK, markersize=3.5)
    low, high = panel.get_xlim()
    step, tallest, before = 0, 0, -np.inf
    if len(lines) <= MOST_LABELLED:
        for x, y in zip(at, share, strict=True):
            right = x - low > 0.5 * (high - low)
            # A label that would run into the one before it stands above that.
            step = step + 1 if x - before < CLOSE * (high - low) else 0
            tallest, before = max(tallest, step), x
            panel.annotate(
                f"{x:.5g} T", (x, y), xytext=(-4 if right else 4, 4 + step * (SMALL_PT + 1)),
                textcoords="offset points", fontsize=SMALL_PT, ha="right" if right else "left",
            )  # fmt: skip
    top = float(share.max())
    panel.set_ylim(0, (1.25 + 0.13 * tallest) * top)
    panel.set_yticks([tick for tick in MaxNLocator(5).tick_values(0, top) if tick <= min(1.0, 1.2 * top)])
    panel.set_ylabel("share")


def _time_panel(panel: Axes, found: Mapping[str, Any], document: Mapping[str, Any]) -> None:
    options = document["inputs"]["options"]
    signal = found["polarization"]
    title = f"powder{field_words(document)}"
    if document["specimen"] == "crystal":
        title = f"starts along {options['initial']}, seen along {options['detector'] or options['initial']}"
    panel.set_title(in_lines(title, HALF_LETTERS), loc="left")
    panel.plot(signal["time_us"], signal["polarization"], color=INK)
    panel.axhline(0.0, color=PALE, linewidth=0.6)
    panel.set_xlim(0, signal["time_us"][-1])
    panel.set_ylim(min(-0.45, min(signal["polarization"]) - 0.05), 1.05)
    panel.set_xlabel("time (µs)")
    few_ticks(panel, 5)
    panel.set_ylabel("polarization")
