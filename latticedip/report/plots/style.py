"""What all pictures share: fonts, sizes, line styles, the kinds of file, and how one is written."""

from __future__ import annotations

import io
import textwrap
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from latticedip.encode import write_bytes_atomically
from latticedip.errors import InputError
from latticedip.report.tables import clean

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

SUFFIXES = (".png", ".svg", ".pdf")
#: Sizes of text in points: what stands beside a mark, axes and titles of panels, the title of a picture.
SMALL_PT, TEXT_PT, TITLE_PT = 7, 9, 10
#: Style of all pictures; sizes are points in print.
STYLE: Any = {
    "font.size": TEXT_PT,
    "font.family": "DejaVu Sans",
    "axes.titlesize": TEXT_PT,
    "axes.labelsize": TEXT_PT,
    "figure.titlesize": TITLE_PT,
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
#: Black, and the greys of what lies behind it.
INK, MIDDLE, PALE, FAINT = "0.0", "0.4", "0.7", "0.9"
#: Dashes that tell curves apart without colour.
DASHES: Any = ("-", (0, (5, 2)), (0, (1, 1.5)), (0, (6, 2, 1, 2)), (0, (10, 3)), (0, (3, 1, 1, 1, 1, 1)))
#: Width of a picture and height of one row of panels, in inches.
WIDTH_IN, ROW_IN, HEAD_IN = 6.8, 2.1, 0.9
#: Rows of panels in one picture.
MOST_PANELS = 12
#: Names longer than this (letters) go over several lines beside an axis; more lines than these are cut off.
NAME_WIDTH, MOST_LINES = 26, 4
#: Letters of a title as wide as a picture, and of one as wide as half of it.
TITLE_LETTERS, HALF_LETTERS = 76, 42
#: Height of a line of a name beside an axis and of one of a title, in inches.
NAME_LINE_IN, TITLE_LINE_IN = 0.135, 0.17


def check_plot(path: Path) -> None:
    """Raise InputError where a picture of that name cannot be drawn: another suffix, or matplotlib is missing."""
    if path.suffix.lower() not in SUFFIXES:
        raise InputError(f"a picture ends in {', '.join(SUFFIXES)}, got {str(path)!r}.")
    check_library()


def check_library() -> None:
    """Raise InputError where matplotlib is missing."""
    try:
        import matplotlib  # noqa: F401
    except ImportError:
        raise InputError("pictures need matplotlib. Install it with: pip install 'latticedip[plot]'") from None


def check_count(count: int, what: str, advice: str, most: int = MOST_PANELS) -> None:
    """Raise InputError where one picture would hold more of something than it has room for."""
    if count > most:
        raise InputError(f"{count} {what} do not fit into one picture of at most {most}. {advice}")


def plain(text: str) -> str:
    """Text that no layout engine takes for a formula."""
    return clean(text).replace("$", r"\$")


def in_lines(name: str, width: int = NAME_WIDTH, most: int = MOST_LINES) -> str:
    """A name broken into lines at blanks, plain; dots where it is longer than all lines that it may have."""
    return plain("\n".join(_broken(name, width, most)))


def line_height(names: Iterable[str], least: float) -> float:
    """Height in inches of one line of a panel that has room for each of the names beside it, ``least`` at least."""
    tallest = max((len(_broken(name, NAME_WIDTH, MOST_LINES)) for name in names), default=1)
    return max(least, NAME_LINE_IN * tallest + 0.06)


def _broken(name: str, width: int, most: int) -> list[str]:
    return textwrap.wrap(clean(name), width, max_lines=most, placeholder=" …") or [name]


def title_height(title: str) -> float:
    """Height in inches of the lines of a title after its first."""
    return TITLE_LINE_IN * (len(_broken(title, TITLE_LETTERS, MOST_LINES)) - 1)


def set_title(figure: Figure, title: str, below: str = "") -> None:
    """The title of a picture, over several lines where it is long, and what else is said below it."""
    lines = [in_lines(title, TITLE_LETTERS) if title else "", plain(below)]
    if any(lines):
        figure.suptitle("\n".join(line for line in lines if line))


def signed(value: float, format_spec: str) -> str:
    """A number with a true minus."""
    return format(value, format_spec).replace("-", "−")


def above_axis(panel: Axes, factor: float, label: str) -> None:
    """A second scale on top of a panel: that of its own x axis times ``factor``."""

    def times(x: Any) -> Any:
        return x * factor

    def back(x: Any) -> Any:
        return x / factor

    above = panel.secondary_xaxis("top", functions=(times, back))
    above.set_xlabel(label)
    few_ticks(above)


def few_ticks(panel: Any, most: int = 6) -> None:
    """At most so many steps of the x axis, so that their numbers stand apart in half a picture, too."""
    from matplotlib.ticker import MaxNLocator

    panel.xaxis.set_major_locator(MaxNLocator(most, steps=[1, 2, 2.5, 5, 10]))


def flat_stays_flat(panel: Axes, values: Iterable[float], around: float = 0.08) -> None:
    """Set limits of the second axis that do not blow up rounding: what is flat but for it is drawn flat."""
    listed = list(values)
    low, high = min(listed), max(listed)
    span = max(high - low, 1e-3 * max(abs(low), abs(high)), 1e-12)
    panel.set_ylim(low - around * span, high + around * span)


def save(make: Callable[[], Figure], path: Path) -> None:
    """Draw and write a picture, whole or not at all. Raises FileError where it cannot be written."""
    write_bytes_atomically(path, render(make, path.suffix.lower().removeprefix(".")))


def render(make: Callable[[], Figure], kind: str) -> bytes:
    """The bytes of a picture of a kind: "png", "svg" or "pdf"."""
    from matplotlib import rc_context

    buffer = io.BytesIO()
    # No date: the same document gives the same file.
    dates = {"svg": {"Date": None}, "pdf": {"CreationDate": None}}.get(kind)
    with rc_context(STYLE):
        make().savefig(buffer, format=kind, metadata=dates)
    return buffer.getvalue()
