"""Shifts as curves: against rotation, as the line of a powder, or against temperature and susceptibility."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.errors import InputError
from latticedip.report.plots.style import (
    DASHES,
    INK,
    ROW_IN,
    TITLE_LETTERS,
    WIDTH_IN,
    check_count,
    check_plot,
    flat_stays_flat,
    in_lines,
    plain,
    save,
    set_title,
)
from latticedip.report.points import kind_name, kinds
from latticedip.report.tables import direction

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure


def draw_shift(document: Mapping[str, Any], path: Path) -> None:
    """Draw the shifts of a document, one row of panels for each kind of point: against the angle of rotation, as the
    line of a powder, or against temperature and beside that against the susceptibility.

    Raises InputError as `check_plot`, for more than 12 kinds of points or 6 curves in one panel, and for a document
    that holds one shift alone; FileError where the file cannot be written.
    """
    check_plot(path)
    save(lambda: shift_figure(document), path)


def shift_has_curve(document: Mapping[str, Any]) -> bool:
    """Whether a document holds a curve of shifts to draw."""
    shifts = document["rows"][0]["shifts"] if document["rows"] else []
    return len(shifts) > 1 or any("rotation" in shift or "powder" in shift for shift in shifts)


def shift_figure(document: Mapping[str, Any]) -> Figure:
    """The picture of `draw_shift`; raises InputError as it does."""
    rows = document["rows"]
    groups = kinds(rows)
    if not shift_has_curve(document):
        raise InputError(
            "there is no curve of a shift to draw. Ask for --rotate-about or --powder, or state chi as a table of "
            "temperatures in [susceptibility]."
        )
    shifts = groups[0][0]["shifts"]
    turned, powder = any("rotation" in s for s in shifts), any("powder" in s for s in shifts)
    check_count(len(groups), "kinds of points", "Name some with --probe.")
    if (turned or powder) and len(shifts) > len(DASHES):
        raise InputError(
            f"{len(shifts)} curves do not fit into one panel of at most {len(DASHES)}. Name some with --temperature."
        )
    from matplotlib.figure import Figure

    figure = Figure(figsize=(WIDTH_IN, (ROW_IN + 0.3) * len(groups) + 0.5), layout="constrained")
    set_title(figure, document["title"])
    panels = figure.subplots(len(groups), 1 if turned or powder else 2, squeeze=False)
    for group, row in zip(groups, panels, strict=True):
        row[0].set_title(in_lines(kind_name(group, rows), TITLE_LETTERS), loc="left")
        found = group[0]["shifts"]
        if turned or powder:
            draw = _rotation_panel if turned else _powder_panel
            draw(row[0], found, document)
            continue
        _curve_panel(row[0], found, "temperature_K")
        _curve_panel(row[1], found, "chi_cm3_per_mol")
        row[0].set_xlabel("temperature (K)")
        row[1].set_xlabel("χ (cm³/mol of ions)")
        row[1].locator_params(axis="x", nbins=5)
        row[0].set_ylabel("shift (%)")
    handles, labels = panels[0, 0].get_legend_handles_labels()
    if len(handles) > 1:
        # The same curves in every panel; below them, no curve runs through their names.
        figure.legend(handles, labels, loc="outside lower center", ncols=4, frameon=False)
    return figure


def _named(shift: Mapping[str, Any]) -> str | None:
    return None if shift["temperature_K"] is None else f"{shift['temperature_K']:g} K"


def _rotation_panel(panel: Axes, shifts: list[dict[str, Any]], document: Mapping[str, Any]) -> None:
    for shift, dashes in zip(shifts, DASHES, strict=False):
        turn = shift["rotation"]
        panel.plot(turn["angles_deg"], 100 * np.array(turn["shift"]), color=INK, linestyle=dashes, label=_named(shift))
    about, start = (direction(x) for x in (document["rotate_about"]["abc"], shifts[0]["rotation"]["start_abc"]))
    panel.set_xlabel(plain(f"angle of the field (degrees) about {about}, from {start}"))
    panel.set_xlim(0, 360)
    panel.set_xticks(np.arange(0, 361, 45))
    panel.set_ylabel("shift (%)")
    flat_stays_flat(panel, [100 * x for shift in shifts for x in shift["rotation"]["shift"]])


def _powder_panel(panel: Axes, shifts: list[dict[str, Any]], document: Mapping[str, Any]) -> None:
    for shift, dashes in zip(shifts, DASHES, strict=False):
        line = shift["powder"]
        limits = 100 * np.array(line["shift_limits"])
        panel.stairs(np.array(line["density"]) / 100, limits, color=INK, linestyle=dashes, label=_named(shift))
    panel.set_ylim(bottom=0)
    panel.set_xlabel("shift (%)")
    panel.set_ylabel("density (1/%)")


def _curve_panel(panel: Axes, shifts: list[dict[str, Any]], key: str) -> None:
    x = np.array([shift[key] for shift in shifts])
    curves = {"isotropic": [shift["shift_isotropic"] for shift in shifts]}
    for i, name in enumerate(("xx", "yy", "zz")):
        curves[name] = [shift["shift_principal_values"][i] for shift in shifts]
    order = np.argsort(x)
    for (name, values), dashes, marker in zip(curves.items(), DASHES, "osv^", strict=False):
        shown = 100 * np.array(values)[order]
        panel.plot(x[order], shown, color=INK, linestyle=dashes, marker=marker, markersize=3, mfc="1.0", label=name)
    flat_stays_flat(panel, [100 * value for values in curves.values() for value in values])
