"""Every error a user can meet, with one base class.

A message says what is wrong, where (file, item, value) and what to do. Children also inherit the fitting
builtin, so ``except ValueError`` works, and keep their whole message in ``args``, so they survive pickling.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class LatticedipError(Exception):
    """Base of all errors that latticedip raises on purpose."""


class InputError(LatticedipError, ValueError):
    """A value, an array or an argument is not usable."""


class FileError(InputError):
    """A structure or ordering file cannot be read without guessing, or not written."""


class StudyError(InputError):
    """A study file holds a key or a value that is not allowed."""


class AccuracyError(LatticedipError, ArithmeticError):
    """A lattice sum cannot keep the error bound it was asked for."""


class LimitError(LatticedipError, MemoryError):
    """The request is larger than this program takes on; raised before memory is used."""


def near_match(word: str, known: Iterable[str]) -> str:
    """Return `` Did you mean 'x'?`` for the closest known word, or an empty string."""
    by_folded = {name.casefold(): name for name in known}
    close = difflib.get_close_matches(word.casefold(), list(by_folded), n=1, cutoff=0.6)
    return f" Did you mean {by_folded[close[0]]!r}?" if close else ""
