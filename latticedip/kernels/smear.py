"""Real part of lattice sums of dipole tensors that are averaged over a Gaussian cloud, with their derivatives.

Everything is in the principal axes of the cloud. For one separation x of target and source the potential that remains
in real space is

    φ(x) = (2/√π) ∫_α^W Π_i s_i^{-1/2} exp(−Σ_i c_i x_i²) dw,    s_i = 1 + 2 w² u_i,  c_i = w²/s_i

with u the excess of the variances over the smallest one and W = 1/√(2 × smallest variance); see
`latticedip.sums.smear`. For an isotropic cloud u = 0 and the integral is [erfc(αr) − erfc(Wr)]/r.

Flat arrays in, ``out`` buffers filled in place; nothing here knows of crystals.
"""

from __future__ import annotations

import math

import numpy as np

from latticedip.kernels.jit import kernel
from latticedip.kernels.radial import TWO_OVER_SQRT_PI
from latticedip.kernels.real import nearest_image

#: Beyond this exponent a node adds nothing that a double could hold beside the rest.
LARGEST_EXPONENT = 100.0


@kernel(inline=True)
def add_closed(x, alpha, limit, second, third):
    """Add second (6) and third (10) derivatives of [erfc(αr) − erfc(Wr)]/r; W = 0 stands for no cloud (W infinite)."""
    r2 = x[0] * x[0] + x[1] * x[1] + x[2] * x[2]
    r = math.sqrt(r2)
    b1 = 0.0
    b2 = 0.0
    b3 = 0.0
    for side in range(2):
        a = alpha if side == 0 else limit
        if side == 1 and limit == 0.0:
            continue
        sign = 1.0 if side == 0 else -1.0
        gauss = math.exp(-a * a * r2)
        a1 = TWO_OVER_SQRT_PI * a
        one = (math.erfc(a * r) / r + a1 * gauss) / r2
        two = (3.0 * one + 2.0 * a * a * a1 * gauss) / r2
        b1 += sign * one
        b2 += sign * two
        b3 += sign * (5.0 * two + 4.0 * a**4 * a1 * gauss) / r2
    e = 0
    for a in range(3):
        for b in range(a, 3):
            second[e] += b2 * x[a] * x[b] - (b1 if a == b else 0.0)
            e += 1
    e = 0
    for a in range(3):
        for b in range(a, 3):
            for c in range(b, 3):
                mixed = (x[c] if a == b else 0.0) + (x[b] if a == c else 0.0) + (x[a] if b == c else 0.0)
                third[e] += b2 * mixed - b3 * x[a] * x[b] * x[c]
                e += 1


@kernel(inline=True)
def add_nodes(x, curvatures, weights, second, third):
    """Add second (6) and third (10) derivatives of φ by a quadrature: c (n, 3), weights (n,), w increasing."""
    for n in range(weights.shape[0]):
        exponent = 0.0
        for a in range(3):
            exponent += curvatures[n, a] * x[a] * x[a]
        if exponent > LARGEST_EXPONENT:
            break
        value = weights[n] * math.exp(-exponent)
        e = 0
        f = 0
        for a in range(3):
            da = -2.0 * curvatures[n, a] * x[a]
            for b in range(a, 3):
                db = -2.0 * curvatures[n, b] * x[b]
                second[e] += value * (da * db - (2.0 * curvatures[n, a] if a == b else 0.0))
                e += 1
                for c in range(b, 3):
                    dc = -2.0 * curvatures[n, c] * x[c]
                    mixed = 0.0
                    if a == b:
                        mixed += curvatures[n, a] * dc
                    if a == c:
                        mixed += curvatures[n, a] * db
                    if b == c:
                        mixed += curvatures[n, b] * da
                    third[f] += value * (da * db * dc - 2.0 * mixed)
                    f += 1


@kernel(inline=True)
def add_density(x, stiffness, density, second, slope):
    """Add (4π/3) ρ(x) to the diagonal, and write its gradient: what makes the tensor traceless (the principal value).

    stiffness (3,): 1/variance; density: (4π/3) ρ(0). Returns the exponent of the density.
    """
    exponent = 0.5 * (stiffness[0] * x[0] * x[0] + stiffness[1] * x[1] * x[1] + stiffness[2] * x[2] * x[2])
    value = density * math.exp(-exponent) if exponent < 700.0 else 0.0
    second[0] += value
    second[3] += value
    second[5] += value
    for a in range(3):
        slope[a] = -stiffness[a] * x[a] * value
    return exponent


@kernel()
def smeared_tensors(
    first, last, targets, sources, cell, inverse, images, phase, k, cutoff, on_site, alpha, limit, curvatures, weights,
    stiffness, density, self_term, out, slopes, reach,
):  # fmt: skip
    """Add the real part, divided by C, to rows first..last of ``out`` and ``slopes``.

    targets (n_t, 3), sources (n_s, 3), cell, inverse (3, 3), images (3, n): Cartesian Å, in the principal axes.
    phase (2, n): cos and −sin of 2π k·n. alpha, limit: α and W of the closed form, which holds where there are no
    nodes. curvatures (n_nodes, 3), weights (n_nodes,): the quadrature. stiffness (3,), density: as `add_density`,
    without a cloud 0. self_term (3,): added to the diagonal where a source is on its target and left out.
    out (n_t, n_s, 6) complex: xx, xy, xz, yy, yz, zz. slopes (n_t, n_s, 13) complex, or an empty first axis: third
    derivatives xxx, xxy, xxz, xyy, xyz, xzz, yyy, yyz, yzz, zzz and the gradient of what `add_density` adds.
    reach (n_t, n_s): smallest exponent of the density met.
    """
    shift = np.empty(3)
    x = np.empty(3)
    second = np.empty(6)
    third = np.empty(13)
    closed = weights.shape[0] == 0
    for t in range(first, last):
        for s in range(sources.shape[0]):
            dx, dy, dz = nearest_image(
                targets[t, 0] - sources[s, 0], targets[t, 1] - sources[s, 1], targets[t, 2] - sources[s, 2],
                cell, inverse, shift,
            )  # fmt: skip
            turn = 2.0 * np.pi * (shift[0] * k[0] + shift[1] * k[1] + shift[2] * k[2])
            carried = complex(np.cos(turn), -np.sin(turn))
            for i in range(images.shape[1]):
                x[0] = dx - images[0, i]
                x[1] = dy - images[1, i]
                x[2] = dz - images[2, i]
                r2 = x[0] * x[0] + x[1] * x[1] + x[2] * x[2]
                if r2 > cutoff * cutoff:
                    continue
                weight = carried * complex(phase[0, i], phase[1, i])
                if r2 < on_site * on_site:
                    out[t, s, 0] += weight * self_term[0]
                    out[t, s, 3] += weight * self_term[1]
                    out[t, s, 5] += weight * self_term[2]
                    continue
                second[:] = 0.0
                third[:] = 0.0
                if closed:
                    add_closed(x, alpha, limit, second, third)
                else:
                    add_nodes(x, curvatures, weights, second, third)
                if density > 0.0:
                    reach[t, s] = min(reach[t, s], add_density(x, stiffness, density, second, third[10:]))
                for e in range(6):
                    out[t, s, e] += weight * second[e]
                if slopes.shape[0] > 0:
                    for e in range(13):
                        slopes[t, s, e] += weight * third[e]


@kernel()
def smeared_pairs(first, last, vectors, limit, curvatures, weights, stiffness, density, out, slopes):
    """Write tensors and slopes of single pairs, divided by C; arguments as in `smeared_tensors`, α = 0.

    vectors (n, 3): Å, in the principal axes, none zero. out (n, 6), slopes (n, 13), float.
    """
    closed = weights.shape[0] == 0
    for i in range(first, last):
        out[i] = 0.0
        slopes[i] = 0.0
        if closed:
            add_closed(vectors[i], 0.0, limit, out[i], slopes[i])
        else:
            add_nodes(vectors[i], curvatures, weights, out[i], slopes[i])
        if density > 0.0:
            add_density(vectors[i], stiffness, density, out[i], slopes[i, 10:])
