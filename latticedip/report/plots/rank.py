"""A ranking as dots, lowest on top."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from latticedip.report.plots.style import (
    FAINT,
    INK,
    MIDDLE,
    PALE,
    SMALL_PT,
    WIDTH_IN,
    check_count,
    check_plot,
    in_lines,
    line_height,
    save,
    set_title,
    signed,
    title_height,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: Height of one ordering and of all that is round them, in inches; lines left free at the edges of the panel.
LINE_IN, AROUND_IN, EDGE = 0.34, 1.5, 0.35
MOST_ORDERINGS = 60
#: Rounding of an energy, as a part of its size, beside its error bound.
ROUNDING = 1e-13


def draw_rank(document: Mapping[str, Any], path: Path) -> None:
    """Draw a ranking: one line for each ordering, lowest on top, its energy as a dot with the number beside it.

    Ties lie on a grey band that is marked "tie". A line from a dot to a small upright bar leads to the energy of the
    hard orientation, an open square is the sum with an energy from elsewhere, a dashed line the lowest dipolar mode;
    each where the document holds it. Energies are µeV per ion.

    Raises InputError as `check_plot`, and for more than 60 orderings in one picture; FileError where the file cannot be
    written.
    """
    check_plot(path)
    save(lambda: rank_figure(document), path)


def rank_figure(document: Mapping[str, Any]) -> Figure:
    """The picture of `draw_rank`; raises InputError for more than 60 orderings."""
    rows = document["rows"]
    check_count(len(rows), "orderings", "Name some with --ordering.", MOST_ORDERINGS)
    from matplotlib.figure import Figure

    line = line_height((f"00  {row['ordering']}" for row in rows), LINE_IN)
    height = line * (len(rows) + EDGE) + AROUND_IN + title_height(document["title"])
    figure = Figure(figsize=(WIDTH_IN, height), layout="constrained")
    set_title(figure, document["title"])
    panel = figure.subplots()
    energies = [row["energy_ueV_per_ion"] for row in rows]
    banded: set[int] = set()
    for first, last in tie_bands(rows):
        banded |= set(range(first, last + 1))
        panel.axhspan(first - 0.42, last + 0.42, color=FAINT, linewidth=0)
        panel.annotate(
            "tie", (1, (first + last) / 2), xycoords=("axes fraction", "data"), xytext=(-5, 0),
            textcoords="offset points", fontsize=SMALL_PT, ha="right", va="center", style="italic",
        )  # fmt: skip
    panel.hlines(range(len(rows)), 0, 1, transform=panel.get_yaxis_transform(), color=PALE, linewidth=0.5, zorder=0)
    kinds = [*_hard(panel, rows), *_sums(panel, rows), *_bound(panel, document)]
    dots = panel.plot(energies, range(len(rows)), "o", color=INK, markersize=5, label="dipolar energy", zorder=3)
    for place, energy in enumerate(energies):
        panel.annotate(
            signed(energy, ".2f" if abs(energy) < 1e4 else ".5g"), (energy, place), xytext=(0, 5),
            textcoords="offset points", fontsize=SMALL_PT, ha="center", va="bottom",
            bbox={"facecolor": FAINT if place in banded else "1.0", "edgecolor": "none", "pad": 0.3},
        )  # fmt: skip
    panel.set_yticks(range(len(rows)), [in_lines(f"{row['rank']}  {row['ordering']}") for row in rows])
    panel.set_ylim(len(rows) - 0.4, -0.75)
    _limits(panel)
    panel.set_xlabel("energy (µeV per ion)")
    lowest = energies[0]
    above = panel.secondary_xaxis("top", functions=(lambda x: x - lowest, lambda x: x + lowest))
    above.set_xlabel("above the lowest (µeV per ion)")
    if kinds:
        figure.legend(handles=[*dots, *kinds], loc="outside lower center", ncols=2, frameon=False)
    return figure


def tie_bands(rows: Sequence[Mapping[str, Any]]) -> Iterator[tuple[int, int]]:
    """First and last place of every run of orderings whose energies equal the next one's within their bounds."""
    first = 0
    for place in range(1, len(rows) + 1):
        if place < len(rows) and _tied(rows[place - 1], rows[place]):
            continue
        if place - 1 > first:
            yield first, place - 1
        first = place


def _tied(row: Mapping[str, Any], following: Mapping[str, Any]) -> bool:
    if not (row["tie"] and following["tie"]):
        return False
    energies = [row["energy_ueV_per_ion"], following["energy_ueV_per_ion"]]
    bound = row["error_bound_ueV_per_ion"] + following["error_bound_ueV_per_ion"]
    # Tied rows stand in the order given; µeV round once more what was compared in eV.
    return bool(abs(energies[1] - energies[0]) <= bound + 4 * ROUNDING * max(abs(e) for e in energies))


def _hard(panel: Axes, rows: Sequence[Mapping[str, Any]]) -> list[Any]:
    shown: list[Any] = []
    for place, row in enumerate(rows):
        if row.get("anisotropy_ueV_per_ion"):
            ends = [row["energy_ueV_per_ion"], row["energy_ueV_per_ion"] + row["anisotropy_ueV_per_ion"]]
            shown = panel.plot(
                ends, [place, place], "-|", color=MIDDLE, markersize=9, markevery=[1], label="to the hard orientation"
            )
    return shown


def _sums(panel: Axes, rows: Sequence[Mapping[str, Any]]) -> list[Any]:
    given = [(place, row) for place, row in enumerate(rows) if row.get("sum_with_other_ueV_per_ion") is not None]
    if not given:
        return []
    sums = [row["sum_with_other_ueV_per_ion"] for _, row in given]
    places = [place for place, _ in given]
    return panel.plot(
        sums, places, "s", color=INK, markerfacecolor="1.0", markersize=5, label="with the energy from elsewhere"
    )


def _bound(panel: Axes, document: Mapping[str, Any]) -> list[Any]:
    if document["bound"] is None:
        return []
    energy = document["bound"]["energy_ueV_per_ion"]
    line = panel.axvline(energy, color=INK, linestyle=(0, (5, 3)), linewidth=0.9, label="lowest dipolar mode")
    return [line]


def _limits(panel: Axes) -> None:
    """Room for the numbers beside the outermost dots, and for one energy alone."""
    low, high = panel.dataLim.intervalx
    span = high - low or max(abs(high), 1.0)
    panel.set_xlim(low - 0.08 * span, high + 0.1 * span)
