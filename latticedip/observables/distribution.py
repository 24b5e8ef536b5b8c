"""Distributions of the size of a field: lines, waves, powders and samples, each by its cumulative function.

The density of |B| is infinite at the edges of a wave (Overhauser, J. Phys. Chem. Solids 13, 71 (1960)), so that bins
are filled by differences of the cumulative function, never by the density at a point. Then every histogram adds up to
one.

    line      one size
    wave      B(φ) = Re Σ_h C_h exp(−ihφ), every φ alike. For one ellipse around zero with half axes b ≤ a
              p(B) = 2B/(π √((B² − b²)(a² − B²))) between the edges b and a
    shell     an internal field of fixed size in a powder, in an applied field: all angles between the two are alike, so
              that B² is uniform between (B_i − B_a)² and (B_i + B_a)²
    sample    sizes that stand for all, equally likely
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Protocol

import numpy as np
from scipy.special import erfc

from latticedip.checks import ComplexArray, FloatArray, as_floats, frozen
from latticedip.errors import InputError

#: Steps of bisection: each halves an interval of less than a turn, down to the digits of a double.
BISECTIONS = 60
#: Roots of a polynomial this near the unit circle are taken for directions at which |B| may turn round.
NEAR_CIRCLE = 1e-3
#: Sizes that stand for a continuous part where it is smeared: at least, at most, and per width.
LEAST_NODES, MOST_NODES, NODES_PER_WIDTH = 256, 16_384, 20
#: More nodes than this are put together on a grid with this many points per width before they are smeared.
GRID_ABOVE, GRID_PER_WIDTH = 20_000, 200
#: A smeared line is taken as nothing beyond this many widths.
WIDTHS_SHOWN = 6.0
MOST_BINS = 10**6


class Part(Protocol):
    """One component of a distribution of |B|."""

    @property
    def edges(self) -> tuple[float, ...]:
        """Sizes in T where the density begins, ends or is infinite, ascending."""

    def cumulative(self, size: FloatArray) -> FloatArray:
        """Fraction with |B| of at most each size (n,)."""

    def nodes(self, n: int) -> FloatArray:
        """Sizes, equally likely, that stand for the whole; about n of them where it is continuous."""


@dataclass(frozen=True)
class Line:
    """A field of one size. at: |B| in T."""

    at: float

    @property
    def edges(self) -> tuple[float, ...]:
        return (self.at,)

    def cumulative(self, size: FloatArray) -> FloatArray:
        return np.asarray(size >= self.at, dtype=float)

    def nodes(self, n: int) -> FloatArray:
        return np.array([self.at])


@dataclass(frozen=True, eq=False)
class Sampled:
    """Sizes that stand for all. sizes: Shape (n,) float in T."""

    sizes: FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "sizes", frozen(np.sort(self.sizes)))

    @property
    def edges(self) -> tuple[float, ...]:
        return float(self.sizes[0]), float(self.sizes[-1])

    def cumulative(self, size: FloatArray) -> FloatArray:
        return np.asarray(np.searchsorted(self.sizes, size, side="right") / len(self.sizes))

    def nodes(self, n: int) -> FloatArray:
        return self.sizes


@dataclass(frozen=True, eq=False)
class Shell:
    """A powder in an applied field. internal: Shape (n,) sizes of the internal field in T, equally likely.

    applied: size of the applied field in T. reach: lowest and highest internal field, where the sizes stand for all
        between them.
    """

    internal: FloatArray
    applied: float
    reach: tuple[float, float] | None = None

    @property
    def edges(self) -> tuple[float, ...]:
        low, high = (float(self.internal.min()), float(self.internal.max())) if self.reach is None else self.reach
        return max(0.0, low - self.applied, self.applied - high), high + self.applied

    def cumulative(self, size: FloatArray) -> FloatArray:
        low, high = np.abs(self.internal - self.applied), self.internal + self.applied
        total = np.zeros(len(size))
        for a, b in zip(low, high, strict=True):
            if a == b:
                total += size >= a
            else:
                # The square is not formed of a difference: that keeps the digits where one field is far the larger.
                total += np.clip((size - a) * (size + a) / ((b - a) * (b + a)), 0.0, 1.0)
        return total / len(low)

    def nodes(self, n: int) -> FloatArray:
        low, high = np.abs(self.internal - self.applied), self.internal + self.applied
        each = max(1, -(-n // len(low)))
        middle = (np.arange(each) + 0.5) / each
        return np.asarray(np.sqrt(low[:, None] ** 2 + middle * ((high - low) * (high + low))[:, None]).ravel())


@dataclass(frozen=True, eq=False)
class Wave:
    """A field that a phase carries round. coefficients: Shape (h + 1, 3) complex in T, C_0 real."""

    coefficients: ComplexArray

    def field(self, phase: FloatArray) -> FloatArray:
        """Shape (n, 3) float in T. The field at phases (n,) in radians."""
        turns = np.exp(-1j * np.outer(phase, np.arange(len(self.coefficients))))
        return np.asarray((turns @ self.coefficients).real)

    @cached_property
    def square(self) -> ComplexArray:
        """Shape (2h + 1,) complex in T². |B|² = Re Σ_m square_m exp(imφ)."""
        n = 4 * len(self.coefficients)
        phase = 2 * np.pi * np.arange(n) / n
        values = np.sum(self.field(phase) ** 2, axis=1)
        parts = np.fft.rfft(values)[: 2 * len(self.coefficients) - 1] / n
        parts[1:] *= 2
        # What rounding leaves of a harmonic would only add directions at which nothing turns.
        parts[np.abs(parts) <= 1e-14 * np.abs(parts[0])] = 0.0
        return np.asarray(parts)

    @property
    def name(self) -> tuple[int, ...] | None:
        """Numbers that two waves with the same distribution share; None where that is not decided here."""
        if len(self.square) > 3:
            return None
        mean, one, two = (complex(x) for x in np.pad(self.square, (0, 3 - len(self.square))))
        scale = max(mean.real, 1e-300)
        both = (two * one.conjugate() ** 2).real / scale**3
        invariants = (abs(one) / scale, abs(two) / scale, both)
        # Where the invariants agree to eight digits the distributions do.
        return (round(float(np.log(scale)) * 1e8), *(round(x * 1e8) for x in invariants))

    def size_squared(self, phase: FloatArray) -> FloatArray:
        """|B|² in T² at phases of any shape, in radians."""
        total = np.full(np.shape(phase), self.square[0].real)
        for m, part in enumerate(self.square[1:], start=1):
            if part:
                total = total + (part * np.exp(1j * m * phase)).real
        return np.asarray(total)

    @cached_property
    def single(self) -> tuple[float, float] | None:
        """(lowest, highest) |B|² where |B|² has one harmonic only, as on an ellipse around zero; None elsewhere."""
        there = np.flatnonzero(self.square[1:])
        if len(there) > 1:
            return None
        steady, moving = np.abs(self.coefficients[0]).max(), np.abs(self.coefficients[1:]).max(initial=0.0)
        if len(self.square) == 3 and steady <= 1e-14 * moving:
            # Half axes from the singular values keep a small one, and a linear wave touches zero exactly.
            u = self.coefficients[1]
            a, b = np.linalg.svd(np.array([u.real, u.imag]), compute_uv=False)
            return float(b**2) if b > 1e-9 * a else 0.0, float(a**2)
        amplitude = float(np.abs(self.square[1:]).max(initial=0.0))
        return max(0.0, self.square[0].real - amplitude), self.square[0].real + amplitude

    @cached_property
    def turning_points(self) -> FloatArray:
        """Shape (n,) float, ascending in [0, 2π). Phases between which |B|² rises or falls throughout."""
        orders = np.arange(len(self.square))
        positive = 0.5j * orders * self.square
        polynomial = np.concatenate([positive[::-1], positive[1:].conj()])
        roots = np.roots(polynomial)
        angles = np.angle(roots[np.abs(np.abs(roots) - 1) < NEAR_CIRCLE])
        bending = 1j * orders
        for _ in range(3):
            # Newton steps where the curvature allows; a point that is no turning point does no harm.
            curvature = (np.exp(1j * np.outer(angles, orders)) @ (bending**2 * self.square)).real
            slope = (np.exp(1j * np.outer(angles, orders)) @ (bending * self.square)).real
            steep = np.abs(curvature) > 1e-6 * self.square[0].real
            angles = angles - np.clip(np.divide(slope, curvature, out=np.zeros(len(angles)), where=steep), -0.01, 0.01)
        if not len(angles):
            angles = np.linspace(0.0, 2 * np.pi, 8, endpoint=False)
        return np.sort(angles % (2 * np.pi))

    @cached_property
    def edges(self) -> tuple[float, ...]:
        if self.single is not None:
            return float(np.sqrt(self.single[0])), float(np.sqrt(self.single[1]))
        squares = np.sort(np.maximum(self.size_squared(self.turning_points), 0.0))
        sizes = np.sqrt(squares)
        keep = np.concatenate([[True], np.diff(sizes) > 1e-9 * sizes[-1]])
        return tuple(float(x) for x in sizes[keep])

    def cumulative(self, size: FloatArray) -> FloatArray:
        x = np.maximum(size, 0.0) ** 2
        if self.single is not None:
            low, high = self.single
            if not high > low:
                return Line(float(np.sqrt(high))).cumulative(size)
            # 1 − arccos(c)/π by the half angle, exact also next to the edges.
            part = np.clip((x - low) / (high - low), 0.0, 1.0)
            inner = 2 / np.pi * np.arcsin(np.sqrt(part))
            return np.where(size >= self.edges[1], 1.0, np.where(size < self.edges[0], 0.0, inner))
        starts = self.turning_points
        ends = np.append(starts[1:], starts[0] + 2 * np.pi)
        total = np.zeros(len(x))
        for a, b in zip(starts, ends, strict=True):
            first, last = (float(v) for v in self.size_squared(np.array([a, b])))
            rising = last >= first
            below, above = np.full(len(x), a), np.full(len(x), b)
            for _ in range(BISECTIONS):
                middle = 0.5 * (below + above)
                before = (self.size_squared(middle) <= x) == rising
                below, above = np.where(before, middle, below), np.where(before, above, middle)
            share = (below - a) if rising else (b - below)
            share = np.where(x >= max(first, last), b - a, np.where(x < min(first, last), 0.0, share))
            total += share / (2 * np.pi)
        low, high = self.edges[0], self.edges[-1]
        return np.where(size >= high, 1.0, np.where(size < low, 0.0, np.clip(total, 0.0, 1.0)))

    def nodes(self, n: int) -> FloatArray:
        phase = 2 * np.pi * (np.arange(n) + 0.5) / n
        return np.asarray(np.sqrt(np.maximum(self.size_squared(phase), 0.0)))


@dataclass(frozen=True, eq=False)
class FieldDistribution:
    """How often each size of the field occurs; the integral over all sizes is one.

    parts: the components. weights: Shape (n,) float, their shares; they add up to one.
    width_T: standard deviation of a Gaussian that every size is smeared with, folded at zero.
    nuclear_width_T: or that of each component of a random field that is added, as from nuclear moments.
    """

    parts: tuple[Part, ...]
    weights: FloatArray
    width_T: float = 0.0
    nuclear_width_T: float = 0.0

    def __post_init__(self) -> None:
        object.__setattr__(self, "weights", frozen(self.weights))
        if self.width_T and self.nuclear_width_T:
            raise InputError("give either a width or a nuclear width, not both: one broadening is applied.")

    @property
    def lines(self) -> tuple[tuple[float, float], ...]:
        """(|B| in T, share) of every line, smallest first."""
        found = [(p.at, float(w)) for p, w in zip(self.parts, self.weights, strict=True) if isinstance(p, Line)]
        return tuple(sorted(found))

    @property
    def is_discrete(self) -> bool:
        """True where there are lines alone, not smeared."""
        return all(isinstance(part, Line) for part in self.parts) and not self.width_T and not self.nuclear_width_T

    @property
    def support(self) -> tuple[float, float]:
        """Lowest and highest |B| in T; where it is smeared, what lies beyond six widths counts as nothing."""
        low, high = min(p.edges[0] for p in self.parts), max(p.edges[-1] for p in self.parts)
        reach = WIDTHS_SHOWN * max(self.width_T, self.nuclear_width_T)
        return max(0.0, low - reach), high + reach

    @cached_property
    def mean_T(self) -> float:
        """Mean |B| in T, without any smearing."""
        return float(sum(w * p.nodes(4096).mean() for w, p in zip(self.weights, self.parts, strict=True)))

    @cached_property
    def rms_T(self) -> float:
        """Root mean square of |B| in T, without any smearing."""
        squares = [float(np.mean(part.nodes(4096) ** 2)) for part in self.parts]
        return float(np.sqrt(self.weights @ np.array(squares)))

    def cumulative(self, size_T: Any) -> FloatArray:
        """Shape (n,) float. Fraction of all probes with |B| of at most each size (n,) in T."""
        x = as_floats("size_T", size_T, (None,))
        if not self.width_T and not self.nuclear_width_T:
            return np.asarray(sum(w * p.cumulative(x) for w, p in zip(self.weights, self.parts, strict=True)))
        sizes, weights = self._nodes
        out = np.zeros(len(x))
        for start in range(0, len(sizes), 8192):
            block = slice(start, start + 8192)
            out += weights[block] @ self._smeared(x[None, :], sizes[block, None])
        return np.where(x < 0, 0.0, np.clip(out, 0.0, 1.0))

    def binned(self, bins: int = 200, span: Any = None) -> tuple[FloatArray, FloatArray]:
        """Return (edges of bins (bins + 1,) in T, share in each (bins,)); the shares add up to one.

        bins: at least 1. span: (first, last) size in T; None: from the lowest to the highest with a margin of 5 %.

        Raises InputError for a span that is not two increasing numbers, or that leaves part of the distribution out.
        """
        if isinstance(bins, bool) or not isinstance(bins, (int, np.integer)) or not 1 <= bins <= MOST_BINS:
            raise InputError(f"bins must be a whole number from 1 to {MOST_BINS}, got {bins!r}.")
        low, high = self.support
        if span is None:
            margin = 0.05 * (high - low) or 0.05 * high or 1e-6
            first, last = max(0.0, low - margin), high + margin
        else:
            first, last = (float(x) for x in as_floats("span", span, (2,)))
            if not first < last or first > low or last < high:
                raise InputError(
                    f"span must go upwards and hold the whole spectrum, {low!r} to {high!r} T, got {span!r}."
                )
        limits = np.linspace(first, last, bins + 1)
        counted = self.cumulative(limits)
        # A line at zero lies in the first bin.
        counted[0], counted[-1] = 0.0, 1.0
        return frozen(limits), frozen(np.diff(counted))

    @cached_property
    def _nodes(self) -> tuple[FloatArray, FloatArray]:
        width = max(self.width_T, self.nuclear_width_T)
        sizes, weights = [], []
        for weight, part in zip(self.weights, self.parts, strict=True):
            extent = part.edges[-1] - part.edges[0]
            nodes = part.nodes(int(np.clip(NODES_PER_WIDTH * extent / width, LEAST_NODES, MOST_NODES)))
            sizes.append(nodes)
            weights.append(np.full(len(nodes), weight / len(nodes)))
        size, weight_of = np.concatenate(sizes), np.concatenate(weights)
        if len(size) <= GRID_ABOVE or size.max() * GRID_PER_WIDTH / width > 2**40:
            return size, weight_of
        cells, place = np.unique(np.floor(size * (GRID_PER_WIDTH / width)), return_inverse=True)
        total = np.bincount(place, weight_of, len(cells))
        return np.asarray(np.bincount(place, weight_of * size, len(cells)) / total, dtype=float), total.astype(float)

    def _smeared(self, x: FloatArray, size: FloatArray) -> FloatArray:
        """Cumulative function at x of one size, smeared."""
        width = max(self.width_T, self.nuclear_width_T)
        root = np.sqrt(2) * width
        # Φ((x − B)/w) − Φ(−(x + B)/w): a Gaussian folded at zero.
        folded = 0.5 * erfc((size - x) / root) - 0.5 * erfc((x + size) / root)
        if self.width_T:
            return np.asarray(folded)
        # With a random vector added: p(x) = x/(B w √(2π)) [exp(−(x−B)²/2w²) − exp(−(x+B)²/2w²)], integrated.
        y = x * size / width**2
        near = np.exp(-((x - size) ** 2) / (2 * width**2))
        # (1 − exp(−2y))/size, finite where the size is zero.
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(size > 0, -np.expm1(-2 * y) / np.where(size > 0, size, 1.0), 2 * x / width**2)
        return np.asarray(folded - width / np.sqrt(2 * np.pi) * near * ratio)


def mixture(
    parts: Sequence[tuple[Part, float]], *, same_T: float, width_T: float = 0.0, nuclear_width_T: float = 0.0
) -> FieldDistribution:
    """A distribution of parts with weights (normalized here); lines that differ by at most ``same_T`` are one."""
    lines = sorted(((part.at, weight) for part, weight in parts if isinstance(part, Line)), key=lambda pair: pair[0])
    out: list[tuple[Part, float]] = []
    group: list[tuple[float, float]] = []
    for at, weight in lines:
        if group and at - group[-1][0] > same_T:
            out.append(_merged(group))
            group = []
        group.append((at, weight))
    if group:
        out.append(_merged(group))
    named: dict[Any, int] = {}
    for number, (part, weight) in enumerate((p, w) for p, w in parts if not isinstance(p, Line)):
        name = part.name if isinstance(part, Wave) else None
        key = number if name is None else name
        if key in named:
            out[named[key]] = (out[named[key]][0], out[named[key]][1] + weight)
        else:
            named[key] = len(out)
            out.append((part, weight))
    weights = np.array([weight for _, weight in out])
    return FieldDistribution(tuple(part for part, _ in out), weights / weights.sum(), width_T, nuclear_width_T)


def _merged(group: list[tuple[float, float]]) -> tuple[Part, float]:
    weights = np.array([weight for _, weight in group])
    return Line(float(np.array([at for at, _ in group]) @ weights / weights.sum())), float(weights.sum())
