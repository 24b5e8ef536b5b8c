"""The Sample: what shape the specimen has, and in which field it sits."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from latticedip.checks import FloatArray, as_float, as_floats, as_unit_vector, frozen
from latticedip.errors import InputError
from latticedip.shapes import cylinder_factors, ellipsoid_factors, prism_factors

#: How far trace, symmetry and principal values of a given tensor may be off.
TENSOR_TOLERANCE = 1e-9
#: How far the rows of an orientation may be from orthonormal.
ORIENTATION_TOLERANCE = 1e-6
#: A body longer than this in proportion is a needle or a plate in every digit.
LARGEST_RATIO = 1e15
#: No applied field is larger (T); a larger number is a slip of units.
LARGEST_FIELD_T = 1e6


@dataclass(frozen=True, eq=False)
class Sample:
    """The specimen: its demagnetizing tensor N and the applied field; frozen, arrays read-only.

    demagnetizing_tensor: Shape (3, 3) float, Cartesian. N in B_demagnetizing = −µ0 N·M: symmetric, trace 1
        and principal values from 0 to 1, or all zero (a domain that closes its flux). None means all zero.
    applied_T: Shape (3,) float in tesla, Cartesian. The applied field.
    shape: the shape in words, for reports.
    uniform: False where N is a volume average (prism, cylinder) and the field differs from point to point;
        a tensor given as such is taken as uniform.

    ``Sample.sphere()``, ``.needle(axis)``, ``.plate(normal)``, ``.ellipsoid(semi_axes)``, ``.prism(edges)``
    and ``.cylinder(diameter, height)`` build one from a shape.

    Raises InputError for a tensor that no body has, for values that are not finite numbers, and for an applied field
    beyond 1e6 T.
    """

    demagnetizing_tensor: Any = None
    applied_T: Any = (0.0, 0.0, 0.0)
    shape: str = field(init=False, default="")
    uniform: bool = field(init=False, default=True)

    def __post_init__(self) -> None:
        if self.demagnetizing_tensor is None:
            tensor, words = np.zeros((3, 3)), "no shape stated (N = 0)"
        else:
            tensor = _checked_tensor(self.demagnetizing_tensor)
            words = "demagnetizing tensor given" + ("" if np.any(tensor) else " as zero (N = 0)")
        object.__setattr__(self, "demagnetizing_tensor", frozen(tensor))
        applied = as_floats("applied_T", self.applied_T, (3,))
        if np.abs(applied).max() > LARGEST_FIELD_T:
            raise InputError(f"applied_T holds {applied.tolist()}, beyond {LARGEST_FIELD_T:g} T. Give it in tesla.")
        object.__setattr__(self, "applied_T", frozen(applied))
        object.__setattr__(self, "shape", words)

    @classmethod
    def sphere(cls, *, applied_T: ArrayLike = (0.0, 0.0, 0.0)) -> Sample:
        """Return a sphere: N = 1/3 in every direction.

        applied_T: Shape (3,) in tesla, Cartesian.
        """
        return cls._of("sphere", np.eye(3) / 3, applied_T)

    @classmethod
    def needle(cls, axis: ArrayLike, *, applied_T: ArrayLike = (0.0, 0.0, 0.0)) -> Sample:
        """Return an endless needle: N = 0 along the axis, 1/2 across.

        axis: Shape (3,) Cartesian, any length but zero. applied_T: Shape (3,) in tesla, Cartesian.
        Raises InputError for a zero axis.
        """
        along = as_unit_vector("axis", axis)
        tensor = (np.eye(3) - np.outer(along, along)) / 2
        return cls._of(f"needle along {_direction(along)}", tensor, applied_T)

    @classmethod
    def plate(cls, normal: ArrayLike, *, applied_T: ArrayLike = (0.0, 0.0, 0.0)) -> Sample:
        """Return an endless plate: N = 1 along the normal, 0 in the plane.

        normal: Shape (3,) Cartesian, any length but zero. applied_T: Shape (3,) in tesla, Cartesian.
        Raises InputError for a zero normal.
        """
        across = as_unit_vector("normal", normal)
        return cls._of(f"plate with normal {_direction(across)}", np.outer(across, across), applied_T)

    @classmethod
    def ellipsoid(
        cls,
        semi_axes: ArrayLike,
        *,
        orientation: ArrayLike | None = None,
        applied_T: ArrayLike = (0.0, 0.0, 0.0),
    ) -> Sample:
        """Return an ellipsoid (Osborn 1945, Stoner 1945).

        semi_axes: Shape (3,) in any unit; only the ratios matter, so whole axes do as well.
        orientation: Shape (3, 3), rows are the directions of the three axes, Cartesian; None: along x, y, z.
        applied_T: Shape (3,) in tesla, Cartesian.
        Raises InputError for a length that is not positive and for rows that are not orthonormal to 1e-6.
        """
        sizes = _sizes("semi_axes", semi_axes)
        turn, words = _turn(orientation)
        name = f"ellipsoid {' × '.join(f'{size:.6g}' for size in sizes)}{words}"
        return cls._of(name, _to_cartesian(ellipsoid_factors(sizes), turn), applied_T)

    @classmethod
    def prism(
        cls, edges: ArrayLike, *, orientation: ArrayLike | None = None, applied_T: ArrayLike = (0.0, 0.0, 0.0)
    ) -> Sample:
        """Return a rectangular prism with its volume-averaged factors (Aharoni 1998); `uniform` is False.

        edges: Shape (3,) in any unit; only the ratios matter.
        orientation: Shape (3, 3), rows are the directions of the three edges, Cartesian; None: along x, y, z.
        applied_T: Shape (3,) in tesla, Cartesian.
        Raises InputError for a length that is not positive and for rows that are not orthonormal to 1e-6.
        """
        sizes = _sizes("edges", edges)
        turn, words = _turn(orientation)
        name = f"prism {' × '.join(f'{size:.6g}' for size in sizes)}{words}"
        return cls._of(name, _to_cartesian(prism_factors(sizes), turn), applied_T, uniform=False)

    @classmethod
    def cylinder(
        cls,
        diameter: float,
        height: float,
        *,
        orientation: ArrayLike | None = None,
        applied_T: ArrayLike = (0.0, 0.0, 0.0),
    ) -> Sample:
        """Return a circular cylinder with its volume-averaged factors (Joseph 1966); `uniform` is False.

        diameter, height: lengths in any unit; only the ratio matters. The height lies along the third axis.
        orientation: Shape (3, 3), rows are the directions of the body's axes, Cartesian; None: along x, y, z.
        applied_T: Shape (3,) in tesla, Cartesian.
        Raises InputError for a length that is not positive and for rows that are not orthonormal to 1e-6.
        """
        diameter, height = _positive("diameter", diameter), _positive("height", height)
        _check_ratio("diameter and height", diameter, height)
        turn, words = _turn(orientation)
        name = f"cylinder, diameter {diameter:.6g}, height {height:.6g}{words}"
        tensor = _to_cartesian(cylinder_factors(diameter, height), turn)
        return cls._of(name, tensor, applied_T, uniform=False)

    @classmethod
    def _of(cls, shape: str, tensor: FloatArray, applied_T: ArrayLike, *, uniform: bool = True) -> Sample:
        sample = cls(demagnetizing_tensor=tensor, applied_T=applied_T)
        object.__setattr__(sample, "shape", shape)
        object.__setattr__(sample, "uniform", uniform)
        return sample

    def to_dict(self) -> dict[str, Any]:
        """Return shape, uniform, demagnetizing_tensor and applied_T (tesla, Cartesian) as a plain dict."""
        return {
            "shape": self.shape,
            "uniform": self.uniform,
            "demagnetizing_tensor": self.demagnetizing_tensor.tolist(),
            "applied_T": self.applied_T.tolist(),
        }


def _checked_tensor(value: Any) -> FloatArray:
    tensor = as_floats("demagnetizing_tensor", value, (3, 3))
    if not np.any(tensor):
        return tensor
    i, j = (int(index) for index in np.unravel_index(np.argmax(np.abs(tensor)), (3, 3)))
    if abs(tensor[i, j]) > 1 + TENSOR_TOLERANCE:
        raise InputError(
            f"demagnetizing_tensor must have elements between -1 and 1, got {float(tensor[i, j])!r} "
            f"in row {i + 1}, column {j + 1}. Give N for SI units (trace 1), not 4πN."
        )
    i, j = (int(index) for index in np.unravel_index(np.argmax(np.abs(tensor - tensor.T)), (3, 3)))
    if abs(tensor[i, j] - tensor[j, i]) > TENSOR_TOLERANCE:
        raise InputError(
            f"demagnetizing_tensor must be symmetric, got {float(tensor[i, j])!r} in row {i + 1}, "
            f"column {j + 1} but {float(tensor[j, i])!r} in row {j + 1}, column {i + 1}."
        )
    trace = float(np.trace(tensor))
    if abs(trace - 1) > TENSOR_TOLERANCE:
        raise InputError(f"demagnetizing_tensor must have trace 1 (or be all zero), got trace {trace:.12g}.")
    tensor = (tensor + tensor.T) / 2
    principal = np.linalg.eigvalsh(tensor)
    if principal[0] < -TENSOR_TOLERANCE or principal[-1] > 1 + TENSOR_TOLERANCE:
        listed = ", ".join(f"{value:.6g}" for value in principal)
        raise InputError(f"demagnetizing_tensor must have principal values between 0 and 1, got {listed}.")
    return tensor


def _sizes(name: str, value: ArrayLike) -> tuple[float, float, float]:
    array = as_floats(name, value, (3,))
    if np.any(array <= 0):
        bad = int(np.flatnonzero(array <= 0)[0])
        raise InputError(f"{name} must be positive lengths, got {float(array[bad])!r} as number {bad + 1}.")
    first, second, third = (float(size) for size in array)
    _check_ratio(name, first, second, third)
    return first, second, third


def _positive(name: str, value: Any) -> float:
    number = as_float(name, value)
    if number <= 0:
        raise InputError(f"{name} must be a positive length, got {number!r}.")
    return number


def _check_ratio(name: str, *sizes: float) -> None:
    if max(sizes) / LARGEST_RATIO > min(sizes):
        listed = ", ".join(f"{size:.6g}" for size in sizes)
        raise InputError(
            f"{name}: the lengths {listed} differ by more than a factor of {LARGEST_RATIO:.0e}. "
            "Use a plate or a needle for such a body."
        )


def _turn(orientation: ArrayLike | None) -> tuple[FloatArray, str]:
    """Return the body's axes as orthonormal rows, and the words a report adds for them."""
    if orientation is None:
        return np.eye(3), ""
    rows = as_floats("orientation", orientation, (3, 3))
    # The size is looked at first: the products below must not overflow.
    off = np.inf if np.abs(rows).max() > 2 else float(np.abs(rows @ rows.T - np.eye(3)).max())
    if off > ORIENTATION_TOLERANCE:
        raise InputError(
            "orientation must hold the directions of the body's axes as rows, Cartesian, each of length 1 "
            f"and at right angles to the others (to {ORIENTATION_TOLERANCE:.0e}), got {rows.tolist()}."
        )
    # The nearest orthonormal rows (polar decomposition). Their hand is free: reversing an axis keeps N.
    left, _, right = np.linalg.svd(rows)
    turn = np.asarray(left @ right)
    return turn, ", body axes " + ", ".join(_direction(row) for row in turn)


def _to_cartesian(factors: Sequence[float], turn: FloatArray) -> FloatArray:
    """Return Oᵀ diag(factors) O, symmetric to the last digit."""
    tensor = turn.T @ np.diag(factors) @ turn
    return np.asarray((tensor + tensor.T) / 2)


def _direction(vector: FloatArray) -> str:
    # Adding zero turns −0 into 0 after rounding.
    return "(" + ", ".join(f"{round(float(x), 6) + 0.0:.6g}" for x in vector) + ")"
