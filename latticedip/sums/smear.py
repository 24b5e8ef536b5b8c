"""Lattice sums of dipole tensors averaged over a Gaussian cloud of the target, periodic in three directions.

The cloud has a covariance U (Å²). Averaging 1/r over it is a convolution with a Gaussian, which in the representation

    1/r = (2/√π) ∫₀^∞ exp(−t² r²) dt

leaves a Gaussian, exp(−t²r²) → Π_i (1 + 2t²U_i)^{-1/2} exp(−Σ_i t² x_i²/(1 + 2t²U_i)) along the principal axes of U.
Let u_i = U_i − U_min be the excess over the smallest variance and w² = t²/(1 + 2t²U_min). With s_i = 1 + 2w²u_i,

    ⟨1/r⟩ = (2/√π) ∫₀^W Π_i s_i^{-1/2} exp(−Σ_i w² x_i²/s_i) dw,    W = 1/√(2 U_min).

As by Ewald the range is split at α ≤ W. What lies above α is short-ranged and summed over images; what lies below has
the Fourier transform (4π/q²) exp(−q²/4α² − q·u·q/2) and is summed over waves: the usual weight times that of the
excess. For an isotropic cloud (u = 0) the real part is the closed form [erfc(αr) − erfc(Wr)]/r; else it is a quadrature
by Gauss and Legendre over panels [a, 2a]. There the integrand is analytic in the right half plane, and with n nodes its
error in second derivatives is below 130 a³ ρ^{-2n}, ρ = 2 + √3: on the ellipse about the panel with this ρ, which comes
half way to the origin, |arg w| < 38°, so that all |s_i| ≥ 1 and every exponential falls (Trefethen, Approximation
Theory and Approximation Practice, theorem 19.3). With 22 nodes that is below double precision.

Meaning where the cloud reaches a source. ∂_a∂_b ⟨1/r⟩ has the trace −4πρ, ρ the density of the cloud at the source: the
isotropic part −(4π/3) ρ δ_ab is a contact term and left out, so that what is meant is the average of the traceless
tensor (3 x_a x_b − x² δ_ab)/x⁵ in the principal-value sense, traceless itself. Where no source is reached an isotropic
cloud changes nothing, by the mean-value theorem of harmonic functions; an anisotropic one does.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, check_tol, frozen
from latticedip.errors import AccuracyError
from latticedip.kernels.jit import over_rows
from latticedip.kernels.smear import smeared_pairs, smeared_tensors
from latticedip.sums.accuracy import COST_IMAGE, COST_WAVE, choose_splitting, gaussian_tail
from latticedip.sums.bulk import (
    ON_SITE_A,
    TAIL_SHARE,
    LatticeSum,
    Points,
    image_vectors,
    lattice_sum,
    self_term,
    wave_table,
)
from latticedip.sums.lattice import ReducedLattice, reduce_cell, stable_inverse
from latticedip.units import DIPOLE_T_A3_PER_MUB

#: Nodes in one panel of the quadrature.
NODES = 22
#: A cloud flatter than this variance (Å²) is thickened by it in all directions: exact where no source is reached.
THIN_A2 = 1e-6
#: Where the exponent of the density at every source is beyond this, no source is reached for any tolerance.
OUT_OF_REACH = 60.0
#: An isotropic cloud of smaller variance (Å²) is a point: no target lies so close to a source that it could tell.
POINT_A2 = 1e-8
#: Relative differences of variances that are rounding.
ROUNDING = 1e-13
#: Cost of an image in the quadrature over one in closed form.
COST_NODES = 10.0
#: Share of the Gaussian that bounds the tail of the quadrature; the rest makes the factor beside it decrease.
BOUND_SHARE = 0.9
#: Targets evaluated together times waves.
BLOCK = 2**22

_SIX = np.array([[0, 1, 2], [1, 3, 4], [2, 4, 5]])
_PAIRS = ((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2))
_TRIPLES = tuple((a, b, c) for a in range(3) for b in range(a, 3) for c in range(b, 3))
_TEN = np.array([[[_TRIPLES.index(tuple(sorted((a, b, c)))) for c in range(3)] for b in range(3)] for a in range(3)])


@dataclass(frozen=True, eq=False)
class Cloud:
    """A covariance in its principal axes, with what the kernels need of it.

    axes: Shape (3, 3) float. Columns are the principal axes. variances: Shape (3,) float in Å², ascending.
    excess: Shape (3,) float in Å². Variances over the smallest; all zero for an isotropic cloud.
    limit: W in 1/Å; 0 stands for no cloud. density: (4π/3) ρ at the centre of the cloud, in 1/Å³.
    thin: True where the cloud was thickened, so that it must not reach a source.
    """

    axes: FloatArray
    variances: FloatArray
    excess: FloatArray
    limit: float
    density: float
    thin: bool

    @property
    def is_isotropic(self) -> bool:
        """True where all three variances are the same (also without a cloud)."""
        return not np.any(self.excess)

    @property
    def stiffness(self) -> FloatArray:
        """Shape (3,) float in 1/Å². Inverse variances; zero without a cloud."""
        return np.zeros(3) if self.limit == 0.0 else 1.0 / self.variances


def cloud_of(covariance: FloatArray) -> Cloud:
    """The cloud of a symmetric (3, 3) covariance in Å² without negative eigenvalues."""
    variances, axes = np.linalg.eigh(covariance)
    variances = np.maximum(variances, 0.0)
    if variances[2] - variances[0] <= ROUNDING * variances[2]:
        variances, axes = np.full(3, variances[2]), np.eye(3)
        if variances[2] < POINT_A2:
            return Cloud(axes, np.zeros(3), np.zeros(3), 0.0, 0.0, False)
    thin = bool(variances[0] < THIN_A2 and variances[2] > variances[0])
    if thin:
        variances = variances + THIN_A2
    density = 4 * np.pi / 3 / np.sqrt(np.prod(2 * np.pi * variances))
    limit = 1 / np.sqrt(2 * variances[0])
    return Cloud(frozen(axes), frozen(variances), frozen(variances - variances[0]), float(limit), float(density), thin)


@dataclass(frozen=True, eq=False)
class SmearedSum:
    """Sums over one lattice at one k for one cloud; see `smeared_sum`.

    plan: the LatticeSum that gives waves and splitting. cutoff: Å. images (3, n) Å in the principal axes of the cloud,
    with phase (2, n). curvatures (n_nodes, 3) 1/Å² and weights (n_nodes,) 1/Å: the quadrature, none for a closed form.
    self_term (3,) 1/Å³. scale (n_q,) Å³/Å³: −(4π/V) exp(...)/q² of every wave, twice that where −q is left out.
    """

    plan: LatticeSum
    cloud: Cloud
    cutoff: float
    images: FloatArray
    phase: FloatArray
    curvatures: FloatArray
    weights: FloatArray
    self_term: FloatArray
    scale: FloatArray

    def place(self, positions_cart: FloatArray) -> Points:
        """Reduce Cartesian positions (n, 3) in Å by lattice vectors."""
        return self.plan.place(positions_cart)

    def tensors(
        self, targets: Points, sources: Points, slopes: bool = False
    ) -> tuple[ComplexArray, ComplexArray | None, FloatArray]:
        """Averaged tensors of every pair, their derivatives if asked for, and how close the cloud comes.

        Returns shape (n_t, n_s, 3, 3) complex in T/µB, Σ_R ⟨T(x_t − x_s − R)⟩ exp(−2πi k·R), a source on its target
        (within 1e-6 Å) left out; shape (n_t, n_s, 3, 3, 3) complex in T/µB/Å, its derivative by x_t along the last
        axis, or None; and shape (n_t, n_s) float: the smallest x·U⁻¹·x/2 of the images of a source, infinite without a
        cloud.
        """
        n_t, n_s = len(targets), len(sources)
        out = np.zeros((n_t, n_s, 6), dtype=complex)
        steep = np.zeros((n_t if slopes else 0, n_s, 13), dtype=complex)
        reach = np.full((n_t, n_s), np.inf)
        axes, lattice = self.cloud.axes, self.plan.lattice
        turned = [np.ascontiguousarray(x @ axes) for x in (targets.reduced, sources.reduced, lattice.cell)]
        over_rows(
            smeared_tensors, n_t, turned[0], turned[1], turned[2], stable_inverse(turned[2]), self.images, self.phase,
            self.plan.k, self.cutoff, ON_SITE_A, self.plan.alpha, self.cloud.limit, self.curvatures, self.weights,
            self.cloud.stiffness, self.cloud.density, self.self_term, out, steep, reach, at_least=2,
        )  # fmt: skip
        turns = np.exp(-2j * np.pi * (targets.turns[:, None] - sources.turns[None, :])) * DIPOLE_T_A3_PER_MUB
        tensors = _turned(out[..., _SIX], axes)
        derivatives = _with_slopes(steep, axes) if slopes else None
        self._add_waves(targets, sources, tensors, derivatives)
        tensors *= turns[:, :, None, None]
        if derivatives is not None:
            derivatives *= turns[:, :, None, None, None]
        return tensors, derivatives, reach

    def _add_waves(
        self, targets: Points, sources: Points, tensors: ComplexArray, derivatives: ComplexArray | None
    ) -> None:
        """Add the reciprocal part, divided by C, to both."""
        q, n_q = self.plan.q, len(self.plan.q)
        if n_q == 0:
            return
        there = wave_table(self.plan, sources.reduced)
        waves = (there[:, :n_q] - 1j * there[:, n_q:]).T
        step = max(1, BLOCK // n_q)
        for start in range(0, len(targets), step):
            block = slice(start, start + step)
            here = wave_table(self.plan, targets.reduced[block])
            own = (here[:, :n_q] + 1j * here[:, n_q:]) * self.scale
            for a, b in _PAIRS:
                value = self._taken((own * (q[:, a] * q[:, b])) @ waves)
                tensors[block, :, a, b] += value
                if a != b:
                    tensors[block, :, b, a] += value
            if derivatives is None:
                continue
            ten = np.stack(
                [self._taken((1j * own * (q[:, a] * q[:, b] * q[:, c])) @ waves) for a, b, c in _TRIPLES], axis=-1
            )
            derivatives[block] += ten[..., _TEN]

    def _taken(self, value: Any) -> ComplexArray:
        # Only one of each pair ±q is kept where the sum is real: the other one brings the conjugate.
        return np.asarray(value.real + 0j if self.plan.is_real else value)


def _turned(tensors: ComplexArray, axes: FloatArray) -> ComplexArray:
    return np.asarray(np.einsum("xa,...ab,yb->...xy", axes, tensors, axes))


def _with_slopes(flat: ComplexArray | FloatArray, axes: FloatArray) -> ComplexArray:
    """Shape (..., 3, 3, 3). Third derivatives plus δ_ab times the gradient of the density term, in Cartesian axes."""
    whole = flat[..., :10][..., _TEN] + np.eye(3)[:, :, None] * flat[..., None, None, 10:]
    return np.asarray(np.einsum("xa,yb,zc,...abc->...xyz", axes, axes, axes, whole, optimize=True))


def smeared_sum(cell: FloatArray, k: FloatArray, tol: float, covariance: FloatArray) -> SmearedSum:
    """Prepare sums over a lattice for a cloud; kept for the next call.

    cell (3, 3) Å, k (3,), tol as `latticedip.sums.bulk.lattice_sum`, which also says what is raised. covariance: Shape
    (3, 3) float in Å², symmetric, no eigenvalue negative; zero for a point.
    """
    return _smeared_sum(
        np.ascontiguousarray(cell, dtype=float).tobytes(),
        np.ascontiguousarray(k, dtype=float).tobytes(),
        check_tol(tol),
        np.ascontiguousarray(covariance, dtype=float).tobytes(),
    )


@lru_cache(maxsize=32)
def _smeared_sum(cell_bytes: bytes, k_bytes: bytes, tol: float, covariance_bytes: bytes) -> SmearedSum:
    cell = np.frombuffer(cell_bytes).reshape(3, 3)
    cloud = cloud_of(np.frombuffer(covariance_bytes).reshape(3, 3))
    lattice = reduce_cell(cell)
    wanted = TAIL_SHARE * tol / DIPOLE_T_A3_PER_MUB
    costs = (COST_IMAGE * (1.0 if cloud.is_isotropic else COST_NODES), COST_WAVE)
    alpha = choose_splitting(lattice.layer_distances, lattice.volume, wanted, costs)[0]
    if cloud.limit > 0:
        alpha = min(alpha, cloud.limit)
    plan = lattice_sum(cell, np.frombuffer(k_bytes), tol, alpha)
    square = np.einsum("qa,qa->q", plan.q, plan.q)
    along = (plan.q @ cloud.axes) ** 2 @ cloud.excess
    scale = (2.0 if plan.is_real else 1.0) * -4 * np.pi / plan.lattice.volume
    scale = scale * np.exp(-square / (4 * alpha**2) - along / 2) / square
    if cloud.is_isotropic:
        cutoff, images, phase = plan.cutoff, plan.images.T, plan.phase
        curvatures, weights = np.zeros((0, 3)), np.zeros(0)
        own = np.full(3, self_term(alpha))
    else:
        nodes, steps = panels(alpha, cloud.limit)
        curvatures, weights = _integrand(nodes, steps, cloud)
        cutoff = _cutoff(lattice, cloud, alpha, nodes, weights, wanted)
        images, cells = image_vectors(lattice, cutoff)
        turns = (cells @ plan.k) % 1.0
        phase = np.stack([np.cos(2 * np.pi * turns), -np.sin(2 * np.pi * turns)])
        inner = _integrand(*panels(0.0, alpha, 0.5 / np.sqrt(2 * cloud.excess[2])), cloud)
        own = 2 * inner[1] @ inner[0]
    return SmearedSum(
        plan=plan, cloud=cloud, cutoff=cutoff, images=frozen((images @ cloud.axes).T), phase=frozen(phase),
        curvatures=frozen(curvatures), weights=frozen(weights), self_term=frozen(own), scale=frozen(scale),
    )  # fmt: skip


def panels(lower: float, upper: float, first: float = np.inf) -> tuple[FloatArray, FloatArray]:
    """Nodes and weights of a quadrature over [lower, upper], in panels that at most double; from 0 to ``first``."""
    edges = [lower]
    while edges[-1] < upper:
        edges.append(min(upper, 2 * edges[-1] if edges[-1] > 0 else first))
    at, share = np.polynomial.legendre.leggauss(NODES)
    half = np.diff(edges)[:, None] / 2
    middle = np.array(edges[:-1])[:, None] + half
    return (middle + half * at).ravel(), (half * share).ravel()


def _integrand(w: FloatArray, steps: FloatArray, cloud: Cloud) -> tuple[FloatArray, FloatArray]:
    """c_i = w²/s_i, shape (n, 3), and (2/√π) Π s_i^{-1/2} times the step, shape (n,)."""
    s = 1 + 2 * w[:, None] ** 2 * cloud.excess
    return w[:, None] ** 2 / s, 2 / np.sqrt(np.pi) * steps / np.sqrt(np.prod(s, axis=1))


def _cutoff(
    lattice: ReducedLattice, cloud: Cloud, alpha: float, w: FloatArray, weights: FloatArray, wanted: float
) -> float:
    """Real-space cut-off in Å beyond which what is left out of any element is at most ``wanted`` (1/Å³).

    An element of the integrand is at most 2w² (2E + 1) exp(−E) Π s_i^{-1/2} with E ≥ y = v²r² and v² = w²/s of the
    longest axis, and decreases with y ≥ 1/2. Of exp(−y) nine tenths at the smallest v are the Gaussian of
    `gaussian_tail`; what stays beside it decreases with r for y ≥ 9.5.
    """
    stretched = 1 / np.sqrt(1 / alpha**2 + 2 * cloud.excess[2])
    v2 = w**2 / (1 + 2 * w**2 * cloud.excess[2])
    gauss = np.sqrt(BOUND_SHARE) * stretched
    u = 3.0
    while u < 30.0:
        r2 = (u / gauss) ** 2
        y = v2 * r2
        if stretched**2 * r2 >= 9.5:
            factor = float(np.sum(weights * 2 * w**2 * (2 * y + 1) * np.exp(u**2 - y)))
            factor += cloud.density * float(np.exp(u**2 - r2 / (2 * cloud.variances[2])))
            if gaussian_tail(gauss * lattice.layer_distances, np.asarray(u), np.asarray(factor)) <= wanted:
                return float(u / gauss)
        u *= 1.01
    raise AccuracyError("no cut-off of the lattice sum over a cloud keeps the requested tolerance.")


def smeared_pair_tensors(vectors: FloatArray, covariance: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Averaged tensors of single pairs: vectors (n, 3) in Å from source to target, none zero; covariance (3, 3) in Å².

    Returns shape (n, 3, 3) in T/µB, its derivatives by the vector (last axis), shape (n, 3, 3, 3) in T/µB/Å, and shape
    (n,): x·U⁻¹·x/2, infinite without a cloud.
    """
    cloud = cloud_of(covariance)
    n = len(vectors)
    turned = np.ascontiguousarray(np.asarray(vectors, dtype=float) @ cloud.axes)
    curvatures, weights = np.zeros((0, 3)), np.zeros(0)
    if n and not cloud.is_isotropic:
        longest = max(float(np.linalg.norm(turned, axis=1).max()), float(np.sqrt(2 * cloud.excess[2])))
        curvatures, weights = _integrand(*panels(0.0, cloud.limit, min(0.5 / longest, cloud.limit)), cloud)
    out, slopes = np.empty((n, 6)), np.empty((n, 13))
    smeared_pairs(0, n, turned, cloud.limit, curvatures, weights, cloud.stiffness, cloud.density, out, slopes)
    tensors = np.einsum("xa,nab,yb->nxy", cloud.axes, out[:, _SIX], cloud.axes)
    reach = turned**2 @ cloud.stiffness / 2 if cloud.limit > 0 else np.full(n, np.inf)
    return (
        DIPOLE_T_A3_PER_MUB * tensors,
        DIPOLE_T_A3_PER_MUB * np.asarray(_with_slopes(slopes, cloud.axes), dtype=float),
        reach,
    )
