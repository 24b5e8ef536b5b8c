"""Mean field of a probe that is found at several positions with stated weights."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, as_floats, frozen
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.physics.field import LocalField, local_field
from latticedip.sample import Sample


@dataclass(frozen=True, eq=False)
class WeightedField:
    """Averages over positions; a probe that hops fast feels the mean field, one that sits still one of the fields.

    fields: the LocalField of all positions. weights: Shape (n,) float, adding up to 1.
    """

    fields: LocalField
    weights: FloatArray = field(repr=False)

    @cached_property
    def mean_T(self) -> FloatArray:
        """Shape (3,) float in T. Σ w B_total: the field of a probe that moves fast between the positions."""
        return frozen(self.weights @ self.fields.total)

    @cached_property
    def mean_size_T(self) -> float:
        """Σ w |B_total| in T."""
        return float(self.weights @ self.fields.size_T)

    @cached_property
    def rms_size_T(self) -> float:
        """√(Σ w |B_total|²) in T."""
        return float(np.sqrt(self.weights @ self.fields.size_T**2))

    @cached_property
    def rms_deviation_T(self) -> float:
        """√(Σ w |B_total − mean|²) in T: the rms distance of the field vectors from their mean."""
        away = self.fields.total - self.mean_T
        return float(np.sqrt(self.weights @ np.einsum("na,na->n", away, away)))

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        return {
            "weights": self.weights.tolist(),
            "mean_field_T": self.mean_T.tolist(),
            "mean_field_size_T": self.mean_size_T,
            "rms_field_size_T": self.rms_size_T,
            "rms_deviation_T": self.rms_deviation_T,
            "fields": self.fields.to_dict(),
        }


def weighted_field(
    ordering: Ordering,
    positions: Any,
    weights: Any,
    *,
    spread: Any = None,
    moment_spread: Any = None,
    sample: Sample | None = None,
    tol: float = 1e-10,
) -> WeightedField:
    """Fields at positions with weights, and their averages.

    positions: Shape (n, 3) float, fractional in the ordering's own cell, n at least 1. weights: Shape (n,) float, none
    negative, not all zero; only their ratios count. spread, moment_spread, sample, tol: as `local_field`.

    Raises InputError for weights as above, and what `local_field` raises.
    """
    points = as_floats("positions", positions, (None, 3))
    shares = as_floats("weights", weights, (None,))
    if len(points) == 0 or len(shares) != len(points):
        raise InputError(f"weights must hold one number per position, got {len(shares)} for {len(points)} positions.")
    if np.any(shares < 0):
        bad = int(np.argmax(shares < 0))
        raise InputError(f"weights must be at least 0, got {float(shares[bad])} for position {bad + 1}.")
    if not np.any(shares):
        raise InputError("weights are all 0: at least one position must count.")
    shares = shares / shares.max()
    fields = local_field(ordering, points, spread=spread, moment_spread=moment_spread, sample=sample, tol=tol)
    return WeightedField(fields, frozen(shares / shares.sum()))
