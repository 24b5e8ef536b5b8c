"""Cut-offs of an Ewald sum from a strict bound of what is left out.

Counting. Let b₁, b₂, b₃ be the Gram–Schmidt lengths of a basis: the lattice is a stack of layers b₃ apart, each a
set of rows b₂ apart, each a set of points b₁ apart. For equally spaced samples of a function with one maximum the
sum differs from the integral over spacing by at most the maximum. Applied to rows, layers and stack in turn, the
number of lattice points in a ball of radius r about any centre lies within

    N(r) = (4π/3) r³/V ± S(r),   S(r) = π r² Σ_{i<j} 1/(b_i b_j) + 2 r Σ_i 1/b_i + 1.

Tail. For a decreasing g the sum over all lattice points beyond r₀ is at most

    g(r₀) · min(2 S(r₀), V-term + S(r₀)) + ∫_{r₀}^∞ g(r) dN₊(r),   N₊ = (4π/3) r³/V + S,

for any centre. With Gaussian g the integrals are bounded in closed form. Nothing is assumed of the cell, so the
bound holds for any aspect ratio; the published estimates (Kolafa and Perram, Mol. Simul. 9, 351 (1992); Wang and
Holm, J. Chem. Phys. 115, 6351 (2001)) are rms values for random systems and do not.
"""

from __future__ import annotations

import numpy as np

from latticedip.checks import FloatArray
from latticedip.errors import AccuracyError
from latticedip.kernels.radial import U_MAX


def surface_terms(lengths: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """1/(b₁b₂b₃), Σ 1/(b_i b_j) and Σ 1/b_i of layer distances (last axis of length 3)."""
    inverse = 1 / np.asarray(lengths, dtype=float)
    c1, c2, c3 = inverse[..., 0], inverse[..., 1], inverse[..., 2]
    return c1 * c2 * c3, c1 * c2 + c1 * c3 + c2 * c3, c1 + c2 + c3


def count_bounds(lengths: FloatArray, radius: FloatArray | float) -> tuple[FloatArray, FloatArray]:
    """Least and largest number of lattice points in a ball of this radius about any centre."""
    volume, area, line = surface_terms(lengths)
    r = np.asarray(radius, dtype=float)
    middle = 4 * np.pi / 3 * r**3 * volume
    spread = np.pi * r**2 * area + 2 * r * line + 1
    return np.maximum(0.0, middle - spread), middle + spread


def gaussian_tail(lengths: FloatArray, cutoff: FloatArray, factor: FloatArray) -> FloatArray:
    """Bound of Σ h(|x|) exp(−|x|²) over points |x| > cutoff, where h decreases and h(cutoff) = ``factor``.

    lengths: layer distances in the unit in which the Gaussian has exponent −|x|²; shapes broadcast.
    """
    volume, area, line = surface_terms(lengths)
    inside = 4 * np.pi / 3 * cutoff**3 * volume
    spread = np.pi * cutoff**2 * area + 2 * cutoff * line + 1
    # Largest minus least number of points inside, as in `count_bounds`.
    boundary = spread + np.minimum(spread, inside)
    # ∫ 4πu² e^(−u²), ∫ 2πu e^(−u²), ∫ 2 e^(−u²) from the cut-off on, each divided by e^(−cutoff²).
    beyond = 4 * np.pi * volume * (cutoff / 2 + 1 / (4 * cutoff)) + np.pi * area + line / cutoff
    return factor * np.exp(-(cutoff**2)) * (boundary + beyond)


def real_tail(alpha: FloatArray, cutoff: FloatArray, lengths: FloatArray) -> FloatArray:
    """Bound of the largest element of Σ_{|x| > r_c} ∂_a∂_b erfc(α|x|)/|x| in 1/Å³ for any centre.

    The largest element is the second radial derivative; with erfc(u) ≤ exp(−u²)/(u√π) it is at most
    (2α³/√π) exp(−u²) (1/u⁴ + 2/u² + 2), u = α|x|, which decreases.
    """
    alpha = np.asarray(alpha, dtype=float)
    u = alpha * cutoff
    factor = 1 / u**4 + 2 / u**2 + 2
    return 2 * alpha**3 / np.sqrt(np.pi) * gaussian_tail(alpha[..., None] * lengths, u, factor)


def reciprocal_tail(alpha: FloatArray, cutoff: FloatArray, lengths: FloatArray) -> FloatArray:
    """Bound of (4π/V) Σ_{|q| > q_c} |q_a q_b|/q² exp(−q²/4α²) in 1/Å³ for any shift of the reciprocal lattice.

    lengths: layer distances of the direct basis; those of the reciprocal basis, in reversed order, are 2π/b.
    """
    alpha = np.asarray(alpha, dtype=float)
    v = cutoff / (2 * alpha)
    reciprocal = 2 * np.pi / lengths / (2 * alpha[..., None])
    return 4 * np.pi / np.prod(lengths) * gaussian_tail(reciprocal, v, np.ones_like(v))


def _solve(tail: object, alpha: FloatArray, scale: FloatArray, lengths: FloatArray, wanted: float) -> FloatArray:
    """Smallest reduced cut-off u (times ``scale`` gives the cut-off) with tail ≤ wanted, for every α at once."""
    u = np.full(alpha.shape, 3.0)
    for _ in range(30):
        bound = tail(alpha, u * scale, lengths)  # type: ignore[operator]
        # The bound is exp(−u²) times a slowly varying factor: solve for u with the factor held.
        last, u = u, np.sqrt(np.maximum(u**2 + np.log(bound / wanted), 1.0))
        if np.abs(u - last).max() < 1e-4:
            break
    # What is left of the way is some parts in 10⁵; step out until the bound holds.
    u = u * (1 + 2e-5)
    for _ in range(60):
        short = tail(alpha, u * scale, lengths) > wanted  # type: ignore[operator]
        if not np.any(short):
            return u
        u = np.where(short, u * (1 + 1e-4), u)
    raise AccuracyError("no cut-off of the lattice sum keeps the requested tolerance.")


def real_cutoffs(alpha: FloatArray, lengths: FloatArray, wanted: float) -> FloatArray:
    """Real-space cut-off in Å for each α so that `real_tail` is at most ``wanted`` (1/Å³)."""
    return _solve(real_tail, alpha, 1 / alpha, lengths, wanted) / alpha


def reciprocal_cutoffs(alpha: FloatArray, lengths: FloatArray, wanted: float) -> FloatArray:
    """Reciprocal cut-off in 1/Å for each α so that `reciprocal_tail` is at most ``wanted`` (1/Å³)."""
    return _solve(reciprocal_tail, alpha, 2 * alpha, lengths, wanted) * 2 * alpha


#: Relative cost of one image in the real part and of one pair ±q in the reciprocal part, for a pair of target and
#: source (measured in nanoseconds on one core; many targets and several sources).
COST_IMAGE, COST_WAVE = 8.0, 0.5
#: The same where only the field of given moments is wanted: one image of one source, one wave for all sources.
COST_FIELD_IMAGE, COST_FIELD_WAVE = 8.0, 0.5
#: What images of one source and waves cost once for all targets, and a wave once for each source.
COST_FIELD_IMAGE_ONCE, COST_FIELD_WAVE_ONCE, COST_FIELD_WAVE_OF_SOURCE = 30.0, 40.0, 4.0


def choose_splitting(
    lengths: FloatArray, volume: float, wanted: float, costs: tuple[float, float] = (COST_IMAGE, COST_WAVE)
) -> tuple[float, float, float]:
    """Cheapest splitting α (1/Å) with its cut-offs r_c (Å) and q_c (1/Å), each tail at most ``wanted`` (1/Å³).

    costs: of one image and of one pair of waves ±q, for one target and one source.

    Raises AccuracyError when no splitting keeps the bound.
    """
    alpha = np.sqrt(np.pi) / volume ** (1 / 3) * np.geomspace(0.25, 4.0, 21)
    r_c = real_cutoffs(alpha, lengths, wanted)
    q_c = reciprocal_cutoffs(alpha, lengths, wanted)
    # Expected numbers here, not bounds: only speed depends on them. The images that must be looked at lie in a
    # sphere wider than the cut-off by the distance of target and source.
    images = 4 * np.pi / 3 * (r_c**3 + 0.15 * (r_c + 0.5 * volume ** (1 / 3)) ** 3) / volume + 1
    waves = q_c**3 * volume / (12 * np.pi**2) + 1
    cost = np.where(alpha * r_c < U_MAX, costs[0] * images + costs[1] * waves, np.inf)
    best = int(np.argmin(cost))
    if not np.isfinite(cost[best]):
        raise AccuracyError("no splitting of the lattice sum keeps the requested tolerance in this cell.")
    return float(alpha[best]), float(r_c[best]), float(q_c[best])
