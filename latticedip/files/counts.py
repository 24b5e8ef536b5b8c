"""Counts of atoms that a file states before it lists them, checked before a reader takes memory or time for them.

Only the formats are looked at whose readers in ASE believe the count: (extended) XYZ, POSCAR, XSF and DFTB+ gen.
"""

from __future__ import annotations

import re

from latticedip.errors import FileError

_WHOLE = re.compile(rb"\d+")
#: More digits than any count has.
_LONGEST = 18


def check_counts(kind: str, name: str, data: bytes) -> None:
    """Refuse a file that announces more atoms than it has lines.

    kind: the format by its name in ASE; others than those above are not looked at.

    Raises FileError.
    """
    lines = data.split(b"\n")
    if kind in ("xyz", "extxyz"):
        at = 0
        while at < len(lines) and (count := _whole(lines[at].strip())) is not None:
            _refuse_more(name, at, count, len(lines) - at)
            at += count + 2
    elif kind == "vasp":
        for at in (5, 6):
            counts = [_whole(word) for word in lines[at].split()] if at < len(lines) else []
            if counts and None not in counts:
                _refuse_more(name, at, sum(count or 0 for count in counts), len(lines))
    elif kind == "gen":
        words = lines[0].split()
        _refuse_more(name, 0, (_whole(words[0]) if words else None) or 0, len(lines))
    elif kind == "xsf":
        for at, line in enumerate(lines):
            words = line.split()
            stated = words[1:] if words[:1] == [b"ANIMSTEPS"] else []
            if at and lines[at - 1].split()[:1] in ([b"PRIMCOORD"], [b"CONVCOORD"]):
                stated = words
            _refuse_more(name, at, (_whole(stated[0]) if stated else None) or 0, len(lines))


def _whole(word: bytes) -> int | None:
    """A whole number; None for any other word. What has too many digits for a count is simply large."""
    if not _WHOLE.fullmatch(word):
        return None
    digits = word.lstrip(b"0") or b"0"
    return int(digits) if len(digits) <= _LONGEST else 10**_LONGEST


def _refuse_more(name: str, at: int, count: int, lines: int) -> None:
    if count > lines:
        shown = str(count) if count < 10**_LONGEST else f"more than {10.0**_LONGEST:.0e}"
        raise FileError(
            f"{name}: line {at + 1} announces {shown} atoms, but only {lines} lines are there. Correct the count."
        )
