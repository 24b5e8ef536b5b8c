"""Typed access to the values of a study file, each with its path, so that every refusal names its key.

Items of a list are counted from 1: `ordering[2].signs.Mn1` is the key Mn1 of the second [[ordering]].
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

from latticedip.checks import FloatArray, as_floats
from latticedip.errors import LatticedipError, StudyError, near_match

_BARE = re.compile(r"[A-Za-z0-9_-]+")
_FRACTION = re.compile(r"\s*([+-]?\d{1,9})\s*/\s*(\d{1,9})\s*")
#: Longer values are cut in messages.
SHOWN_CHARACTERS = 60


@dataclass(frozen=True)
class Key:
    """One value of a study file: the file as the user named it, the path of the key, the value as TOML gives it."""

    file: str
    path: str
    value: Any

    def refuse(self, message: str) -> StudyError:
        """The error "FILE: `path`: message"."""
        return StudyError(f"{self.file}: `{self.path}`: {message}" if self.path else f"{self.file}: {message}")

    def expected(self, what: str, hint: str = "") -> StudyError:
        """The error that says which value was found and what was expected."""
        return self.refuse(f"got {shown(self.value)}, expected {what}.{hint}")

    @contextmanager
    def located(self) -> Iterator[None]:
        """Give the path of this key to every error of this program that is raised inside."""
        try:
            yield
        except StudyError:
            raise
        except LatticedipError as error:
            raise self.refuse(str(error)) from None

    # Tables

    def table(self, allowed: Sequence[str] | None = None, header: str = "") -> dict[str, Key]:
        """The keys of a table; unknown ones are refused where the allowed ones are given."""
        if not isinstance(self.value, dict):
            raise self.expected(header or "a table")
        children = {name: Key(self.file, self._child_path(name), value) for name, value in self.value.items()}
        for name, child in children.items():
            if allowed is not None and name not in allowed:
                known = ", ".join(allowed)
                raise child.refuse(f"unknown key; known here are {known}.{near_match(name, allowed)}")
        return children

    def missing(self, name: str, what: str) -> StudyError:
        """The error for a key that this table needs and does not have."""
        return StudyError(f"{self.file}: `{self._child_path(name)}`: missing, expected {what}.")

    def _child_path(self, name: str) -> str:
        step = name if _BARE.fullmatch(name) else json.dumps(name, ensure_ascii=False)
        return f"{self.path}.{step}" if self.path else step

    # Lists

    def items(self, what: str) -> list[Key]:
        """The items of a list, counted from 1."""
        if not isinstance(self.value, list):
            raise self.expected(what)
        return [Key(self.file, f"{self.path}[{i}]", value) for i, value in enumerate(self.value, start=1)]

    # Single values

    def text(self, what: str) -> str:
        """A string that is not blank and holds no control characters."""
        if not isinstance(self.value, str) or not self.value.strip() or not self.value.isprintable():
            raise self.expected(what)
        return self.value

    def one_of(self, choices: Sequence[str]) -> str:
        """One of a few words."""
        if self.value not in choices:
            hint = near_match(self.value, choices) if isinstance(self.value, str) else ""
            raise self.expected(" or ".join(json.dumps(choice) for choice in choices), hint)
        return str(self.value)

    def number(self, what: str, *, low: float = -math.inf, above: float = -math.inf, high: float = math.inf) -> float:
        """A finite number, at least ``low``, larger than ``above`` and at most ``high``."""
        if isinstance(self.value, bool) or not isinstance(self.value, (int, float)):
            raise self.expected(what)
        try:
            number = float(self.value)
        except OverflowError:
            raise self.expected(what) from None
        if not math.isfinite(number) or not low <= number <= high or number <= above:
            raise self.expected(what)
        return number

    def whole(self, what: str, *, low: int = 1) -> int:
        """A whole number, at least ``low``."""
        if isinstance(self.value, bool) or not isinstance(self.value, int) or self.value < low:
            raise self.expected(what)
        return self.value

    def coordinate(self, what: str) -> float:
        """A finite number, or a fraction written as a string, "1/3"."""
        if not isinstance(self.value, str):
            return self.number(what)
        parts = _FRACTION.fullmatch(self.value)
        if parts is None or int(parts[2]) == 0:
            raise self.expected(what)
        return int(parts[1]) / int(parts[2])

    def numbers(self, n: int, what: str, *, above: float = -math.inf, fractions: bool = False) -> list[float]:
        """A list of n finite numbers, each larger than ``above``; with ``fractions`` also "1/3"."""
        items = self.items(what)
        if len(items) != n:
            raise self.expected(what)
        if fractions:
            return [item.coordinate('a finite number or a fraction such as "1/3"') for item in items]
        kind = "a finite number" if above == -math.inf else f"a number larger than {above:g}"
        return [item.number(kind, above=above) for item in items]

    def direction(self, what: str) -> list[float]:
        """Three finite numbers that are not all zero."""
        vector = self.numbers(3, what)
        if not any(vector):
            raise self.refuse(f"got {shown(self.value)}, which has no direction; expected {what}.")
        return vector

    def matrix(self, what: str) -> FloatArray:
        """Shape (3, 3) float, from three lists of three finite numbers."""
        rows = self.items(what)
        if len(rows) != 3:
            raise self.expected(what)
        return as_floats("matrix", [row.numbers(3, "three numbers") for row in rows], (3, 3))

    def true(self) -> None:
        """The value true; a switch that is off is left out."""
        if self.value is not True:
            raise self.expected("true (leave the key out otherwise)")


def shown(value: Any) -> str:
    """A value as TOML writes it, cut to 60 characters."""
    text = _toml(value)
    return text if len(text) <= SHOWN_CHARACTERS else text[: SHOWN_CHARACTERS - 3] + "..."


def _toml(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, int):
        # Python refuses to write out whole numbers of thousands of digits.
        return str(value) if abs(value) < 10**50 else "a whole number of more than 50 digits"
    if isinstance(value, list):
        return "[" + ", ".join(_toml(item) for item in value) + "]"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{name} = {_toml(item)}" for name, item in value.items()) + "}"
    return str(value)
