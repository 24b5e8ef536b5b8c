"""Local fields as dots: one panel for each probe, one line for each ordering."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from latticedip.errors import InputError
from latticedip.report.plots.style import (
    INK,
    MIDDLE,
    PALE,
    SMALL_PT,
    TITLE_LETTERS,
    WIDTH_IN,
    above_axis,
    check_count,
    check_plot,
    in_lines,
    line_height,
    save,
    set_title,
    title_height,
)
from latticedip.study.rankings import field_levels

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: Height of one ordering in a panel, of what is round the panel and of the title, in inches; lines left free at the
#: edges of the panel.
LINE_IN, AROUND_IN, HEAD_IN, EDGE = 0.3, 1.15, 0.4, 0.3
#: A picture holds at most this many lines, panels and levels of one line with their number of points beside them.
MOST_LINES, MOST_LABELLED = 150, 6


def draw_field(document: Mapping[str, Any], path: Path) -> None:
    """Draw the sizes of the local fields of a document, one panel for each probe, one line for each ordering.

    A dot is one size, beside it "× n" where n points of the probe have it; the bar is the standard uncertainty. The
    scale on top is the frequency, for probes with a particle.

    Raises InputError as `check_plot`, and for more than 12 probes or 150 lines in one picture; FileError where the file
    cannot be written.
    """
    check_plot(path)
    save(lambda: field_figure(document), path)


def field_figure(document: Mapping[str, Any]) -> Figure:
    """The picture of `draw_field`; raises InputError for more than 12 probes or 150 lines."""
    entries = document["orderings"]
    probes = list(dict.fromkeys(row["probe"] for entry in entries for row in entry["rows"]))
    check_count(len(probes), "probes", "Name some with --probe.")
    if len(probes) * len(entries) > MOST_LINES:
        raise InputError(
            f"{len(probes)} probes under {len(entries)} orderings do not fit into one picture of at most {MOST_LINES} "
            "lines. Name some with --probe or --ordering."
        )
    from matplotlib.figure import Figure

    unit = document["inputs"]["options"]["unit"]
    line = line_height((entry["ordering"] for entry in entries), LINE_IN)
    height = len(probes) * (line * (len(entries) + EDGE) + AROUND_IN) + HEAD_IN + title_height(document["title"])
    figure = Figure(figsize=(WIDTH_IN, height), layout="constrained")
    set_title(figure, document["title"])
    panels = figure.subplots(len(probes), 1, squeeze=False)[:, 0]
    waves = any(not float(x).is_integer() for entry in entries for k in entry["k"] for x in k)
    for probe, panel in zip(probes, panels, strict=True):
        _panel(panel, probe, entries, unit)
        panel.set_xlabel(f"|B| in the home cell ({unit})" if waves else f"|B| ({unit})")
    return figure


def _panel(panel: Axes, probe: str, entries: Sequence[Mapping[str, Any]], unit: str) -> None:
    largest, per_unit, particle = 0.0, 0.0, None
    for place, entry in enumerate(entries):
        rows = [row for row in entry["rows"] if row["probe"] == probe]
        sizes = [row[f"field_size_{unit}"] for row in rows]
        largest = max([largest, *sizes])
        for row in rows:
            particle = row["particle"] or particle
            size, frequency = row[f"field_size_{unit}"], row["frequency_MHz"]
            if size > 0 and frequency is not None and math.isfinite(frequency):
                per_unit = max(per_unit, frequency / size)
            if row.get(f"field_size_su_{unit}"):
                panel.errorbar(
                    size, place, xerr=row[f"field_size_su_{unit}"], color=MIDDLE, capsize=2.5, linewidth=1.0, zorder=2
                )
        _levels(panel, place, levels(rows, unit))
    title = probe + (f" ({particle})" if particle and particle != probe else "")
    panel.set_title(in_lines(title, TITLE_LETTERS - 18), loc="left", fontweight="bold")
    panel.hlines(range(len(entries)), 0, 1, transform=panel.get_yaxis_transform(), color=PALE, linewidth=0.5, zorder=0)
    panel.set_yticks(range(len(entries)), [in_lines(entry["ordering"]) for entry in entries])
    panel.set_ylim(len(entries) - 0.4, -0.7)
    panel.locator_params(axis="x", nbins=7)
    panel.set_xlim(-0.03 * largest or -0.03, 1.12 * largest or 1.0)
    if per_unit > 0:
        above_axis(panel, per_unit, "frequency (MHz)")


def levels(rows: Sequence[Mapping[str, Any]], unit: str) -> list[tuple[float, int]]:
    """The distinct sizes of the field (in ``unit``) at the points of one probe, and how many points have each."""
    points = [
        {
            "field_size_T": row[f"field_size_{unit}"],
            "frequency_MHz": row["frequency_MHz"],
            "error_bound_T": row[f"error_bound_{unit}"],
        }
        for row in rows
    ]
    return [(size, count) for size, _, count in field_levels(points)]


def _levels(panel: Axes, place: int, found: Sequence[tuple[float, int]]) -> None:
    panel.plot([size for size, _ in found], [place] * len(found), "o", color=INK, markersize=4.5, zorder=3)
    if len(found) <= MOST_LABELLED:
        for size, count in found:
            if count > 1:
                panel.annotate(
                    f"× {count}", (size, place), xytext=(0, 4), textcoords="offset points", fontsize=SMALL_PT,
                    ha="center", va="bottom",
                )  # fmt: skip
