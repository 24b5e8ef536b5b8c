"""Aligned text tables that fit the terminal; numbers get as many digits as they deserve."""

from __future__ import annotations

import math
import os
import shutil
import sys
import unicodedata
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from contextvars import ContextVar
from dataclasses import dataclass
from typing import Protocol

#: Blanks between two columns.
GAP = 2
#: A column of words is never made narrower than this.
NARROWEST = 12
#: A direction is written in whole numbers up to this where its components are in such a ratio, within RATIO.
LARGEST_INDEX, RATIO = 9, 1e-6
#: Significant digits of a physical quantity on screen; files carry all of them.
SIGNIFICANT = 6


@dataclass(frozen=True)
class Column:
    """One column of a table.

    head: its name, in plain words; a newline starts a second line.
    unit: shown below the head.
    words: True for text, which is set flush left and may wrap; False for numbers, set flush right.
    whole: text that must not wrap (a position).
    """

    head: str
    unit: str = ""
    words: bool = False
    whole: bool = False


class Setter(Protocol):
    """Sets tables and sentences in another form than aligned text; each method returns what stands in their place."""

    def table(self, columns: Sequence[Column], rows: Sequence[Sequence[str]], keys: int) -> str:
        """Set a table whose first ``keys`` columns name the line."""

    def pairs(self, items: Sequence[tuple[str, str]]) -> str:
        """Set names and values."""

    def paragraph(self, text: str) -> str:
        """Set running text."""

    def bullets(self, sentences: Sequence[str]) -> str:
        """Set a list of sentences."""

    def heading(self, text: str) -> str:
        """Set a heading."""


_SETTER: ContextVar[Setter | None] = ContextVar("latticedip.report.tables.setter", default=None)


@contextmanager
def set_by(setter: Setter) -> Iterator[None]:
    """Within this context tables, pairs, paragraphs, bullets and headings are set by ``setter``."""
    token = _SETTER.set(setter)
    try:
        yield
    finally:
        _SETTER.reset(token)


def screen_width() -> int:
    """Columns of the terminal or, where there is none, of the variable COLUMNS, else 80; never below 40."""
    if "COLUMNS" not in os.environ and not sys.stdout.isatty():
        return 80
    return max(40, shutil.get_terminal_size((80, 24)).columns)


def clean(text: str) -> str:
    """Return text without control characters (a label from a file must not steer the terminal)."""
    return "".join(c if unicodedata.category(c)[0] != "C" or c == "\n" else "?" for c in text)


def text_width(text: str) -> int:
    """Columns that a text takes on the screen."""
    width = 0
    for char in text:
        if not unicodedata.combining(char):
            width += 2 if unicodedata.east_asian_width(char) in "WF" else 1
    return width


def table(columns: Sequence[Column], rows: Sequence[Sequence[str]], *, width: int | None = None, keys: int = 1) -> str:
    """Return an aligned table as text without a final newline.

    Columns of words wrap where the table is wider than ``width`` (default: the screen). If that is not
    enough, the table is cut into blocks below each other; each repeats the first ``keys`` columns.

    Raises ValueError where a row does not hold one cell per column.
    """
    width = screen_width() if width is None else width
    cells = [[clean(cell) for cell in row] for row in rows]
    if any(len(row) != len(columns) for row in cells):
        raise ValueError(f"each row must hold {len(columns)} cells.")
    if (setter := _SETTER.get()) is not None:
        return setter.table(columns, cells, keys)
    natural = [
        max(widest(text) for text in (column.head, column.unit, *(row[i] for row in cells)))
        for i, column in enumerate(columns)
    ]
    least = [
        min(full, max(NARROWEST, _longest_word(column.head))) if column.words and not column.whole else full
        for column, full in zip(columns, natural, strict=True)
    ]
    blocks = [
        _set(columns, cells, block, _share(block, natural, least, columns, width))
        for block in blocks_of(least, width, keys)
    ]
    return "\n\n".join(blocks)


def widest(cell: str) -> int:
    """Columns of the screen that the longest line of a cell takes."""
    return max(text_width(line) for line in cell.split("\n"))


def _longest_word(text: str) -> int:
    return max((text_width(word) for word in text.split()), default=0)


def blocks_of(least: Sequence[int], width: int, keys: int) -> list[list[int]]:
    """Column numbers of each block, with the first ``keys`` ones in all; it fits the width where a column can."""
    repeated = list(range(min(keys, len(least))))
    start = sum(least[i] + GAP for i in repeated)
    blocks, block, used = [], list(repeated), start - GAP
    for i in range(len(repeated), len(least)):
        if len(block) > len(repeated) and used + GAP + least[i] > width:
            blocks.append(block)
            block, used = list(repeated), start - GAP
        block.append(i)
        used += GAP + least[i]
    return [*blocks, block]


def _share(
    block: Sequence[int], natural: Sequence[int], least: Sequence[int], columns: Sequence[Column], width: int
) -> dict[int, int]:
    """Widths of the columns of a block: what is left goes to the columns of words, the narrowest first."""
    widths = {i: least[i] for i in block}
    left = width - sum(widths.values()) - GAP * (len(block) - 1)
    wanting = sorted((i for i in block if natural[i] > least[i]), key=lambda i: natural[i] - least[i])
    for done, i in enumerate(wanting):
        extra = max(0, min(natural[i] - least[i], left // (len(wanting) - done)))
        widths[i] += extra
        left -= extra
    return widths


def _set(
    columns: Sequence[Column], cells: Sequence[Sequence[str]], block: Sequence[int], widths: dict[int, int]
) -> str:
    heads = {i: _wrapped(columns[i].head, widths[i]) for i in block}
    tall = max(len(head) for head in heads.values())
    lines = []
    for level in range(tall):
        parts = {i: ([""] * (tall - len(heads[i])) + heads[i])[level] for i in block}
        lines.append(_line(columns, block, widths, parts))
    if any(columns[i].unit for i in block):
        lines.append(_line(columns, block, widths, {i: columns[i].unit for i in block}))
    lines.append((" " * GAP).join("-" * widths[i] for i in block))
    for row in cells:
        wrapped = {i: _wrapped(row[i], widths[i]) if columns[i].words else row[i].split("\n") for i in block}
        for level in range(max(len(part) for part in wrapped.values())):
            parts = {i: part[level] if level < len(part) else "" for i, part in wrapped.items()}
            lines.append(_line(columns, block, widths, parts))
    return "\n".join(lines)


def _wrapped(text: str, width: int) -> list[str]:
    """Lines no wider than ``width`` on the screen, broken at blanks, and inside a word only where it is too long."""
    lines: list[str] = []
    for line in text.split("\n"):
        if text_width(line) <= width:
            lines.append(line)
            continue
        current = ""
        for word in line.split():
            while text_width(word) > width:
                room = width - (text_width(current) + 1 if current else 0)
                head = _head(word, room)
                if not head:
                    lines, current = [*lines, current], ""
                    continue
                lines, current, word = [*lines, f"{current} {head}".strip()], "", word[len(head) :]
            joined = f"{current} {word}" if current else word
            if text_width(joined) > width:
                lines, joined = [*lines, current], word
            current = joined
        lines += [current] if current else []
    return lines or [""]


def _head(word: str, width: int) -> str:
    """The longest beginning of a word that fits; one character at least where there is any room."""
    for end in range(len(word), 1, -1):
        if text_width(word[:end]) <= width:
            return word[:end]
    return word[:1] if width > 0 else ""


def _line(columns: Sequence[Column], block: Sequence[int], widths: dict[int, int], parts: dict[int, str]) -> str:
    set_parts = []
    for i in block:
        blank = " " * max(0, widths[i] - text_width(parts[i]))
        set_parts.append(parts[i] + blank if columns[i].words else blank + parts[i])
    return (" " * GAP).join(set_parts).rstrip()


def pairs(items: Iterable[tuple[str, str]], *, width: int | None = None, indent: int = 2) -> str:
    """Return names and values below each other, values aligned and wrapped to the screen."""
    width = screen_width() if width is None else width
    listed = [(clean(name), clean(value)) for name, value in items]
    if (setter := _SETTER.get()) is not None:
        return setter.pairs(listed)
    column = indent + max((text_width(name) for name, _ in listed), default=0) + GAP
    lines = []
    for name, value in listed:
        wrapped = _wrapped(value, max(width - column, NARROWEST))
        lines.append((" " * indent + name + " " * (column - indent - text_width(name)) + wrapped[0]).rstrip())
        lines.extend(" " * column + line for line in wrapped[1:])
    return "\n".join(lines)


def paragraph(text: str, *, width: int | None = None, first: str = "") -> str:
    """Return a text wrapped to the screen; ``first`` leads the first line, the others are indented alike."""
    if (setter := _SETTER.get()) is not None:
        return setter.paragraph(first + clean(text))
    width = screen_width() if width is None else width
    lead = text_width(first)
    lines = _wrapped(clean(text), max(width - lead, NARROWEST))
    return "\n".join((first if i == 0 else " " * lead) + line for i, line in enumerate(lines))


def bullets(sentences: Iterable[str], *, width: int | None = None) -> str:
    """Return sentences as a list, one item each; what another sentence already says in the same words is left out."""
    distinct = list(dict.fromkeys(sentences))
    kept = [s for s in distinct if not any(s in other and s != other for other in distinct)]
    if (setter := _SETTER.get()) is not None:
        return setter.bullets([clean(s) for s in kept])
    return "\n".join(paragraph(s, width=width, first="- ") for s in kept)


def heading(text: str) -> str:
    """Return a text underlined, over several lines where it is wider than the screen."""
    shown = clean(text)
    if (setter := _SETTER.get()) is not None:
        return setter.heading(shown)
    lines = _wrapped(shown, screen_width())
    return "\n".join([*lines, "=" * max(text_width(line) for line in lines)])


def caption(text: str) -> str:
    """Return the line that leads a table or a list, over several lines where it is wider than the screen."""
    shown = clean(text)
    return shown if _SETTER.get() is not None else "\n".join(_wrapped(shown, screen_width()))


def decimals_for(values: Iterable[float], *, significant: int = SIGNIFICANT, error: float = 0.0) -> int:
    """Digits behind the point that give the largest value its significant digits, fewer where ``error`` asks.

    error: bound of the absolute error of the values; a digit it reaches is not shown.
    """
    sizes = [abs(v) for v in values if math.isfinite(v)]
    largest = max(sizes, default=0.0)
    decimals = significant - 1 - math.floor(math.log10(largest)) if largest > 0 else 0
    if largest <= error:
        # Nothing but the error itself is known: show the digit it reaches, so that a zero looks like one.
        decimals = min(significant, 12)
    if error > 0:
        decimals = min(decimals, math.floor(-math.log10(error)))
    return max(0, min(decimals, 15))


def fixed(value: float | None, decimals: int) -> str:
    """Return a number with that many decimals; nothing for None and NaN; a zero never carries a minus."""
    if value is None or math.isnan(value):
        return ""
    text = f"{value:.{decimals}f}"
    return text[1:] if text.startswith("-") and not text.strip("-0.") else text


def short(value: float, significant: int = SIGNIFICANT) -> str:
    """Return a number with at most that many significant digits and no trailing zeros."""
    return f"{value + 0.0:.{significant}g}"


def fraction(value: float) -> str:
    """Return a coordinate as a fraction where it is one with a denominator up to 12, else decimal."""
    for denominator in (1, 2, 3, 4, 5, 6, 8, 10, 12):
        whole = round(value * denominator)
        if abs(value * denominator - whole) < 1e-9 * denominator:
            return str(whole) if denominator == 1 else f"{whole}/{denominator}"
    return short(value)


def vector(values: Iterable[float], significant: int = 4) -> str:
    """Return a short vector in round brackets; what is nothing beside its largest component is shown as 0."""
    return "(" + ", ".join(short(v, significant) for v in _without_dust(values)) + ")"


def direction(components: Iterable[float] | None) -> str:
    """Return components of a direction in square brackets; - where there is none.

    Whole numbers up to 9 where the components are in such a ratio, else the components with four decimals.
    """
    if components is None:
        return "-"
    listed = _without_dust(components)
    largest = max((abs(x) for x in listed), default=0.0)
    for index in range(1, LARGEST_INDEX + 1) if largest > 0 else ():
        scaled = [x * index / largest for x in listed]
        if all(abs(x - round(x)) <= RATIO * index for x in scaled):
            return "[" + " ".join(str(round(x)) for x in scaled) + "]"
    return "[" + " ".join(fixed(x, 4) for x in listed) + "]"


def _without_dust(values: Iterable[float]) -> list[float]:
    listed = [float(v) for v in values]
    largest = max((abs(v) for v in listed), default=0.0)
    return [0.0 if abs(v) < 1e-9 * largest else v for v in listed]
