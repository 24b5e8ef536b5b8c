"""Pictures of results as PNG, SVG or PDF, by the suffix of the file; drawn with matplotlib, an optional library.

One set of fonts, sizes and line styles for all of them. Nothing is told by colour alone: curves differ in their dashes
or stand in panels of their own, so that a print in grey says the same.
"""

from __future__ import annotations

import io
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.encode import write_bytes_atomically
from latticedip.errors import InputError
from latticedip.report.field import k_text
from latticedip.report.spectrum import spectrum_name
from latticedip.report.tables import clean

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

SUFFIXES = (".png", ".svg", ".pdf")
#: Style of all pictures; sizes are points in print.
STYLE: Any = {
    "font.size": 9,
    "axes.titlesize": 9,
    "axes.labelsize": 9,
    "xtick.labelsize": 8,
    "ytick.labelsize": 8,
    "legend.fontsize": 8,
    "axes.linewidth": 0.8,
    "lines.linewidth": 1.1,
    "figure.dpi": 100,
    "savefig.dpi": 200,
    "svg.hashsalt": "latticedip",
    "pdf.fonttype": 42,
}
#: Width of a picture and height of one row of panels, in inches.
WIDTH_IN, ROW_IN, HEAD_IN = 6.8, 2.1, 0.9
#: Rows of panels in one picture.
MOST_PANELS = 12
#: Lines that get their share written beside them.
MOST_LABELLED = 8


def check_plot(path: Path) -> None:
    """Raise InputError where a picture of that name cannot be drawn: another suffix, or matplotlib is missing."""
    if path.suffix.lower() not in SUFFIXES:
        raise InputError(f"a picture ends in {', '.join(SUFFIXES)}, got {str(path)!r}.")
    try:
        import matplotlib  # noqa: F401
    except ImportError:
        raise InputError("pictures need matplotlib. Install it with: pip install 'latticedip[plot]'") from None


def draw_spectrum(document: Mapping[str, Any], path: Path) -> None:
    """Draw the spectra of a document, one row of panels for each, beside them P(t) where there is one.

    Lines are stems as high as their share, bands the density of the histogram.

    Raises InputError as `check_plot`, and for more than 12 spectra in one picture; FileError where the file cannot be
    written.
    """
    check_plot(path)
    rows = [(entry, found) for entry in document["orderings"] for found in entry["spectra"]]
    if len(rows) > MOST_PANELS:
        raise InputError(
            f"{len(rows)} spectra do not fit into one picture of at most {MOST_PANELS}. Name an ordering or a probe."
        )
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    timed = document["inputs"]["options"]["time_us"] is not None
    with rc_context(STYLE):
        figure = Figure(figsize=(WIDTH_IN, ROW_IN * len(rows) + HEAD_IN), layout="constrained")
        figure.suptitle(_plain(document["title"]), fontsize=10)
        panels = figure.subplots(len(rows), 2 if timed else 1, squeeze=False)
        for (entry, found), row in zip(rows, panels, strict=True):
            _spectrum_panel(row[0], entry, found, document)
            if timed:
                _time_panel(row[1], found, document)
        _save(figure, path)


def _spectrum_panel(
    panel: Axes, entry: Mapping[str, Any], found: Mapping[str, Any], document: Mapping[str, Any]
) -> None:
    bins, factor = found["histogram"], found["MHz_per_T"]
    limits, density = np.array(bins["field_limits_T"]), np.array(bins["density_per_T"])
    smeared = found["width_T"] or found["nuclear_width_T"]
    lines = [] if smeared else found["lines"]
    wave = f", k = {k_text(entry['k'])}" if any(x for k in entry["k"] for x in k) else ""
    panel.set_title(_plain(f"{spectrum_name(found)}: {entry['ordering']}{wave}"), loc="left")
    if smeared or found["bands"]:
        shown = density if smeared else _without_lines(limits, density, lines)
        panel.stairs(shown, limits, color="0.0", fill=False)
        panel.stairs(shown, limits, color="0.85", fill=True)
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
    above = panel.secondary_xaxis("top", functions=(lambda x: x * factor, lambda x: x / factor))
    above.set_xlabel("frequency (MHz)")


def _without_lines(limits: np.ndarray, density: np.ndarray, lines: list[dict[str, float]]) -> np.ndarray:
    """A histogram of the bands alone."""
    rest = density.copy()
    for line in lines:
        place = int(np.clip(np.searchsorted(limits, line["field_T"], side="left") - 1, 0, len(rest) - 1))
        rest[place] = max(0.0, rest[place] - line["share"] / (limits[place + 1] - limits[place]))
    return rest


def _stems(panel: Axes, lines: list[dict[str, float]]) -> None:
    at, share = np.array([line["field_T"] for line in lines]), np.array([line["share"] for line in lines])
    panel.vlines(at, 0, share, color="0.0", linewidth=1.6)
    panel.plot(at, share, "o", color="0.0", markersize=3.5)
    if len(lines) <= MOST_LABELLED:
        for x, y in zip(at, share, strict=True):
            right = x > 0.5 * at[-1]
            panel.annotate(
                f"{x:.5g} T", (x, y), xytext=(-4 if right else 4, 4), textcoords="offset points", fontsize=7,
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
    panel.set_title(_plain(title), loc="left")
    panel.plot(signal["time_us"], signal["polarization"], color="0.0")
    panel.axhline(0.0, color="0.6", linewidth=0.6)
    panel.set_xlim(0, signal["time_us"][-1])
    panel.set_ylim(min(-0.45, min(signal["polarization"]) - 0.05), 1.05)
    panel.set_xlabel("time (µs)")
    panel.set_ylabel("polarization")


def draw_modes(document: Mapping[str, Any], path: Path) -> None:
    """Draw the energies of all dipolar modes of a document along the band path, the bound as a dashed line.

    Every segment is drawn on its own: where one ends in k → 0 and the next begins, the energies jump.

    Raises InputError as `check_plot`, and for a document without a path; FileError where the file cannot be written.
    """
    check_plot(path)
    found = document["bands"]
    if found is None:
        raise InputError("there is no band path to draw modes along.")
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    distance, energies = np.array(found["distance_per_A"]), np.array(found["energies_ueV_per_ion"])
    segment = np.array(found["segment"])
    with rc_context(STYLE):
        figure = Figure(figsize=(WIDTH_IN, 2 * ROW_IN), layout="constrained")
        panel = figure.subplots()
        panel.set_title(_plain(document["title"]), loc="left")
        for number in np.unique(segment):
            on = segment == number
            panel.plot(distance[on], energies[on], color="0.0", linewidth=0.9)
        bound = document["lowest"]["energy_ueV_per_ion"]
        panel.axhline(bound, color="0.0", linestyle=(0, (5, 3)), linewidth=0.9)
        panel.annotate(
            f"lowest mode {bound:.5g} µeV".replace("-", "−"), (distance[-1], bound), xytext=(0, -3),
            textcoords="offset points", fontsize=7, ha="right", va="top",
        )  # fmt: skip
        for tick in found["ticks"]:
            panel.axvline(tick["distance_per_A"], color="0.7", linewidth=0.6, zorder=0)
        panel.set_xticks([tick["distance_per_A"] for tick in found["ticks"]])
        panel.set_xticklabels([_point_name(tick["name"]) for tick in found["ticks"]])
        panel.set_xlim(distance[0], distance[-1])
        span = float(energies.max()) - min(bound, float(energies.min())) or 1.0
        panel.set_ylim(min(bound, float(energies.min())) - 0.1 * span, float(energies.max()) + 0.05 * span)
        panel.set_ylabel("energy (µeV per ion)")
        panel.set_xlabel("propagation vector")
        _save(figure, path)


def _point_name(name: str) -> str:
    """A special point as it is printed, Γ for G."""
    return _plain("|".join("Γ" if part == "G" else part for part in name.split("|")))


def draw_directions(document: Mapping[str, Any], path: Path) -> None:
    """Draw the energies of a document against direction, one row of panels for each ordering, one for each circle.

    Raises InputError as `check_plot`, and for more than 12 orderings in one picture; FileError where the file cannot be
    written.
    """
    check_plot(path)
    entries = document["orderings"]
    if len(entries) > MOST_PANELS:
        raise InputError(
            f"{len(entries)} orderings do not fit into one picture of at most {MOST_PANELS}. Name some with --ordering."
        )
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    with rc_context(STYLE):
        figure = Figure(figsize=(WIDTH_IN, ROW_IN * len(entries) + 0.5), layout="constrained")
        figure.suptitle(_plain(document["title"]), fontsize=10)
        panels = figure.subplots(len(entries), 3, squeeze=False, sharey="row")
        for entry, row in zip(entries, panels, strict=True):
            circles = list(dict.fromkeys((point["from"], point["towards"]) for point in entry["rows"]))
            for panel, circle in zip(row, circles, strict=True):
                points = [point for point in entry["rows"] if (point["from"], point["towards"]) == circle]
                angle = [point["angle_deg"] for point in points]
                panel.plot(angle, [point["energy_ueV_per_ion"] for point in points], "o-", color="0.0", markersize=2.5)
                panel.set_xlim(0, angle[-1])
                panel.set_xticks(np.arange(0, angle[-1] + 1, 45 if angle[-1] <= 180 else 90))
                panel.set_xlabel(f"{circle[0]} to {circle[1]} (degrees)")
            row[0].set_ylabel("energy (µeV per ion)")
            row[0].set_title(_plain(entry["ordering"]), loc="left")
            values = [point["energy_ueV_per_ion"] for point in entry["rows"]]
            # What is flat but for rounding is drawn flat.
            span = max(max(values) - min(values), 1e-3 * max(abs(value) for value in values), 1e-9)
            row[0].set_ylim(min(values) - 0.08 * span, max(values) + 0.08 * span)
        _save(figure, path)


def _plain(text: str) -> str:
    """Text that no layout engine takes for a formula."""
    return clean(text).replace("$", r"\$")


def _save(figure: Figure, path: Path) -> None:
    kind = path.suffix.lower().removeprefix(".")
    buffer = io.BytesIO()
    # No date: the same document gives the same file.
    dates = {"svg": {"Date": None}, "pdf": {"CreationDate": None}}.get(kind)
    figure.savefig(buffer, format=kind, metadata=dates)
    write_bytes_atomically(path, buffer.getvalue())
