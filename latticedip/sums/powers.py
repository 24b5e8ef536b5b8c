"""Lattice sums that fall off as r⁻⁶, with the direction of every pair: what squared dipolar fields add up to.

    Q_abcd(x) = Σ_R n_a n_b n_c n_d / r⁶ = Σ_R r_a r_b r_c r_d / r¹⁰,    r = x − R, n = r/|r|

Contractions give all second moments: Q_aabb = Σ r⁻⁶, Q_abcc = Σ n_a n_b r⁻⁶, and for a direction h the sum
Σ (1 − 3cos²θ)² r⁻⁶ = 9 Q_abcd h_a h_b h_c h_d − 6 Q_abcc h_a h_b + Q_aabb.

The sum converges absolutely. It is split as by Ewald, here with r⁻¹⁰ = (1/Γ(5)) ∫₀^∞ t⁴ exp(−r² t) dt cut at t = α²
(Nijboer and De Wette, Physica 23, 309 (1957)):

    real part          Σ_R r_a r_b r_c r_d r⁻¹⁰ Γ(5, α²r²)/Γ(5)
    reciprocal part    (1/V) Σ_G F_abcd(G) cos(G·x), the Fourier transform of the rest,
                       F = (π^{3/2}/24) [J₀ q_a q_b q_c q_d/16 − J₁ {δqq}_abcd/8 + J₂ {δδ}_abcd/4],
                       J_n = ∫₀^{α²} t^{n − 3/2} exp(−q²/4t) dt;  {δqq}: six terms, {δδ}: three

At G = 0 only {δδ} stays, with J₂ = (2/3) α³. The rest vanishes at r = 0, so a source left out there needs no self term.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from scipy.special import erfc, gammainc, gammaincc

from latticedip.checks import FloatArray, as_float, as_floats, check_cell, frozen
from latticedip.errors import AccuracyError
from latticedip.sums.accuracy import gaussian_tail
from latticedip.sums.bulk import ON_SITE_A, image_vectors, wave_vectors
from latticedip.sums.lattice import ReducedLattice, reduce_cell, stable_inverse
from latticedip.sums.pairs import pair_power_tensors

#: The 15 elements of a symmetric tensor of rank four, as sorted index quadruples.
ELEMENTS = tuple(itertools.combinations_with_replacement(range(3), 4))
#: Separations evaluated together times images: keeps the tables below some tens of megabytes.
BLOCK = 200_000


def power_tensors(cell: Any, offsets: Any, *, tol: float = 1e-12, leave_out_A: float = ON_SITE_A) -> FloatArray:
    """Sums Q_abcd = Σ_R n_a n_b n_c n_d/|x − R|⁶ over a three-dimensional lattice.

    cell: Shape (3, 3) float in Å. Rows are the cell vectors.
    offsets: Shape (n, 3) float in Å. Cartesian, from the source to the target.
    tol: the tails left out are at most tol times Σ_R |x − R|⁻⁶; 1e-14 to 1e-2. Rounding comes on top, some 1e-15 of
        the largest pair term and of 1/V².
    leave_out_A: sources closer to the target than this (Å) do not count.

    Returns shape (n, 3, 3, 3, 3) in 1/Å⁶, symmetric in all indices.

    Raises InputError for wrong shapes, values that are not finite, a singular cell or a tol out of range;
    AccuracyError where the bound cannot be kept.
    """
    matrix = check_cell("cell", cell)
    separations = as_floats("offsets", offsets, (None, 3))
    plan = _plan(matrix.tobytes(), as_float("tol", tol, low=1e-14, high=1e-2))
    fractional = separations @ stable_inverse(plan.lattice.cell)
    reduced = (fractional - np.round(fractional)) @ plan.lattice.cell
    flat = np.zeros((len(reduced), len(ELEMENTS)))
    step = max(1, BLOCK // max(len(plan.images), len(plan.q)))
    for start in range(0, len(reduced), step):
        block = slice(start, start + step)
        flat[block] = _real_part(plan, reduced[block], leave_out_A)
        # The wave G = 0 does not depend on the place; it is the last row of the weights.
        flat[block] += np.cos(reduced[block] @ plan.q.T) @ plan.weights[:-1] + plan.weights[-1]
    return _unpack(flat)


def direction_sum(tensors: FloatArray, direction: FloatArray) -> FloatArray:
    """Σ (1 − 3cos²θ)² r⁻⁶ in 1/Å⁶ about a unit vector, of tensors (..., 3, 3, 3, 3)."""
    second = np.einsum("...abcc->...ab", tensors)
    along = np.einsum("...ab,a,b->...", second, direction, direction)
    fourth = np.einsum("...abcd,a,b,c,d->...", tensors, direction, direction, direction, direction)
    return np.asarray(9 * fourth - 6 * along + np.einsum("...aa->...", second))


@dataclass(frozen=True, eq=False)
class _Plan:
    """Vectors and weights for one lattice: images (n, 3) Å; q (n_q, 3) 1/Å, one of each ±; weights (n_q + 1, 15)."""

    lattice: ReducedLattice
    alpha: float
    cutoff: float
    images: FloatArray
    q: FloatArray
    weights: FloatArray


@lru_cache(maxsize=16)
def _plan(cell_bytes: bytes, tol: float) -> _Plan:
    lattice = reduce_cell(np.frombuffer(cell_bytes).reshape(3, 3))
    lengths, volume = lattice.layer_distances, lattice.volume
    # No place is farther from the lattice than half the diagonal of the box of layer distances, and a place on the
    # lattice has its next neighbour at the shortest vector: Σ r⁻⁶ cannot be smaller than this.
    least = (max(float(np.linalg.norm(lengths)) / 2, float(lengths[0]))) ** -6
    wanted = 0.5 * tol * least
    alpha = float(np.sqrt(np.pi) / volume ** (1 / 3))
    cutoff = _smallest(lambda u: _real_tail(alpha, u, lengths), wanted) / alpha
    q_cut = _smallest(lambda v: _reciprocal_tail(alpha, v, lengths), wanted) * 2 * alpha
    images, _ = image_vectors(lattice, cutoff)
    _, q = wave_vectors(lattice, np.zeros(3), q_cut, True)
    weights = np.vstack([2 * _transform(q, alpha), _transform(np.zeros((1, 3)), alpha)]) / volume
    return _Plan(lattice, alpha, cutoff, frozen(images), frozen(q), frozen(weights))


def _smallest(bound: Callable[[float], float], wanted: float) -> float:
    """A reduced cut-off, in steps of a hundredth from 2 on, at which a tail bound holds."""
    for u in np.arange(2.0, 26.0, 0.01):
        if bound(float(u)) <= wanted:
            return float(u)
    raise AccuracyError("no cut-off of the r⁻⁶ lattice sum keeps the requested tolerance in this cell.")


def _softened(lengths: FloatArray, u: float, factor: float) -> float:
    """Bound of Σ h(|x|) exp(−|x|²) beyond u where h(u) = ``factor`` and h may grow, but not faster than |x|².

    x² exp(−x²/u²) decreases from u on, so that a part 1/u² of the exponent makes h a decreasing function.
    """
    kept = np.sqrt(1 - 1 / u**2)
    return float(gaussian_tail(kept * lengths, np.array(kept * u), np.array(factor * np.exp(-1.0))))


def _real_tail(alpha: float, u: float, lengths: FloatArray) -> float:
    """Bound of the real part beyond u/α in 1/Å⁶: every element of a pair is at most r⁻⁶ Γ(5, u²)/Γ(5)."""
    polynomial = u**-6 + u**-4 + u**-2 / 2 + 1 / 6 + u**2 / 24
    return _softened(alpha * lengths, u, alpha**6 * polynomial)


def _reciprocal_tail(alpha: float, v: float, lengths: FloatArray) -> float:
    """Bound of the reciprocal part beyond |q| = 2αv in 1/Å⁶.

    With b = q²/4 = α²v² and erfc(v) ≤ exp(−v²)/(v√π): J₀ ≤ α e^(−v²)/b, J₁ ≤ α³ e^(−v²)/b, J₂ ≤ α⁵ e^(−v²)/b.
    """
    polynomial = np.pi**1.5 / 24 * alpha**3 * (v**2 + 3 + 0.75 / v**2) / float(np.prod(lengths))
    return _softened(2 * np.pi / lengths / (2 * alpha), v, polynomial)


def _transform(q: FloatArray, alpha: float) -> FloatArray:
    """Shape (n, 15) in 1/Å³. F_abcd(q), elements in the order of ELEMENTS."""
    b = np.einsum("qa,qa->q", q, q) / 4
    root = np.sqrt(b)
    v = root / alpha
    gauss, tail = np.exp(-(v**2)), erfc(v)
    # √(π/b) erfc is multiplied by q⁴ below; at q = 0 that product is zero.
    j0 = np.sqrt(np.pi) * tail / np.where(root > 0, root, 1.0)
    j1 = 2 * (alpha * gauss - np.sqrt(np.pi) * root * tail)
    j2 = 2 / 3 * (alpha**3 * gauss - b * j1)
    out = np.empty((len(q), len(ELEMENTS)))
    delta = np.eye(3)
    for e, (a, c, d, f) in enumerate(ELEMENTS):
        four = q[:, a] * q[:, c] * q[:, d] * q[:, f]
        two = (
            delta[a, c] * q[:, d] * q[:, f] + delta[a, d] * q[:, c] * q[:, f] + delta[a, f] * q[:, c] * q[:, d]
            + delta[c, d] * q[:, a] * q[:, f] + delta[c, f] * q[:, a] * q[:, d] + delta[d, f] * q[:, a] * q[:, c]
        )  # fmt: skip
        none = delta[a, c] * delta[d, f] + delta[a, d] * delta[c, f] + delta[a, f] * delta[c, d]
        out[:, e] = j0 * four / 16 - j1 * two / 8 + j2 * none / 4
    return np.asarray(np.pi**1.5 / 24 * out)


def _real_part(plan: _Plan, separations: FloatArray, leave_out_A: float) -> FloatArray:
    r = separations[:, None] - plan.images[None]
    square = np.einsum("nia,nia->ni", r, r)
    left_out = square < leave_out_A**2
    near = (square <= plan.cutoff**2) & ~left_out
    rows, columns = np.nonzero(near)
    pairs, r2 = r[rows, columns], square[rows, columns]
    weight = gammaincc(5, plan.alpha**2 * r2) / r2**5
    monomials = np.stack([pairs[:, a] * pairs[:, b] * pairs[:, c] * pairs[:, d] for a, b, c, d in ELEMENTS], axis=1)
    out = np.zeros((len(separations), len(ELEMENTS)))
    np.add.at(out, rows, monomials * weight[:, None])
    # A source left out is still in the reciprocal part, unless it is exactly on the target.
    for row, column in np.argwhere(left_out & (square > 0)):
        whole = pair_power_tensors(r[row, column][None])[0]
        share = gammainc(5, plan.alpha**2 * square[row, column])
        out[row] -= share * np.array([whole[index] for index in ELEMENTS])
    return out


def _unpack(flat: FloatArray) -> FloatArray:
    out = np.empty((len(flat), 3, 3, 3, 3))
    for e, index in enumerate(ELEMENTS):
        for order in set(itertools.permutations(index)):
            a, b, c, d = order
            out[:, a, b, c, d] = flat[:, e]
    return out
