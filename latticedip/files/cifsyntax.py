"""CIF syntax: bytes to blocks of values, read by gemmi.

gemmi is a strict CIF 1.1 parser with line numbers. Three things that real files bring are settled before it sees
them: bytes that are not UTF-8 (read as Latin-1), bare words with letters beyond ASCII, and CIF 2 lists such as
``[1/2 1/2 1/2]`` (both put in quotes, so that each arrives as one text). Everything else that breaks the syntax is
refused with file and line.

Tags are compared in one spelling: lower case, with ``.`` written as ``_``. The dotted names of the newer
dictionaries, the flat names of the older ones and the magCIF prototype then fall together.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from typing import Any

import gemmi

from latticedip.errors import FileError, near_match

_NUMBER = re.compile(r"([+-]?)(\d+\.?\d*|\.\d+)(?:[eE]([+-]?\d{1,3}))?(?:\((\d{1,9})\))?\Z", re.ASCII)
# White space of CIF alone: to Python a Latin-1 byte such as 0x85 or 0xA0 would count as well.
_WHITE = " \t\n"
_WORD, _BLANK = re.compile(rf"[^{_WHITE}]+"), re.compile(rf"[{_WHITE}]+")
_GEMMI_PLACE = re.compile(r"string:(\d+)(?::\d+\(\d+\))?(?: in data_\S*)?:? ?")

#: Letters of a line of a file in a message.
SHOWN = 60
#: The loop number of items that stand alone; those of one category belong together.
NO_LOOP = -1


@dataclass(frozen=True)
class Column:
    """The values of one item: its tag as the file spells it, the raw values (one, or one per loop row), its loop."""

    tag: str
    values: tuple[str, ...]
    line: int
    loop: int

    def text(self, row: int) -> str | None:
        """The value of a row without its quotes, or None for ``?`` and ``.`` (unknown, not applicable)."""
        raw = self.values[row]
        return None if gemmi.cif.is_null(raw) else gemmi.cif.as_string(raw).strip()

    def is_unknown(self, row: int) -> bool:
        """True where the value is ``?``."""
        return self.values[row] == "?"


@dataclass(frozen=True)
class Block:
    """One data block of a CIF, its items under their folded tags (see `fold`)."""

    path: str
    name: str
    items: dict[str, Column] = field(repr=False)

    def column(self, *tags: str) -> Column | None:
        """The first of these items that the block holds; tags may be given in any spelling."""
        for tag in tags:
            found = self.items.get(fold(tag))
            if found is not None:
                return found
        return None

    def sibling(self, of: Column, tag: str) -> Column | None:
        """The item ``tag`` where it stands in the same loop as another item (or alone, as that one), else None."""
        found = self.items.get(fold(tag))
        return found if found is not None and found.loop == of.loop else None

    def value(self, *tags: str) -> str | None:
        """The text of the first of these items that holds a single value other than ``?``, ``.`` or nothing."""
        for tag in tags:
            found = self.items.get(fold(tag))
            if found is not None and len(found.values) == 1 and found.text(0):
                return found.text(0)
        return None

    def starting_with(self, *prefixes: str) -> list[str]:
        """Tags (as the file spells them) that begin with one of these and hold a value other than ``?`` or ``.``."""
        folded = tuple(fold(prefix) for prefix in prefixes)
        return [
            column.tag
            for key, column in self.items.items()
            if key.startswith(folded) and any(column.text(i) for i in range(len(column.values)))
        ]

    def number(self, column: Column, row: int) -> tuple[float, float]:
        """The number of a row and its standard uncertainty (NaN where none is stated).

        Raises FileError naming file, item and value where the text is not a number.
        """
        text = column.text(row)
        if text is None:
            raise self.error(f"{column.tag} is {column.values[row]!r}{self._row(column, row)}, but a number is needed.")
        parsed = parse_number(text)
        if parsed is None:
            raise self.error(f"{column.tag} is {text!r}{self._row(column, row)}, which is not a number.")
        return parsed

    def _row(self, column: Column, row: int) -> str:
        return f" in row {row + 1}" if len(column.values) > 1 else ""

    def error(self, message: str) -> FileError:
        """A FileError that begins with the name of the file."""
        return FileError(f"{self.path}: {message}")


def fold(tag: str) -> str:
    """A tag in the spelling in which tags are compared: lower case, dots written as underscores."""
    return tag.lower().replace(".", "_")


def parse_number(text: str) -> tuple[float, float] | None:
    """``5.0(1)`` as (5.0, 0.1), ``5.0`` as (5.0, nan); None for text that is not a CIF number."""
    match = _NUMBER.match(text)
    if match is None:
        return None
    sign, digits, exponent, su = match.groups()
    value = float(f"{sign}{digits}e{exponent or 0}")
    if abs(value) == float("inf"):
        return None
    if su is None:
        return value, float("nan")
    decimals = len(digits.partition(".")[2])
    return value, float(f"{su}e{int(exponent or 0) - decimals}")


def decode(data: bytes) -> str:
    """CIF bytes as text: UTF-8 where they are, else Latin-1; line ends become ``\\n``."""
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = data.decode("latin-1")
    return text.replace("\r\n", "\n").replace("\r", "\n")


def parse_blocks(data: bytes, path: str) -> list[Block]:
    """All data blocks of a CIF. Raises FileError with file, line and its text where the syntax is broken."""
    if b"\0" in data:
        raise FileError(f"{path}: this is not a text file (it holds zero bytes).")
    given = decode(data)
    quoted = quote_lists(given, path)
    try:
        document = gemmi.cif.read_string(quoted)
    except (ValueError, RuntimeError) as error:
        raise FileError(f"{path}: {_readable(str(error), given)}") from None
    return [_block(raw, path) for raw in document]


def _readable(message: str, text: str) -> str:
    """gemmi's message with its place rewritten as a line number, and that line of the text."""
    match = _GEMMI_PLACE.match(message)
    if match is None:
        return f"the CIF syntax is broken ({message.removeprefix('string: ')})."
    number = int(match.group(1))
    return f"line {number}: the CIF syntax is broken ({message[match.end() :]}){_shown(text, number)}."


def _shown(text: str, number: int) -> str:
    """A line of the file in a message: shortened, in quotes and with control characters escaped.

    Nothing for a line that tells nothing: a blank one, or the one that opens a loop.
    """
    lines = text.split("\n")
    line = lines[number - 1].strip() if number <= len(lines) else ""
    if len(line) > SHOWN:
        line = line[: SHOWN - 1] + "…"
    return f" in {line!r}" if line.lower() not in ("", "loop_") else ""


def _block(raw: gemmi.cif.Block, path: str) -> Block:
    items: dict[str, Column] = {}
    for number, item in enumerate(raw):
        columns: list[Column] = []
        pair: Any = item.pair
        if pair is not None:
            columns = [Column(pair[0], (pair[1],), item.line_number, NO_LOOP)]
        elif item.loop is not None:
            width, values = len(item.loop.tags), list(item.loop.values)
            columns = [
                Column(tag, tuple(values[i::width]), item.line_number, number) for i, tag in enumerate(item.loop.tags)
            ]
        for column in columns:
            key = fold(column.tag)
            known = items.get(key)
            if known is not None and known.values != column.values:
                raise FileError(
                    f"{path}: {known.tag} and {column.tag} are two spellings of one item, but their values differ. "
                    "Keep one."
                )
            if known is None:
                items[key] = column
    return Block(path, raw.name, items)


def choose_block(blocks: list[Block], path: str, block: str | None) -> Block:
    """The data block to read: the named one, else the only one that holds a structure.

    Raises FileError where the name is unknown, where no block holds cell and atoms, and where several do.
    """
    names = [b.name for b in blocks]
    if block is not None:
        for candidate in blocks:
            if candidate.name.lower() == block.lower():
                return candidate
        listed = ", ".join(names) or "none"
        raise FileError(
            f"{path}: there is no data block {block!r}. Its blocks are: {listed}.{near_match(block, names)}"
        )
    with_structure = [b for b in blocks if _has_structure(b)]
    if not with_structure:
        raise FileError(
            f"{path}: no data block holds a structure (a cell, _cell_length_a, and atoms, _atom_site_fract_x)."
        )
    if len(with_structure) > 1:
        listed = ", ".join(b.name for b in with_structure)
        raise FileError(f"{path}: {len(with_structure)} data blocks hold a structure: {listed}. Say which with block.")
    return with_structure[0]


def _has_structure(block: Block) -> bool:
    return block.column("_cell_length_a") is not None and block.column("_atom_site_fract_x") is not None


def quote_lists(text: str, path: str) -> str:
    """Put CIF 2 lists, bare words that are not ASCII and, in CIF 2 files, triple-quoted strings into quotes.

    Brackets inside comments, quoted strings and text fields are left alone, and so are line numbers.
    Raises FileError for a list that is not closed.
    """
    triple = text.lstrip().startswith("#\\#CIF_2")
    if "[" not in text and text.isascii() and not triple:
        return text
    pieces: list[str] = []
    copied = position = 0
    while position < len(text):
        end, replacement = _token(text, position, path, triple)
        if replacement is not None:
            pieces.append(text[copied:position] + replacement)
            copied = end
        position = end
    return "".join(pieces) + text[copied:]


def _token(text: str, start: int, path: str, triple: bool) -> tuple[int, str | None]:
    """End of the token (or white space) at ``start``, and what replaces it, if anything does."""
    first = text[start]
    blank = _BLANK.match(text, start)
    if blank is not None:
        return blank.end(), None
    if first == "#":
        return _find(text, "\n", start), None
    if first == ";" and (start == 0 or text[start - 1] == "\n"):
        return _find(text, "\n;", start) + 2, None
    if triple and text.startswith(("'''", '"""'), start):
        stop = text.find(text[start : start + 3], start + 3)
        if stop < 0:
            line = _line(text, start)
            raise FileError(f"{path}: line {line}: a triple-quoted string is not closed{_shown(text, line)}.")
        return stop + 3, _as_cif1_text(text[start + 3 : stop])
    if first in "'\"":
        return _end_of_quoted(text, start), None
    if first == "[":
        stop = _end_of_list(text, start, path)
        inside = text[start:stop]
        return stop, _as_cif1_text(" ".join(inside.split())) + "\n" * inside.count("\n")
    word = _WORD.match(text, start)
    stop = word.end() if word else start + 1
    bare = text[start:stop]
    if bare.isascii() or bare.startswith("_") or bare.lower().startswith(("data_", "save_")):
        return stop, None
    return stop, _as_cif1_text(bare)


def _end_of_quoted(text: str, start: int) -> int:
    """A CIF 1.1 quoted string ends at its own quote followed by white space, and never goes over its line."""
    stop = start + 1
    while stop < len(text) and text[stop] != "\n":
        if text[stop] == text[start] and (stop + 1 == len(text) or text[stop + 1] in _WHITE):
            return stop + 1
        stop += 1
    return stop


def _end_of_list(text: str, start: int, path: str) -> int:
    depth, stop = 0, start
    while stop < len(text):
        character = text[stop]
        if character in "'\"" and text[stop - 1] in "[, \t\n":
            # Within a list a string ends at its next quote: "]" or "," may follow it directly (CIF 2).
            stop = max(_find(text, character, stop + 1), stop)
        elif character == "[":
            depth += 1
        elif character == "]":
            depth -= 1
            if depth == 0:
                return stop + 1
        stop += 1
    line = _line(text, start)
    raise FileError(f"{path}: line {line}: a list that begins with '[' is not closed by ']'{_shown(text, line)}.")


def _as_cif1_text(content: str) -> str:
    """Content as a CIF 1.1 value: in quotes where it fits on one line, else as a text field."""
    for quote in ("'", '"'):
        if quote not in content and "\n" not in content:
            return f"{quote}{content}{quote}"
    # Lines that begin with a semicolon would end the field; a leading blank does no harm to text.
    return "\n;" + content.replace("\n;", "\n ;") + "\n;"


def _find(text: str, what: str, start: int) -> int:
    found = text.find(what, start)
    return len(text) if found < 0 else found


def _line(text: str, position: int) -> int:
    return text.count("\n", 0, position) + 1
