"""Principal values and axes of a symmetric tensor, in the words of the trade."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, frozen


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
