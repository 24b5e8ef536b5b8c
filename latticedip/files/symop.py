"""Symmetry operations and changes of cell as CIFs write them, read by a grammar of their own.

    expression := term { ("+" | "-") term }      (the first term may carry a sign)
    term       := number [ "*" ] variable | variable [ ("*" | "/") number ] | number
    number     := digits [ "." digits ] [ "/" digits ]

Text from a file is data: nothing here evaluates it.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from latticedip.checks import FloatArray
from latticedip.errors import InputError

#: Longer texts than this are no operation.
MAX_LENGTH = 300
#: Decimals with three digits or more are taken as the fraction with the smallest denominator up to this one.
LARGEST_DENOMINATOR = 24
#: Larger coefficients and translations (cells) than this are slips.
LARGEST = 1000

_NUMBER = r"(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:/[0-9]+(?:\.[0-9]*)?)?"


@dataclass(frozen=True, eq=False)
class Operation:
    """x' = R x + t in fractional coordinates, with time reversal.

    rotation: Shape (d, d) int. translation: Shape (d,) float, as written. time: +1, −1, or 0 where not stated.
    d is 3, or 4 in superspace.
    """

    rotation: np.ndarray
    translation: FloatArray
    time: int
    text: str

    @property
    def axial(self) -> np.ndarray:
        """Shape (3, 3) int. θ det(R) R: how the lattice components of a moment change."""
        return np.asarray(self.time * round(np.linalg.det(self.rotation)) * self.rotation)


def parse_operation(text: str, *, time: bool) -> Operation:
    """Read ``-x+1/2,y,-z`` or, with ``time``, ``-x+1/2,y,-z,-1``.

    Raises InputError (what is wrong with the text) where it does not follow the grammar, where the rotation is not
    a matrix of whole numbers with determinant ±1, and where time reversal is missing, or is given unasked.
    """
    parts = _split(text, ",")
    reversal = 0
    if time:
        if len(parts) == 3:
            raise InputError("its fourth part, time reversal +1 or -1, is missing")
        if len(parts) != 4:
            raise InputError(f"it has {len(parts)} parts, not x, y, z and time reversal")
        reversal = _reversal(parts[3])
    elif len(parts) != 3:
        raise InputError(f"it has {len(parts)} parts, not 3")
    return _operation(parts[:3], ("x", "y", "z"), reversal, text)


def parse_superspace_operation(text: str) -> Operation:
    """Read ``-x1+1/2,x2,-x3,-x4+1/2,-1``: an operation of (3+1)D superspace with time reversal, rotation (4, 4).

    Parts may be separated by blanks alone. Raises InputError as `parse_operation` does, and where x1, x2 or x3 would
    become a mixture with x4, or x4 other than ±x4 plus whole numbers of x1, x2, x3.
    """
    parts = _split(text if "," in text else ",".join(text.split()), ",")
    if len(parts) == 4:
        raise InputError("it has 4 parts, not x1, x2, x3, x4 and time reversal +1 or -1")
    if len(parts) != 5:
        raise InputError(f"it has {len(parts)} parts, not x1, x2, x3, x4 and time reversal")
    operation = _operation(parts[:4], ("x1", "x2", "x3", "x4"), _reversal(parts[4]), text)
    if np.any(operation.rotation[:3, 3]) or abs(operation.rotation[3, 3]) != 1:
        raise InputError("x4 must become x4 or -x4, and must not enter the parts of x1, x2, x3")
    return operation


def _reversal(text: str) -> int:
    if text not in ("+1", "1", "-1"):
        raise InputError(f"its time reversal is {text!r}, not +1 or -1")
    return -1 if text == "-1" else 1


def _operation(parts: list[str], variables: tuple[str, ...], reversal: int, text: str) -> Operation:
    rows = [parse_expression(part, variables) for part in parts]
    whole = all(c.denominator == 1 and abs(c) <= LARGEST for row in rows for c in row[:-1])
    rotation = np.array([[int(c) for c in row[:-1]] for row in rows]) if whole else np.zeros((1, 1), dtype=np.int64)
    if abs(round(np.linalg.det(rotation))) != 1:
        raise InputError("its rotation part is not a matrix of whole numbers with determinant 1 or -1")
    if any(abs(row[-1]) > LARGEST for row in rows):
        raise InputError(f"its translation is longer than {LARGEST} cells")
    return Operation(rotation, np.array([float(row[-1]) for row in rows]), reversal, text)


def parse_moment_image(text: str) -> np.ndarray:
    """Shape (3, 3) float. The matrix that ``-mx,my,-mz`` means; raises InputError where it does not parse."""
    parts = _split(text, ",")
    if len(parts) != 3:
        raise InputError(f"it has {len(parts)} parts, not 3")
    rows = [parse_expression(part, ("mx", "my", "mz")) for part in parts]
    if any(row[3] != 0 for row in rows):
        raise InputError("a moment has no translation")
    return np.array([[float(c) for c in row[:3]] for row in rows])


def parse_transform(text: str) -> tuple[FloatArray, FloatArray]:
    """Read a change of cell such as ``a-b,a+b,2c;1/4,0,0``: new vectors in terms of the old, then the origin shift.

    Returns P (3, 3) whose columns give the new vectors and p (3,), so that (a', b', c') = (a, b, c) P and
    x = P x' + p. A comma may stand for the semicolon, and a missing shift is zero.

    Raises InputError where the text does not follow the grammar or where the new vectors span no volume.
    """
    halves = text.split(";")
    parts = [part for half in halves for part in _split(half, ",")]
    if len(parts) not in (3, 6) or len(halves) > 2 or (len(halves) == 2 and len(_split(halves[0], ",")) != 3):
        raise InputError("it is not of the form 'a,b,c;0,0,0'")
    vectors = [parse_expression(part, ("a", "b", "c")) for part in parts[:3]]
    shift = [parse_expression(part, ()) for part in parts[3:]] or [(Fraction(0),)] * 3
    if any(vector[3] != 0 for vector in vectors):
        raise InputError("a cell vector holds a bare number")
    matrix = np.array([[float(c) for c in vector[:3]] for vector in vectors]).T
    if abs(np.linalg.det(matrix)) < 1e-9:
        raise InputError("its vectors span no volume")
    return matrix, np.array([float(row[0]) for row in shift])


def parse_vector(text: str) -> FloatArray:
    """Shape (3,) float. ``1/2,1/2,0``, ``[0.5 0.5 0]`` and the like; raises InputError where it does not parse."""
    if len(text) > MAX_LENGTH:
        raise InputError(f"it is longer than {MAX_LENGTH} characters")
    parts = re.sub(r"\([0-9]+\)", "", text.strip().strip("[]()")).replace(",", " ").split()
    if len(parts) != 3:
        raise InputError(f"it has {len(parts)} parts, not 3")
    return np.array([float(parse_expression(part, ())[0]) for part in parts])


def _split(text: str, separator: str) -> list[str]:
    if len(text) > MAX_LENGTH:
        raise InputError(f"it is longer than {MAX_LENGTH} characters")
    return ["".join(part.split()).lower() for part in text.strip().strip("'\"").split(separator)]


def parse_expression(text: str, variables: tuple[str, ...]) -> tuple[Fraction, ...]:
    """Coefficients of the variables, then the constant. Raises InputError where the text is no such sum."""
    names = "|".join(variables) if variables else r"(?!)"
    term = re.compile(
        rf"(?P<sign>[+-]?)(?:(?P<before>{_NUMBER})\*?(?P<first>{names})|(?P<second>{names})(?:(?P<how>[*/])(?P<after>{_NUMBER}))?"
        rf"|(?P<constant>{_NUMBER}))"
    )
    totals = [Fraction(0)] * (len(variables) + 1)
    position = 0
    while position < len(text):
        match = term.match(text, position)
        if match is None or (position > 0 and not match["sign"]):
            raise InputError(f"{text!r} is not understood from {text[position:]!r} on")
        sign = -1 if match["sign"] == "-" else 1
        if match["constant"] is not None:
            totals[-1] += sign * _number(match["constant"], text)
        else:
            name = match["first"] or match["second"]
            factor = Fraction(1)
            if match["before"] is not None:
                factor = _number(match["before"], text)
            elif match["after"] is not None:
                factor = _number(match["after"], text)
                if match["how"] == "/":
                    if factor == 0:
                        raise InputError(f"{text!r} divides by zero")
                    factor = 1 / factor
            totals[variables.index(name)] += sign * factor
        position = match.end()
    if position == 0:
        raise InputError("one of its parts is empty")
    return tuple(totals)


def _number(text: str, whole: str) -> Fraction:
    numerator, _, denominator = text.partition("/")
    value = _decimal(numerator)
    if denominator:
        divisor = _decimal(denominator)
        if divisor == 0:
            raise InputError(f"{whole!r} divides by zero")
        value /= divisor
    return value


def _decimal(text: str) -> Fraction:
    """A decimal; one of three digits or more that rounds (or cuts off) a simple fraction becomes that fraction."""
    exact = Fraction(text.rstrip(".") or "0")
    digits = len(text.partition(".")[2])
    if digits >= 3:
        allowed = Fraction(7, 10 ** (digits + 1))
        for denominator in range(1, LARGEST_DENOMINATOR + 1):
            near = Fraction(round(exact * denominator), denominator)
            if abs(near - exact) <= allowed and (near != 0 or exact == 0):
                return near
    return exact
