"""The line of a powder: how often each value of a first-order shift occurs when grains point everywhere alike.

A grain whose field direction is h shows K(h) = Σ_i K_i h_i², K₁ ≤ K₂ ≤ K₃ the principal values. The distribution of K
over the sphere is a complete elliptic integral (Bloembergen and Rowland, Acta Metall. 1, 731 (1953)); it jumps at the
edges K₁ and K₃ and is infinite, with a finite integral, at K₂. Where two values are equal it has two edges,
p = 1/(2 √((K_∥ − K_⊥)(K − K_⊥))). Its integral, the solid angle of an elliptic cone, is one of the third kind.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import ellipkm1, elliprf, elliprj

from latticedip.checks import FloatArray, as_floats, frozen
from latticedip.errors import InputError


@dataclass(frozen=True, eq=False)
class PowderLine:
    """Distribution of the shift in a powder; the integral over all shifts is one.

    edges: Shape (3,) float, K₁ ≤ K₂ ≤ K₃: lower edge, singularity, upper edge (two of them coincide for an axial
        tensor, all three for an isotropic one).
    """

    edges: FloatArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "edges", frozen(np.sort(as_floats("edges", self.edges, (3,)))))

    @property
    def mean(self) -> float:
        """Powder average of the shift, a third of the trace."""
        return float(self.edges.mean())

    @property
    def variance(self) -> float:
        """Mean square deviation from the powder average, (4/45)(K₁² + K₂² + K₃² − K₁K₂ − K₂K₃ − K₃K₁)."""
        a, b, c = (float(x) for x in self.edges)
        return 2 / 45 * ((a - b) ** 2 + (b - c) ** 2 + (c - a) ** 2)

    def density(self, shift: Any) -> FloatArray:
        """Shape (n,) float. Probability per unit of shift; 0 outside the edges, infinite at the singularity.

        shift: Shape (n,). Raises InputError for an isotropic tensor, whose line has no width.
        """
        x = as_floats("shift", shift, (None,))
        low, middle, high = (float(e) for e in self.edges)
        if low == high:
            raise InputError(f"the line has no width: every grain shows {low!r}. Use its cumulative form.")
        out = np.zeros(len(x))
        for inside, left, right in (
            ((x >= low) & (x < middle), low, high),
            ((x > middle) & (x <= high), high, low),
        ):
            k = x[inside]
            far, span = np.abs(right - k), abs(middle - left)
            # The complement of the parameter is given to the integral, so that nothing cancels near K₂.
            rest = abs(right - left) * np.abs(middle - k) / (far * span)
            out[inside] = ellipkm1(rest) / (np.pi * np.sqrt(far * span))
        out[x == middle] = np.inf
        return out

    def cumulative(self, shift: Any) -> FloatArray:
        """Shape (n,) float. Fraction of the powder that shows a shift of at most this. shift: Shape (n,)."""
        x = as_floats("shift", shift, (None,))
        low, middle, high = (float(e) for e in self.edges)
        out = np.where(x >= high, 1.0, 0.0)
        upper = (x >= middle) & (x < high) & (x > low)
        out[upper] = 1 - _cone(x[upper] - low, x[upper] - middle, high - x[upper])
        lower = (x > low) & (x < middle)
        out[lower] = _cone(high - x[lower], middle - x[lower], x[lower] - low)
        return out

    def binned(self, bins: int = 200, span: Any = None) -> tuple[FloatArray, FloatArray]:
        """Return (edges of bins (bins + 1,), mean density in each (bins,)); the densities times widths add up to one.

        bins: at least 1. span: (first, last) shift; None: from edge to edge with a margin of 5 % on both sides.

        Raises InputError for a span that is not two increasing numbers, or that leaves part of the line out.
        """
        if isinstance(bins, bool) or not isinstance(bins, (int, np.integer)) or not 1 <= bins <= 10**6:
            raise InputError(f"bins must be a whole number from 1 to 1000000, got {bins!r}.")
        low, high = float(self.edges[0]), float(self.edges[2])
        if span is None:
            margin = 0.05 * (high - low) or 1e-3 * abs(high) or 1e-9
            first, last = low - margin, high + margin
        else:
            first, last = (float(x) for x in as_floats("span", span, (2,)))
        if not first < last or first > low or last < high:
            raise InputError(f"span must go upwards and hold the whole line, {low!r} to {high!r}, got {span!r}.")
        limits = np.linspace(first, last, bins + 1)
        # A line without width lies in the bin that holds it also where it sits on a limit.
        counted = self.cumulative(limits)
        counted[0], counted[-1] = 0.0, 1.0
        return frozen(limits), frozen(np.diff(counted) / np.diff(limits))


def _cone(wide: FloatArray, narrow: FloatArray, beyond: FloatArray) -> FloatArray:
    """Fraction of the sphere inside the double cone Σ_i (K_i − K) h_i² > 0 about the axis of ``beyond``.

    wide ≥ narrow ≥ 0 and beyond > 0 are the distances of K from the three principal values. With A = wide/beyond,
    B = narrow/beyond the fraction is 1 − (2/π) ∫₀^{π/2} √((A cos² + B sin²)/((1 + A) cos² + (1 + B) sin²)) dφ, which
    is A R_F(0, y, z) − (A − B)/3 R_J(0, y, z, 1) over √(A(1 + A)), y = B/A, z = (1 + B)/(1 + A) (Carlson 1995).
    """
    a, b = wide / beyond, narrow / beyond
    # At K₂ both integrals diverge and their difference does not: a tiny y keeps it to the last digits.
    y = np.maximum(b / a, 1e-40)
    z = (1 + b) / (1 + a)
    value = (a * elliprf(0.0, y, z) - (a - b) / 3 * elliprj(0.0, y, z, 1.0)) / np.sqrt(a * (1 + a))
    return np.asarray(1 - 2 / np.pi * value)
