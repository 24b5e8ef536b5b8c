"""Directions in a crystal as a user writes them: "a", "b*", or components along a, b, c."""

from __future__ import annotations

import re

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError, LatticedipError
from latticedip.ordering.patterns import unit_direction

_WORDS = 'a crystal direction: a, b, c, a*, b*, c*, or three components along the axes a, b, c, such as "1 1 0"'


def named_directions(crystal: Crystal) -> dict[str, FloatArray]:
    """Cartesian unit vectors along the axes a, b, c of a crystal and along its reciprocal axes a*, b*, c*."""
    reciprocal = np.linalg.inv(crystal.cell).T
    named = {axis: crystal.cell[i] for i, axis in enumerate("abc")}
    named |= {f"{axis}*": reciprocal[i] for i, axis in enumerate("abc")}
    return {name: np.asarray(vector / np.linalg.norm(vector)) for name, vector in named.items()}


def direction_of(crystal: Crystal, text: str, option: str) -> FloatArray:
    """Shape (3,) float. Cartesian unit vector of a direction written on the command line; option: what it was for.

    Components count along unit vectors parallel to a, b, c, as `along` in a study; blanks or commas part them and
    brackets may go round them.

    Raises InputError for anything else, and for the zero direction.
    """
    named = named_directions(crystal)
    if text.strip() in named:
        return named[text.strip()]
    parts = [part for part in re.split(r"[\s,]+", text.strip().strip("[]()")) if part]
    try:
        components = [float(part) for part in parts]
    except ValueError:
        components = []
    if len(components) != 3:
        raise InputError(f"{option}: got {text!r}, expected {_WORDS}.")
    try:
        return unit_direction(crystal, components)
    except LatticedipError as error:
        raise InputError(f"{option}: got {text!r}: {error}") from None
