"""The field at a point in all cells under one wave: an ellipse.

With one k the field at r in the cell at R is B_0 + Re[F exp(−iφ)], φ = 2π k·R. Over all phases it runs round the
ellipse B_0 + Re F cos φ + Im F sin φ, whose half axes are the conjugate diameters Re F, Im F made perpendicular. A k
that never repeats takes every phase alike; a commensurate one a finite number of them.

|B|² is a trigonometric polynomial of second degree in φ: with w = exp(−iφ), p = 2 B_0·F and q = F·F / 2 it is
const + Re[p w + q w²], stationary at the roots of 2 q w⁴ + p w³ − p* w − 2 q* that lie on the unit circle.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_floats, frozen
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering, is_self_conjugate
from latticedip.ordering.phases import phase_space
from latticedip.physics.field import LocalField, local_field
from latticedip.sample import Sample

#: Sizes that differ by less than this part of the largest are one level: six digits are printed.
SAME_FIELD = 1e-6
#: Below this ratio of q to p the two roots on the unit circle follow from p alone, as a start for Newton's steps.
SMALL_RATIO = 1e-6


@dataclass(frozen=True, eq=False)
class FieldLevel:
    """Fields of one size at a point: |B| in T and the share of the cells that have it."""

    field_T: float
    share: float


@dataclass(frozen=True, eq=False)
class FieldEllipse:
    """Fields at points in all cells of one ordering; one row per point, Cartesian, in tesla.

    home: the field in the home cell (φ = 0), with its parts, points, probe names and notes.
    k: Shape (3,) float, the wave vector; zero where the ordering has none.
    centre: Shape (n, 3) float, B_0. amplitude: Shape (n, 3) complex, F.
    turns: Shape (m,) float. The phases φ/2π that occur where k is commensurate, equally often; None where every phase
        does.
    """

    home: LocalField
    k: FloatArray
    centre: FloatArray
    amplitude: ComplexArray
    turns: FloatArray | None

    @property
    def is_commensurate(self) -> bool:
        """True where a finite number of cells shows every field."""
        return self.turns is not None

    @property
    def error_bound_T(self) -> FloatArray:
        """Shape (n,) float. Bound of the error of each component of the field at any phase, from tol."""
        return self.home.error_bound_T

    def at(self, turns: Any) -> FloatArray:
        """Shape (n, m, 3) float in T. Fields at the phases φ/2π (m,)."""
        phases = np.exp(-2j * np.pi * (as_floats("turns", turns, (None,)) % 1.0))
        return np.asarray(self.centre[:, None] + (self.amplitude[:, None] * phases[:, None]).real)

    def fields(self, cells: Any) -> FloatArray:
        """Shape (n, m, 3) float in T. Fields in the cells at the lattice vectors ``cells`` (m, 3)."""
        return self.at((as_floats("cells", cells, (None, 3)) @ self.k) % 1.0)

    @cached_property
    def half_axes(self) -> FloatArray:
        """Shape (n, 2, 3) float in T. Major and minor half axis, perpendicular, in the order in which φ passes them.

        They are F exp(−iφ_0) = major + i minor with 2φ_0 = arg(F·F), so that the field turns from major to minor as φ
        grows. A zero minor axis means a segment.
        """
        square = np.einsum("na,na->n", self.amplitude, self.amplitude)
        turned = self.amplitude * np.exp(-0.5j * np.angle(square))[:, None]
        return frozen(np.stack([turned.real, turned.imag], axis=1))

    @cached_property
    def _extremes(self) -> FloatArray:
        return frozen(np.stack(extreme_sizes(self.centre, self.amplitude)))

    @property
    def ellipse_minimum_T(self) -> FloatArray:
        """Shape (n,) float. Smallest |B| over the whole ellipse, whether a phase occurs or not."""
        return np.asarray(self._extremes[0])

    @property
    def ellipse_maximum_T(self) -> FloatArray:
        """Shape (n,) float. Largest |B| over the whole ellipse, whether a phase occurs or not."""
        return np.asarray(self._extremes[1])

    @property
    def minimum_T(self) -> FloatArray:
        """Shape (n,) float. Smallest |B| that occurs in any cell (for an incommensurate k: the infimum)."""
        return self.ellipse_minimum_T if self.turns is None else np.asarray(self.cell_sizes_T.min(axis=1))

    @property
    def maximum_T(self) -> FloatArray:
        """Shape (n,) float. Largest |B| that occurs in any cell (for an incommensurate k: the supremum)."""
        return self.ellipse_maximum_T if self.turns is None else np.asarray(self.cell_sizes_T.max(axis=1))

    @cached_property
    def cell_fields(self) -> FloatArray:
        """Shape (n, m, 3) float in T. Fields at the phases that occur. Raises InputError for an incommensurate k."""
        if self.turns is None:
            raise InputError(
                f"k = {_text(self.k)} is incommensurate: its fields fill an ellipse and cannot be listed. Use "
                "at(turns) for the fields at given phases."
            )
        return frozen(self.at(self.turns))

    @cached_property
    def cell_sizes_T(self) -> FloatArray:
        """Shape (n, m) float. |B| at the phases that occur. Raises InputError for an incommensurate k."""
        return frozen(np.linalg.norm(self.cell_fields, axis=2))

    def levels(self, point: int = 0) -> tuple[FieldLevel, ...]:
        """Distinct |B| at one point over all cells, smallest first.

        Two are one level where they differ by no more than their error bounds, or by 1e-6 of the largest.
        Raises InputError for an incommensurate k.
        """
        sizes = np.sort(self.cell_sizes_T[point])
        gap = max(2 * np.sqrt(3) * float(self.error_bound_T[point]), SAME_FIELD * float(sizes[-1]))
        groups = np.split(sizes, np.flatnonzero(np.diff(sizes) > gap) + 1)
        return tuple(FieldLevel(float(group.mean()), len(group) / len(sizes)) for group in groups)

    def to_dict(self) -> dict[str, Any]:
        """Plain dict with one entry per row; keys carry their units, vectors are Cartesian."""
        rows = []
        for i, name in enumerate(self.home.probe_names):
            levels = self.levels(i) if self.turns is not None else None
            rows.append(
                {
                    "probe": name,
                    "particle": self.home.particles[i] or None,
                    "position": self.home.points[i].tolist(),
                    "centre_T": self.centre[i].tolist(),
                    "amplitude_T": [[float(x.real), float(x.imag)] for x in self.amplitude[i]],
                    "half_axes_T": self.half_axes[i].tolist(),
                    "smallest_field_T": float(self.minimum_T[i]),
                    "largest_field_T": float(self.maximum_T[i]),
                    "levels": None
                    if levels is None
                    else [{"field_T": level.field_T, "share_of_cells": level.share} for level in levels],
                    "error_bound_T": float(self.error_bound_T[i]),
                }
            )
        return {
            "ordering": self.home.ordering.name,
            "k": self.k.tolist(),
            "commensurate": self.is_commensurate,
            "boundary": self.home.boundary,
            "net_moment_muB_per_cell": self.home.net_moment.tolist(),
            "rows": rows,
            "notes": list(self.home.notes),
        }


def field_ellipse(ordering: Ordering, points: Any, *, sample: Sample | None = None, tol: float = 1e-10) -> FieldEllipse:
    """Fields at points or probes in all cells of an ordering with one k, beside which it may have a part at k = 0.

    ordering, points, sample, tol: as `local_field`; Lorentz, demagnetizing, applied and contact fields are included.

    Raises InputError for waves at several k, which trace no ellipse, and what `local_field` raises.
    """
    moving = np.flatnonzero(np.any(ordering.k != np.round(ordering.k), axis=1))
    if len(moving) > 1:
        listed = ", ".join(_text(ordering.k[i]) for i in moving)
        raise InputError(
            f"the ordering {ordering.name!r} has waves at several k ({listed}), under which a field traces no ellipse. "
            "Take the waves one at a time; their fields add up."
        )
    home = local_field(ordering, points, sample=sample, tol=tol)
    if not len(moving):
        zero = np.zeros(home.total.shape, dtype=complex)
        return FieldEllipse(home, frozen(np.zeros(3)), home.total, frozen(zero), frozen(np.zeros(1)))

    def total(factor: complex) -> FloatArray:
        """The field with the wave turned on: contact terms still see the same ions."""
        components = np.array(ordering.components)
        components[moving] *= factor
        return local_field(replace(ordering, components=components), points, sample=sample, tol=tol).total

    k = ordering.k[moving[0]]
    opposite = total(-1)
    centre = (home.total + opposite) / 2
    amplitude = ((home.total - opposite) / 2).astype(complex)
    if not is_self_conjugate(k[None])[0]:
        # A quarter turn, exp(−iπ/2) = −i, shows Im F.
        amplitude += 1j * (total(-1j) - centre)
    phases = phase_space(k[None])
    turns = None if phases.n_free else frozen(phases.listed[:, 0])
    return FieldEllipse(home, frozen(k), frozen(centre), frozen(amplitude), turns)


def extreme_sizes(centre: FloatArray, amplitude: ComplexArray) -> tuple[FloatArray, FloatArray]:
    """Smallest and largest length (n,) of centre + Re[amplitude exp(−iφ)] over all φ; both arrays of shape (n, 3)."""
    size = np.maximum(np.abs(centre), np.abs(amplitude)).max(axis=1, initial=0.0)
    scale = np.where(size > 0, size, 1.0)[:, None]
    steady, wave = centre / scale, amplitude / scale
    p = 2 * np.einsum("na,na->n", steady, wave)
    q = np.einsum("na,na->n", wave, wave) / 2
    # Any phase bounds the extremes from inside, so that candidates which are no stationary points do no harm.
    candidates = np.exp(1j * np.angle(_candidates(p, q)))
    for _ in range(3):
        candidates = np.concatenate([candidates, _newton(candidates[:, -4:], p, q)], axis=1)
    lengths = np.linalg.norm(steady[:, None] + (wave[:, None] * candidates[:, :, None]).real, axis=2)
    return lengths.min(axis=1) * scale[:, 0], lengths.max(axis=1) * scale[:, 0]


def _candidates(p: ComplexArray, q: ComplexArray) -> ComplexArray:
    """Shape (n, 4) complex. Roots w of 2 q w⁴ + p w³ − p* w − 2 q*; where q is small, those of p w² = p* twice."""
    direction = np.conj(p) / np.where(np.abs(p) > 0, np.abs(p), 1.0)
    start = np.where(np.abs(p) > 0, direction, 1.0)
    roots = np.stack([start, -start, 1j * start, -1j * start], axis=1)
    rows = np.flatnonzero((np.abs(q) > SMALL_RATIO * np.abs(p)) & (np.abs(q) > 0))
    if len(rows):
        ratio = p[rows] / (2 * q[rows])
        companion = np.zeros((len(rows), 4, 4), dtype=complex)
        companion[:, 1:, :-1] = np.eye(3)
        companion[:, 0, 3] = np.conj(q[rows]) / q[rows]
        companion[:, 1, 3] = np.conj(p[rows]) / (2 * q[rows])
        companion[:, 3, 3] = -ratio
        roots[rows] = np.linalg.eigvals(companion)
    return roots


def _newton(w: ComplexArray, p: ComplexArray, q: ComplexArray) -> ComplexArray:
    """One step in φ towards a zero of the slope of Re[p w + q w²], w = exp(−iφ); none where its curvature vanishes."""
    first, second = p[:, None] * w, q[:, None] * w**2
    slope = (first + 2 * second).imag
    curvature = -(first + 4 * second).real
    steady = np.abs(curvature) > 1e-12 * (np.abs(p) + 4 * np.abs(q))[:, None]
    step = np.where(steady, slope / np.where(steady, curvature, 1.0), 0.0)
    return np.asarray(w * np.exp(1j * np.clip(step, -1.0, 1.0)))


def _text(k: FloatArray) -> str:
    return "(" + ", ".join(f"{x:.6g}" for x in k) + ")"
