"""Mean field of a probe that is found at several positions with stated weights."""

from __future__ import annotations

from collections.abc import Sequence
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
    rows: Shape (n,) int. The rows of ``fields`` that the weights belong to; None: all of them.
    """

    fields: LocalField
    weights: FloatArray = field(repr=False)
    rows: np.ndarray | None = field(default=None, repr=False)

    @cached_property
    def vectors_T(self) -> FloatArray:
        """Shape (n, 3) float in T. The total field at each position."""
        return self.fields.total if self.rows is None else frozen(self.fields.total[self.rows])

    @cached_property
    def sizes_T(self) -> FloatArray:
        """Shape (n,) float in T. |B_total| at each position."""
        return self.fields.size_T if self.rows is None else frozen(self.fields.size_T[self.rows])

    @cached_property
    def mean_T(self) -> FloatArray:
        """Shape (3,) float in T. Σ w B_total: the field of a probe that moves fast between the positions."""
        return frozen(self.weights @ self.vectors_T)

    @cached_property
    def mean_size_T(self) -> float:
        """Σ w |B_total| in T."""
        return float(self.weights @ self.sizes_T)

    @cached_property
    def rms_size_T(self) -> float:
        """√(Σ w |B_total|²) in T."""
        return float(np.sqrt(self.weights @ self.sizes_T**2))

    @cached_property
    def rms_deviation_T(self) -> float:
        """√(Σ w |B_total − mean|²) in T: the rms distance of the field vectors from their mean."""
        away = self.vectors_T - self.mean_T
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
    shares = normalized_weights(shares)
    fields = local_field(ordering, points, spread=spread, moment_spread=moment_spread, sample=sample, tol=tol)
    return WeightedField(fields, shares)


def normalized_weights(weights: Any) -> FloatArray:
    """Shape (n,) float. Weights as stated, made to add up to 1.

    Raises InputError where one is negative or all are zero.
    """
    shares = as_floats("weights", weights, (None,))
    if np.any(shares < 0):
        bad = int(np.argmax(shares < 0))
        raise InputError(f"weights must be at least 0, got {float(shares[bad])} for position {bad + 1}.")
    if not np.any(shares):
        raise InputError("weights are all 0: at least one position must count.")
    # Divided by the largest first, so that the sum stays finite.
    shares = shares / shares.max()
    return frozen(shares / shares.sum())


def weighted_rows(fields: LocalField, names: Sequence[str], weights: FloatArray) -> list[WeightedField]:
    """The averages over probes at positions, one for each copy of them in the ordering's own cell.

    fields: of these probes among others. names: of the probes, each at a position. weights: Shape (n,) float, adding up
    to 1.

    In an ordering with a cell of its own a position has as many copies as that cell has cells of the reference crystal,
    and the field may differ between them. A copy of the first position goes with those of the others that lie from it
    as the positions lie from each other: a probe moves between these.
    """
    rows = [np.array([i for i, other in enumerate(fields.probe_names) if other == name]) for name in names]
    ordering = fields.ordering
    turn = np.eye(3) if ordering.reference is None else np.linalg.inv(ordering.reference.transform.P)
    copies = []
    for first in rows[0]:
        chosen = []
        for others in rows:
            apart = turn @ (fields.reference_points[others[0]] - fields.reference_points[rows[0][0]])
            gaps = fields.points[others] - fields.points[first] - apart
            if len(others) > 1:
                gaps = gaps - np.round(gaps)
            distance = np.linalg.norm(gaps @ fields.crystal.cell, axis=1)
            chosen.append(int(others[int(np.argmin(distance))]))
        copies.append(WeightedField(fields, frozen(weights), frozen(np.array(chosen))))
    return copies
