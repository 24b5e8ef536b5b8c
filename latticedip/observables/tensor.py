"""Tensors at a probe in their parts; principal values and axes of a symmetric tensor, in the words of the trade."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, TypeVar

import numpy as np

from latticedip.checks import FloatArray, frozen


@dataclass(frozen=True, eq=False, kw_only=True)
class ProbeTensor:
    """What every tensor at a probe that comes in parts has; all parts of one unit, Cartesian, Shape (3, 3) each.

    position: Shape (3,) fractional. site: label of the atom the position is on, empty where it is on none.
    dipolar: Lorentz-sphere sum. lorentz, demagnetizing: of the magnetization. contact: of the contact couplings.
    boundary: the boundary assumed, in words. notes: sentences a report must repeat.
    steps: Shape (m, 3, 3). Changes by one standard uncertainty of each of m independent parameters.
    """

    position: FloatArray
    site: str
    dipolar: FloatArray
    lorentz: FloatArray
    demagnetizing: FloatArray
    contact: FloatArray
    boundary: str
    notes: tuple[str, ...] = field(default=(), repr=False)
    steps: FloatArray = field(default_factory=lambda: np.zeros((0, 3, 3)), repr=False)


AnyProbeTensor = TypeVar("AnyProbeTensor", bound=ProbeTensor)


def mean_tensor(found: Sequence[AnyProbeTensor], weights: FloatArray) -> AnyProbeTensor:
    """The first of the tensors of a probe at several positions, with the mean of all in dipolar, contact and steps.

    weights: Shape (n,) float, adding up to 1. Lorentz and demagnetizing parts are the same at every position; the steps
    must be those of the same parameters. The notes are those of all, each once.
    """
    return dataclasses.replace(
        found[0],
        site="",
        dipolar=frozen(np.einsum("n,nab->ab", weights, [one.dipolar for one in found])),
        contact=frozen(np.einsum("n,nab->ab", weights, [one.contact for one in found])),
        steps=frozen(np.einsum("n,nmab->mab", weights, [one.steps for one in found])),
        notes=tuple(dict.fromkeys(note for one in found for note in one.notes)),
    )


@dataclass(frozen=True, eq=False)
class PrincipalFrame:
    """Eigenvalues and axes of the symmetric part of a tensor, ordered as Haeberlen does (1976).

    values: Shape (3,) float, xx, yy, zz with |zz − iso| ≥ |xx − iso| ≥ |yy − iso|; same unit as the tensor.
    axes: Shape (3, 3) float. Rows are the unit vectors, Cartesian, a right-handed set. Where two values are equal the
        axes between them are arbitrary.
    zero: differences up to this are none (the accuracy of the tensor).
    """

    values: FloatArray
    axes: FloatArray
    zero: float = 0.0

    @property
    def isotropic(self) -> float:
        """A third of the trace."""
        return float(self.values.mean())

    @property
    def anisotropy(self) -> float:
        """zz − (xx + yy)/2, with its sign; 3/2 of the reduced anisotropy zz − iso."""
        return float(self.values[2] - (self.values[0] + self.values[1]) / 2)

    @property
    def asymmetry(self) -> float:
        """η = (yy − xx)/(zz − iso), 0 (axial) to 1; 0 where the tensor is isotropic within its accuracy."""
        reduced = self.values[2] - self.isotropic
        if abs(reduced) <= self.zero:
            return 0.0
        difference = float(self.values[1] - self.values[0])
        return 0.0 if abs(difference) <= self.zero else float(np.clip(difference / reduced, 0.0, 1.0))

    def changes(self, steps: FloatArray) -> FloatArray:
        """Shape (m, 3) float. First-order changes of the values by changes (m, 3, 3) of the tensor.

        Where values are equal within `zero` (or a part in 10⁹ of the largest), that of their mean: it does not depend
        on the axes chosen between them.
        """
        each = np.einsum("ia,mab,ib->mi", self.axes, steps, self.axes)
        slack = max(self.zero, 1e-9 * float(np.abs(self.values).max()))
        equal = np.abs(self.values[:, None] - self.values) <= slack
        return np.asarray(each @ (equal / equal.sum(axis=0)))

    def to_dict(self) -> dict[str, Any]:
        """Plain dict of values, axes, isotropic part, anisotropy and asymmetry."""
        return {
            "principal_values": self.values.tolist(),
            "principal_axes": self.axes.tolist(),
            "isotropic": self.isotropic,
            "anisotropy": self.anisotropy,
            "asymmetry": self.asymmetry,
        }


def principal_frame(tensor: FloatArray, zero: float = 0.0) -> PrincipalFrame:
    """Principal frame of the symmetric part of a (3, 3) tensor.

    zero: differences of principal values up to this count as none (the accuracy of the tensor).
    """
    values, vectors = np.linalg.eigh((tensor + tensor.T) / 2)
    size = np.abs(values - values.mean())
    # eigh sorts ascending: the largest deviation is at one end, the smallest in the middle.
    order = [0, 1, 2] if size[2] >= size[0] else [2, 1, 0]
    axes = vectors.T[order]
    # The sign of an eigenvector is free: its largest component is made positive, then the set right-handed.
    for axis in axes:
        axis *= np.sign(axis[int(np.argmax(np.abs(np.round(axis, 9))))])
    if np.linalg.det(axes) < 0:
        axes[1] *= -1
    return PrincipalFrame(frozen(values[order]), frozen(axes), zero)


def added(steps: FloatArray) -> FloatArray:
    """Standard uncertainties of what m independent parameters change by steps (m, ...); NaN where there are none."""
    if not len(steps):
        return np.full(steps.shape[1:], np.nan)
    return np.asarray(np.sqrt(np.sum(steps**2, axis=0)))


def known(su: FloatArray) -> list[Any] | None:
    """Standard uncertainties as plain lists, None where none is known."""
    return None if np.any(np.isnan(su)) else su.tolist()
