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
    set_title,
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
#: Tallest and flattest panel, as height over width; cells in a row that ask for wide panels.
TALLEST, FLATTEST, MANY_CELLS = 1.5, 0.4, 3
HEAD_IN, FOOT_IN = 0.5, 0.6
#: Rings of arrows seen end on, and the width of a letter of a name, in points.
RING_PT, LETTER_PT = 8, 4.4
#: Names of probes longer than this, or more than so many, stand in the legend; beside the probes are numbers then.
LONGEST_NAME, MOST_NAMES = 14, 6
#: Letters of a name in the legend, its columns then, and the height of a line there in inches.
KEY_LETTERS, KEY_COLUMNS, KEY_LINE_IN = 46, 2, 0.17
#: Sides of a mark that its name may stand on: x and y in half its size.
SIDES = ((1, 0), (1, -1), (1, 1), (-1, 0), (-1, -1), (-1, 1), (0, -1), (0, 1))


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
    # A row of many cells needs width.
    long = any(max(max(cell) for cell in entry["cells"]) >= MANY_CELLS for entry in entries)
    columns = min(len(entries), 2 if long or len(entries) in (2, 4) else 3)
    lines = -(-len(entries) // columns)
    shapes = [_extent(entry, view) for entry in entries]
    ratios = [float(np.clip(y / x, FLATTEST, TALLEST)) for x, y in shapes]
    by_line = [max(ratios[i * columns : (i + 1) * columns]) for i in range(lines)]
    wide = WIDTH_IN / columns if columns > 1 else 0.75 * WIDTH_IN
    heights = [wide * ratio + HEAD_IN for ratio in by_line]
    tags = _tags(entries)
    key = {tag: name for name, tag in tags.items() if tag != name}
    foot = FOOT_IN + KEY_LINE_IN * -(-len(key) // KEY_COLUMNS)
    figure = Figure(figsize=(WIDTH_IN, sum(heights) + HEAD_IN + foot), layout="constrained")
    seen = direction(document["view"]["eye_abc"])
    set_title(figure, document["title"], f"seen from {seen} (components along a, b, c)")
    panels = figure.subplots(lines, columns, squeeze=False, height_ratios=heights).ravel()
    marks = _marks(entries)
    for panel in panels:
        panel.set_axis_off()
    end_on: set[int] = set()
    for number, (panel, entry, (x, y)) in enumerate(zip(panels, entries, shapes, strict=False)):
        per_point = float(max(x, y / by_line[number // columns])) / (72 * wide)
        end_on |= _panel(panel, entry, view, scale, marks, tags, per_point)
    handles = _legend(entries, scale, marks, end_on)
    labels = [(handle[0] if isinstance(handle, tuple) else handle).get_label() for handle in handles]
    if key:
        handles += [_key_mark(tag) for tag in key]
        labels += [in_lines(name, KEY_LETTERS, 1) for name in key.values()]
    columns = KEY_COLUMNS if key else 3
    figure.legend(handles, labels, loc="outside lower center", ncols=columns, frameon=False)
    return figure


def _tags(entries: Sequence[Mapping[str, Any]]) -> dict[str, str]:
    """What stands beside each probe: its name or, where one is long or there are many, its number."""
    names = list(dict.fromkeys(probe["probe"] for entry in entries for probe in entry["probes"]))
    if len(names) <= MOST_NAMES and all(len(name) <= LONGEST_NAME for name in names):
        return {name: name for name in names}
    return {name: str(number) for number, name in enumerate(names, start=1)}


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
    panel: Axes, entry: Mapping[str, Any], view: View, scale: Scale, marks: Mapping[tuple[str, bool], str],
    tags: Mapping[str, str], per_point: float,
) -> set[int]:  # fmt: skip
    """Draw one ordering. per_point: Å of the drawing in a point of print. Returns as `_arrows`, for all arrows."""
    wave = f"\nk = {k_text(entry['k'])}" if any(x for k in entry["k"] for x in k) else ""
    panel.set_title(f"{in_lines(entry['ordering'])}{plain(wave)}", loc="center")
    panel.set_aspect("equal")
    panel.set_anchor("N")
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
    end_on = _arrows(
        panel, view, _positions({"atoms": magnetic_atoms}, "atoms"), [a["moment_muB"] for a in magnetic_atoms],
        scale.per_muB, scale.largest_muB, per_point, pivot="mid", facecolor=INK, edgecolor="1.0", zorder=4,
    )  # fmt: skip
    end_on |= _probes(panel, entry, view, scale, tags, per_point)
    panel.margins(0.06)
    return end_on


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
                if np.linalg.norm(flat[corner] - flat[0]) < END_ON * np.linalg.norm(corners[corner] - corners[0]):
                    continue
                away = flat[corner] - middle
                panel.annotate(
                    axis, flat[corner], xytext=tuple(9 * away / (np.linalg.norm(away) or 1.0)),
                    textcoords="offset points", style="italic", ha="center", va="center", zorder=6,
                )  # fmt: skip


def _arrows(
    panel: Axes, view: View, places: FloatArray, vectors: Sequence[Sequence[float]], per_unit: float, largest: float,
    per_point: float, **look: Any,
) -> set[int]:  # fmt: skip
    """Arrows in the plane of the drawing, from back to front; rings for what is seen end on.

    Returns the signs of the latter: 1 where one points to the eye, -1 where one points away.
    """
    if not len(vectors) or largest == 0.0:
        return set()
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
        panel.update_datalim(_along(at[lying], flat[lying] * per_unit, look["pivot"], 2).reshape(-1, 2))
    facing = np.flatnonzero(shown & ~lying)
    signs = np.sign(arrows @ view.eye).astype(int)
    drawn: dict[tuple[int, int], list[int]] = {}
    # From front to back: one that hides behind another and points the other way is moved aside.
    for i in facing[::-1]:
        found = drawn.setdefault((round(at[i, 0] / per_point / 3), round(at[i, 1] / per_point / 3)), [])
        if signs[i] not in found:
            # A ring round a probe would hide under its star.
            steps = len(found) + (look["pivot"] == "tail")
            aside = at[i] + 0.8 * RING_PT * per_point * steps * np.array([1.0, 1.0])
            found.append(int(signs[i]))
            for mark, size in (("o", RING_PT), ("." if signs[i] > 0 else "x", 5)):
                panel.plot(
                    *aside, mark, color=INK, markerfacecolor="1.0" if mark == "o" else INK, markersize=size,
                    markeredgewidth=0.9, zorder=look["zorder"] - 0.1 * len(found),
                )  # fmt: skip
    return {int(signs[i]) for i in facing}


def _along(at: FloatArray, arrows: FloatArray, pivot: str, count: int) -> FloatArray:
    """Shape (n, count, 2). Points along arrows (n, 2) that stand at, or lie with their middle on, places (n, 2)."""
    part = np.linspace(0.0, 1.0, count) - (0.5 if pivot == "mid" else 0.0)
    return np.asarray(at[:, None] + part[:, None] * arrows[:, None])


def _probes(
    panel: Axes, entry: Mapping[str, Any], view: View, scale: Scale, tags: Mapping[str, str], per_point: float
) -> set[int]:
    if not entry["probes"]:
        return set()
    places = _positions(entry, "probes")
    given = [i for i, probe in enumerate(entry["probes"]) if probe["field_T"] is not None]
    fields = [entry["probes"][i]["field_T"] for i in given]
    end_on = _arrows(
        panel, view, places[given], fields, scale.per_T, scale.largest_T, per_point, pivot="tail", facecolor="1.0",
        edgecolor=INK, zorder=5,
    )  # fmt: skip
    flat = view.flat(places)
    panel.plot(*flat.T, "*", color=INK, markerfacecolor="1.0", markersize=7, markeredgewidth=0.7, zorder=5.5)
    taken = [flat, view.flat(_positions(entry, "atoms"))]
    moments = view.flat([atom["moment_muB"] for atom in entry["atoms"]]) * scale.per_muB
    taken.append(_along(taken[1], moments, "mid", 7).reshape(-1, 2))
    if given:
        # Where a ring would stand.
        taken.append(flat[given] + 0.8 * RING_PT * per_point)
        taken.append(_along(flat[given], view.flat(fields) * scale.per_T, "tail", 9).reshape(-1, 2))
    _names(panel, [tags[probe["probe"]] for probe in entry["probes"]], flat, np.concatenate(taken), per_point)
    return end_on


def _names(panel: Axes, names: Sequence[str], flat: FloatArray, taken: FloatArray, per_point: float) -> None:
    """Write the name of each probe beside the one of its points, and on the side, where there is most room."""
    for name in dict.fromkeys(names):
        shown = plain(name)
        half = 0.5 * per_point * np.array([LETTER_PT * len(shown), SMALL_PT])
        best, room = flat[0], -1.0
        for place in (point for point, other in zip(flat, names, strict=True) if other == name):
            for side in SIDES:
                centre = place + np.array(side) * (half + 5 * per_point)
                # Distance from the box of the text to the nearest mark or arrow.
                apart = np.maximum(np.abs(taken - centre) - half, 0.0)
                free = float(np.linalg.norm(apart, axis=1).min())
                if free > room * (1 + 1e-9):
                    best, room = centre, free
        panel.annotate(
            shown, best, fontsize=SMALL_PT, ha="center", va="center", zorder=6, annotation_clip=False,
            bbox={"facecolor": "1.0", "edgecolor": "none", "pad": 0.3, "alpha": 0.7},
        )  # fmt: skip
        grid = [best + half * np.array([x, y]) for x in (-1, -0.5, 0, 0.5, 1) for y in (-1, 0, 1)]
        taken = np.concatenate([taken, grid])
        panel.update_datalim([best - half, best + half])


def _key_mark(tag: str) -> Any:
    """The number of a probe as a mark of the legend."""
    from matplotlib.lines import Line2D

    # Of a mark the longer side is given: two digits are wider than high.
    size = 5.5 * max(1.0, 0.64 * len(tag))
    return Line2D([], [], linestyle="", marker=f"$\\mathrm{{{tag}}}$", color=INK, markersize=size, markeredgewidth=0.2)


def _legend(
    entries: Sequence[Mapping[str, Any]], scale: Scale, marks: Mapping[tuple[str, bool], str], end_on: set[int]
) -> list[Any]:
    from matplotlib.lines import Line2D
    from matplotlib.path import Path as Outline

    arrow = Outline([(-3, -0.35), (1, -0.35), (1, -1.1), (3, 0), (1, 1.1), (1, 0.35), (-3, 0.35), (-3, -0.35)])

    def mark(shape: Any, words: str, **look: Any) -> Line2D:
        return Line2D([], [], linestyle="", marker=shape, color=INK, label=plain(words), **look)

    handles: list[Any] = [
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
    for sign, inner, words in ((1, ".", "points to the eye"), (-1, "x", "points away from the eye")):
        if sign in end_on:
            ring = {"markersize": RING_PT, "markerfacecolor": "1.0", "markeredgewidth": 0.9}
            handles.append((mark("o", words, **ring), mark(inner, words, markersize=5)))
    return handles
