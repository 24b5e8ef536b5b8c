"""The one gate for arrays and numbers that come from a user."""

from __future__ import annotations

import numbers
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from latticedip.errors import InputError

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

TOL_MIN, TOL_MAX = 1e-12, 1e-2


def frozen(array: NDArray[Any]) -> NDArray[Any]:
    """Return a read-only, C-contiguous copy of an array."""
    copy = np.array(array, order="C", copy=True)
    copy.flags.writeable = False
    return copy


def as_floats(name: str, value: ArrayLike, shape: Sequence[int | None]) -> FloatArray:
    """Return a finite float array of the given shape (None: any length).

    Raises InputError naming the argument when the value is not numeric, has another shape or is not finite.
    """
    return _as_numbers(name, value, shape, np.dtype(np.float64))


def as_complex(name: str, value: ArrayLike, shape: Sequence[int | None]) -> ComplexArray:
    """Return a finite complex array of the given shape (None: any length); errors as `as_floats`."""
    return _as_numbers(name, value, shape, np.dtype(np.complex128))


def _as_numbers(name: str, value: ArrayLike, shape: Sequence[int | None], dtype: np.dtype[Any]) -> NDArray[Any]:
    try:
        raw = np.asarray(value)
    except ValueError as error:
        raise InputError(f"{name} is not a rectangular array of numbers ({error}).") from None
    if raw.dtype.kind not in "biufc" or (raw.dtype.kind == "c" and dtype.kind == "f"):
        raise InputError(f"{name} must hold {'real ' if dtype.kind == 'f' else ''}numbers, got {_brief(value)}.")
    if raw.ndim != len(shape) or any(
        want is not None and want != got for want, got in zip(shape, raw.shape, strict=True)
    ):
        wanted = "(" + ", ".join("n" if want is None else str(want) for want in shape) + ")"
        raise InputError(f"{name} must have shape {wanted}, got {raw.shape}.")
    array = np.array(raw, dtype=dtype, order="C")
    if not np.all(np.isfinite(array)):
        where = tuple(int(i) for i in np.argwhere(~np.isfinite(array))[0])
        raise InputError(f"{name} holds a value that is not finite: {array[where]} at index {where}.")
    return array


def as_float(name: str, value: Any, *, low: float | None = None, high: float | None = None) -> float:
    """Return a finite float within [low, high]; raises InputError naming the argument otherwise."""
    if isinstance(value, bool) or not isinstance(value, numbers.Real) or not np.isfinite(float(value)):
        raise InputError(f"{name} must be a finite number, got {_brief(value)}.")
    number = float(value)
    if (low is not None and number < low) or (high is not None and number > high):
        raise InputError(f"{name} must lie between {low} and {high}, got {number!r}.")
    return number


def check_tol(tol: float) -> float:
    """Return tol as a float; raises InputError outside 1e-12 ≤ tol ≤ 1e-2."""
    return as_float("tol", tol, low=TOL_MIN, high=TOL_MAX)


def as_unit_vector(name: str, value: ArrayLike) -> FloatArray:
    """Return a Cartesian direction scaled to length one; raises InputError when it is zero."""
    vector = as_floats(name, value, (3,))
    largest = float(np.abs(vector).max())
    if largest == 0.0:
        raise InputError(f"{name} is the zero vector, which has no direction.")
    vector = vector / largest
    return np.asarray(vector / np.linalg.norm(vector))


def check_cell(name: str, value: ArrayLike, pbc: Sequence[bool] = (True, True, True)) -> FloatArray:
    """Return a (3, 3) cell (rows are vectors, Å) whose periodic vectors are linearly independent.

    Raises InputError when it is not, or when a length is not between 1e-2 and 1e6 Å.
    """
    cell = as_floats(name, value, (3, 3))
    periodic = cell[np.asarray(pbc, dtype=bool)]
    with np.errstate(over="ignore"):  # a length that overflows is infinite, and refused as such
        lengths = np.linalg.norm(periodic, axis=1)
    if np.any(lengths < 1e-2) or np.any(lengths > 1e6):
        raise InputError(f"{name}: cell vectors must be 0.01 to 1e6 Å long, got lengths {lengths.tolist()}.")
    if len(periodic):
        smallest = np.linalg.svd(periodic / lengths[:, None], compute_uv=False).min()
        if smallest < 1e-8:
            raise InputError(f"{name}: the cell vectors are linearly dependent (volume zero): {cell.tolist()}.")
    return cell


def _brief(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."
