"""Orderings as they lie in the crystal: cell, atoms, moments as arrows, probes with their fields, seen from afar."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.report.field import k_text
from latticedip.report.plots.style import (
    INK,
    PALE,
    SMALL_PT,
    WIDTH_IN,
    check_count,
    check_plot,
    in_lines,
    plain,
    save,
)
from latticedip.report.tables import direction, short

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: Marks of elements with a moment (filled) and without (open), by their order in the structure.
MAGNETIC_MARKS, OTHER_MARKS = "osD^vp", "osD^vph<>8"
#: The longest moment is this part of the shortest distance between two of them, within these parts of the drawing.
OF_DISTANCE, LEAST, MOST = 0.8, 0.09, 0.2
#: The largest field, as a part of the drawing.
FIELD_LENGTH = 0.17
#: Arrows with less than this part of their length in the plane of the drawing are seen from their tip or tail; what is
#: shorter than the second part of the longest is not drawn.
END_ON, NOTHING = 0.12, 0.02
#: Tallest and flattest panel, as height over width.
TALLEST, FLATTEST = 1.5, 0.5
HEAD_IN, FOOT_IN = 0.5, 0.6


@dataclass(frozen=True, eq=False)
class View:
    """Projection along a direction. right, up, eye: Shape (3,) Cartesian unit vectors."""

    right: FloatArray
    up: FloatArray
    eye: FloatArray

    @classmethod
    def of(cls, view: Mapping[str, Any]) -> View:
        """The projection that a document states."""
        eye, up = np.array(view["eye_cart"]), np.array(view["up_cart"])
        up = up - (up @ eye) * eye
        up /= np.linalg.norm(up)
        return cls(np.cross(up, eye), up, eye)

    def flat(self, vectors: Any) -> FloatArray:
        """Shape (..., 2). Vectors (..., 3) in the plane of the drawing."""
        return np.asarray(vectors, dtype=float) @ np.stack([self.right, self.up], axis=1)


@dataclass(frozen=True)
class Scale:
    """Å of the drawing per µB and per tesla, and the largest moment (µB) and field (T)."""

    per_muB: float
    per_T: float
    largest_muB: float
    largest_T: float


def draw_orderings(document: Mapping[str, Any], path: Path) -> None:
    """Draw the orderings of a document, one panel for each: the cell, moments as black arrows centred on their atoms,
    probes as stars with their fields as open arrows, all orderings on the same scale.

    A moment or field along the line of sight is a ring, with a dot where it points to the eye and a cross where it
    points away.

    Raises InputError as `check_plot`, and for more than 12 orderings in one picture; FileError where the file cannot be
    written.
    """
    check_plot(path)
    save(lambda: orderings_figure(document), path)


def orderings_figure(document: Mapping[str, Any]) -> Figure:
    """The picture of `draw_orderings`; raises InputError for more than 12 orderings."""
    entries = document["orderings"]
    check_count(len(entries), "orderings", "Name some with --ordering.")
    from matplotlib.figure import Figure

    view = View.of(document["view"])
    scale = _scale(entries, view)
    columns = min(len(entries), 2 if len(entries) in (2, 4) else 3)
    lines = -(-len(entries) // columns)
    shapes = [_extent(entry, view) for entry in entries]
    ratio = float(np.clip(max(y / x for x, y in shapes), FLATTEST, TALLEST))
    wide = WIDTH_IN / columns if columns > 1 else 0.75 * WIDTH_IN
    figure = Figure(figsize=(WIDTH_IN, lines * (wide * ratio + HEAD_IN) + HEAD_IN + FOOT_IN), layout="constrained")
    seen = direction(document["view"]["eye_abc"])
    figure.suptitle(plain(f"{document['title']}\nseen from {seen} (components along a, b, c)"))
    panels = figure.subplots(lines, columns, squeeze=False).ravel()
    marks = _marks(entries)
    for panel in panels:
        panel.set_axis_off()
    for panel, entry in zip(panels, entries, strict=False):
        _panel(panel, entry, view, scale, marks)
    handles = _legend(entries, scale, marks)
    figure.legend(handles=handles, loc="outside lower center", ncols=3, frameon=False)
    return figure


def _positions(entry: Mapping[str, Any], key: str) -> FloatArray:
    return np.array([item["position_cart_A"] for item in entry[key]], dtype=float).reshape(-1, 3)


def _corners(entry: Mapping[str, Any]) -> FloatArray:
    """Shape (n_cells, 8, 3). Corners of the cells drawn, Cartesian."""
    unit = np.array(list(itertools.product((0, 1), repeat=3)))
    cells = np.array(entry["cells"])
    return np.asarray((cells[:, None] + unit) @ np.array(entry["cell_A"]))


def _extent(entry: Mapping[str, Any], view: View) -> FloatArray:
    """Width and height (Å) of what is drawn."""
    points = np.concatenate([_corners(entry).reshape(-1, 3), _positions(entry, "probes"), _positions(entry, "atoms")])
    return np.ptp(view.flat(points), axis=0)


def _scale(entries: Sequence[Mapping[str, Any]], view: View) -> Scale:
    size = float(min(np.linalg.norm(_extent(entry, view)) for entry in entries))
    moments = [np.linalg.norm(atom["moment_muB"]) for entry in entries for atom in entry["atoms"]]
    fields = [np.linalg.norm(p["field_T"]) for entry in entries for p in entry["probes"] if p["field_T"] is not None]
    largest_muB, largest_T = float(max(moments, default=0.0)), float(max(fields, default=0.0))
    nearest = min((_nearest(entry) for entry in entries), default=size)
    length = float(np.clip(OF_DISTANCE * nearest, LEAST * size, MOST * size))
    return Scale(
        length / largest_muB if largest_muB > 0 else 0.0,
        FIELD_LENGTH * size / largest_T if largest_T > 0 else 0.0,
        largest_muB,
        largest_T,
    )


def _nearest(entry: Mapping[str, Any]) -> float:
    """Shortest distance (Å) between two atoms with a moment."""
    places = np.array([atom["position_cart_A"] for atom in entry["atoms"] if atom["magnetic"]]).reshape(-1, 3)
    if len(places) < 2:
        return float("inf")
    apart = np.linalg.norm(places[:, None] - places[None], axis=2)
    return float(apart[~np.eye(len(places), dtype=bool)].min())


def _marks(entries: Sequence[Mapping[str, Any]]) -> dict[tuple[str, bool], str]:
    """Mark of every element, with and without a moment."""
    found: dict[tuple[str, bool], str] = {}
    for magnetic, marks in ((True, MAGNETIC_MARKS), (False, OTHER_MARKS)):
        elements = dict.fromkeys(a["element"] for e in entries for a in e["atoms"] if a["magnetic"] == magnetic)
        for number, element in enumerate(elements):
            found[element, magnetic] = marks[number % len(marks)]
    return found


def _panel(
    panel: Axes, entry: Mapping[str, Any], view: View, scale: Scale, marks: Mapping[tuple[str, bool], str]
) -> None:
    wave = f"\nk = {k_text(entry['k'])}" if any(x for k in entry["k"] for x in k) else ""
    panel.set_title(f"{in_lines(entry['ordering'])}{plain(wave)}", loc="center")
    panel.set_aspect("equal")
    _cells(panel, entry, view)
    for (element, magnetic), mark in marks.items():
        atoms = [a for a in entry["atoms"] if a["element"] == element and a["magnetic"] == magnetic]
        if atoms:
            places = view.flat([atom["position_cart_A"] for atom in atoms])
            panel.plot(
                *places.T, mark, color=INK, markersize=3.5, linestyle="", zorder=3 if magnetic else 2,
                markerfacecolor=INK if magnetic else "1.0", markeredgewidth=0.6,
            )  # fmt: skip
    magnetic_atoms = [atom for atom in entry["atoms"] if atom["magnetic"]]
    _arrows(
        panel, view, _positions({"atoms": magnetic_atoms}, "atoms"), [a["moment_muB"] for a in magnetic_atoms],
        scale.per_muB, scale.largest_muB, pivot="mid", facecolor=INK, edgecolor="1.0", zorder=4,
    )  # fmt: skip
    _probes(panel, entry, view, scale)
    panel.margins(0.06)


def _cells(panel: Axes, entry: Mapping[str, Any], view: View) -> None:
    """Edges of all cells, those of the home cell black, its hidden ones dashed, and the names of its axes."""
    unit = np.array(list(itertools.product((0, 1), repeat=3)))
    edges = [(i, j) for i, j in itertools.combinations(range(8), 2) if np.abs(unit[i] - unit[j]).sum() == 1]
    for number, corners in enumerate(_corners(entry)):
        home = not any(entry["cells"][number])
        behind = int(np.argmin(corners @ view.eye))
        flat = view.flat(corners)
        for i, j in edges:
            hidden = home and behind in (i, j)
            panel.plot(
                *flat[[i, j]].T, color=INK if home else PALE, linewidth=0.9 if home else 0.5,
                linestyle=(0, (3, 2)) if hidden else "-", zorder=1.5 if home else 1, solid_capstyle="round",
            )  # fmt: skip
        if home:
            middle = flat.mean(axis=0)
            for axis, corner in zip("abc", (4, 2, 1), strict=True):
                away = flat[corner] - middle
                panel.annotate(
                    axis, flat[corner], xytext=tuple(9 * away / (np.linalg.norm(away) or 1.0)),
                    textcoords="offset points", style="italic", ha="center", va="center", zorder=6,
                )  # fmt: skip


def _arrows(
    panel: Axes, view: View, places: FloatArray, vectors: Sequence[Sequence[float]], per_unit: float, largest: float,
    **look: Any,
) -> None:  # fmt: skip
    """Arrows in the plane of the drawing, from back to front; rings for what is seen end on."""
    if not len(vectors) or largest == 0.0:
        return
    arrows = np.array(vectors, dtype=float)
    order = np.argsort(places @ view.eye, kind="stable")
    arrows, at = arrows[order], view.flat(places[order])
    sizes = np.linalg.norm(arrows, axis=1)
    flat = view.flat(arrows)
    in_plane = np.linalg.norm(flat, axis=1)
    shown = sizes > NOTHING * largest
    lying = shown & (in_plane > END_ON * sizes)
    if np.any(lying):
        panel.quiver(
            *at[lying].T, *(flat[lying] * per_unit).T, angles="xy", scale_units="xy", scale=1, units="inches",
            width=0.028, headwidth=4.2, headlength=4.6, headaxislength=4.2, linewidth=0.5, **look,
        )  # fmt: skip
        ends = at[lying] + (0.5 if look["pivot"] == "mid" else 1.0) * flat[lying] * per_unit
        panel.update_datalim(ends)
        if look["pivot"] == "mid":
            panel.update_datalim(at[lying] - 0.5 * flat[lying] * per_unit)
    for sign, mark in ((1, "."), (-1, "x")):
        facing = shown & ~lying & (np.sign(arrows @ view.eye) == sign)
        if np.any(facing):
            zorder = look["zorder"]
            panel.plot(
                *at[facing].T, "o", color=INK, markerfacecolor="1.0", markersize=8, markeredgewidth=0.9, zorder=zorder
            )
            panel.plot(*at[facing].T, mark, color=INK, markersize=5, markeredgewidth=0.9, zorder=zorder + 0.1)


def _probes(panel: Axes, entry: Mapping[str, Any], view: View, scale: Scale) -> None:
    if not entry["probes"]:
        return
    places = _positions(entry, "probes")
    given = [i for i, probe in enumerate(entry["probes"]) if probe["field_T"] is not None]
    _arrows(
        panel, view, places[given], [entry["probes"][i]["field_T"] for i in given], scale.per_T, scale.largest_T,
        pivot="tail", facecolor="1.0", edgecolor=INK, zorder=5,
    )  # fmt: skip
    flat = view.flat(places)
    panel.plot(*flat.T, "*", color=INK, markerfacecolor="1.0", markersize=7, markeredgewidth=0.7, zorder=5.5)
    named: set[str] = set()
    for probe, place in zip(entry["probes"], flat, strict=True):
        if probe["probe"] not in named:
            named.add(probe["probe"])
            panel.annotate(
                plain(probe["probe"]), place, xytext=(4, -4), textcoords="offset points", fontsize=SMALL_PT, ha="left",
                va="top", zorder=6, bbox={"facecolor": "1.0", "edgecolor": "none", "pad": 0.4, "alpha": 0.75},
            )  # fmt: skip


def _legend(
    entries: Sequence[Mapping[str, Any]], scale: Scale, marks: Mapping[tuple[str, bool], str]
) -> list[Any]:
    from matplotlib.lines import Line2D
    from matplotlib.path import Path as Outline

    arrow = Outline([(-3, -0.35), (1, -0.35), (1, -1.1), (3, 0), (1, 1.1), (1, 0.35), (-3, 0.35), (-3, -0.35)])

    def mark(shape: Any, words: str, **look: Any) -> Line2D:
        return Line2D([], [], linestyle="", marker=shape, color=INK, label=plain(words), **look)

    handles = [
        mark(shape, f"{element}, with a moment" if magnetic else element, markersize=4,
             markerfacecolor=INK if magnetic else "1.0", markeredgewidth=0.6)
        for (element, magnetic), shape in marks.items()
    ]  # fmt: skip
    if scale.largest_muB > 0:
        words = f"moment (longest: {short(scale.largest_muB, 4)} µB)"
        handles.append(mark(arrow, words, markersize=16, markeredgewidth=0))
    if any(entry["probes"] for entry in entries):
        handles.append(mark("*", "probe", markersize=7, markerfacecolor="1.0", markeredgewidth=0.7))
    if scale.largest_T > 0:
        words = f"field (longest: {short(scale.largest_T, 4)} T)"
        handles.append(mark(arrow, words, markersize=16, markerfacecolor="1.0", markeredgewidth=0.6))
    return handles
