"""Energies as curves: modes along the band path, and orderings against the direction of their moments."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.errors import InputError
from latticedip.report.plots.style import (
    INK,
    PALE,
    ROW_IN,
    SMALL_PT,
    TITLE_LETTERS,
    WIDTH_IN,
    check_count,
    check_plot,
    flat_stays_flat,
    in_lines,
    plain,
    save,
    set_title,
    signed,
)

if TYPE_CHECKING:
    from matplotlib.figure import Figure


def draw_modes(document: Mapping[str, Any], path: Path) -> None:
    """Draw the energies of all dipolar modes of a document along the band path, the bound as a dashed line.

    Every segment is drawn on its own: where one ends in k → 0 and the next begins, the energies jump.

    Raises InputError as `check_plot`, and for a document without a path; FileError where the file cannot be written.
    """
    check_plot(path)
    save(lambda: modes_figure(document), path)


def modes_figure(document: Mapping[str, Any]) -> Figure:
    """The picture of `draw_modes`; raises InputError for a document without a path."""
    found = document["bands"]
    if found is None:
        raise InputError("there is no band path to draw modes along.")
    from matplotlib.figure import Figure

    distance, energies = np.array(found["distance_per_A"]), np.array(found["energies_ueV_per_ion"])
    segment = np.array(found["segment"])
    figure = Figure(figsize=(WIDTH_IN, 2 * ROW_IN), layout="constrained")
    set_title(figure, document["title"])
    panel = figure.subplots()
    for number in np.unique(segment):
        on = segment == number
        panel.plot(distance[on], energies[on], color=INK, linewidth=0.9)
    bound = document["lowest"]["energy_ueV_per_ion"]
    panel.axhline(bound, color=INK, linestyle=(0, (5, 3)), linewidth=0.9)
    panel.annotate(
        f"lowest mode {signed(bound, '.5g')} µeV", (distance[-1], bound), xytext=(-3, -3),
        textcoords="offset points", fontsize=SMALL_PT, ha="right", va="top",
    )  # fmt: skip
    for tick in found["ticks"]:
        panel.axvline(tick["distance_per_A"], color=PALE, linewidth=0.6, zorder=0)
    panel.set_xticks([tick["distance_per_A"] for tick in found["ticks"]])
    panel.set_xticklabels([_point_name(tick["name"]) for tick in found["ticks"]])
    panel.set_xlim(distance[0], distance[-1])
    span = float(energies.max()) - min(bound, float(energies.min())) or 1.0
    panel.set_ylim(min(bound, float(energies.min())) - 0.1 * span, float(energies.max()) + 0.05 * span)
    panel.set_ylabel("energy (µeV per ion)")
    panel.set_xlabel("propagation vector")
    return figure


def _point_name(name: str) -> str:
    """A special point as it is printed, Γ for G."""
    return plain("|".join("Γ" if part == "G" else part for part in name.split("|")))


def draw_directions(document: Mapping[str, Any], path: Path) -> None:
    """Draw the energies of a document against direction, one row of panels for each ordering, one for each circle.

    Raises InputError as `check_plot`, and for more than 12 orderings in one picture; FileError where the file cannot be
    written.
    """
    check_plot(path)
    save(lambda: directions_figure(document), path)


def directions_figure(document: Mapping[str, Any]) -> Figure:
    """The picture of `draw_directions`; raises InputError for more than 12 orderings."""
    entries = document["orderings"]
    check_count(len(entries), "orderings", "Name some with --ordering.")
    from matplotlib.figure import Figure

    figure = Figure(figsize=(WIDTH_IN, ROW_IN * len(entries) + 0.5), layout="constrained")
    set_title(figure, document["title"])
    panels = figure.subplots(len(entries), 3, squeeze=False, sharey="row")
    for entry, row in zip(entries, panels, strict=True):
        circles = list(dict.fromkeys((point["from"], point["towards"]) for point in entry["rows"]))
        for panel, circle in zip(row, circles, strict=True):
            points = [point for point in entry["rows"] if (point["from"], point["towards"]) == circle]
            angle = [point["angle_deg"] for point in points]
            panel.plot(angle, [point["energy_ueV_per_ion"] for point in points], "o-", color=INK, markersize=2.5)
            panel.set_xlim(0, angle[-1])
            panel.set_xticks(np.arange(0, angle[-1] + 1, 45 if angle[-1] <= 180 else 90))
            panel.set_xlabel(f"{circle[0]} to {circle[1]} (degrees)")
        row[0].set_ylabel("energy (µeV per ion)")
        row[0].set_title(in_lines(entry["ordering"], TITLE_LETTERS), loc="left")
        flat_stays_flat(row[0], [point["energy_ueV_per_ion"] for point in entry["rows"]])
    return figure
