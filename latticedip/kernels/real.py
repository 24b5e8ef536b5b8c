"""Real part of the lattice sum: pairs of targets and sources, with their images inside the cut-off.

Flat arrays in, ``out`` buffers filled in place; nothing here knows of crystals.
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import ORDERED, kernel
from latticedip.kernels.radial import TWO_OVER_SQRT_PI, radial_functions

#: Images evaluated together: long enough to vectorise, short enough for the fastest cache.
CHUNK = 1024


@kernel(fastmath=ORDERED, inline=True)
def nearest_image(dx, dy, dz, cell, inverse, shift):
    """Bring a separation to within half a cell vector along each axis; ``shift`` receives the cells taken away."""
    for axis in range(3):
        f = dx * inverse[0, axis] + dy * inverse[1, axis] + dz * inverse[2, axis]
        shift[axis] = np.rint(f)
    dx -= shift[0] * cell[0, 0] + shift[1] * cell[1, 0] + shift[2] * cell[2, 0]
    dy -= shift[0] * cell[0, 1] + shift[1] * cell[1, 1] + shift[2] * cell[2, 1]
    dz -= shift[0] * cell[0, 2] + shift[1] * cell[1, 2] + shift[2] * cell[2, 2]
    return dx, dy, dz


@kernel(fastmath=ORDERED, inline=True)
def gather(dx, dy, dz, begin, n_images, images, cutoff2, square, chosen, x, y, z, count):
    """Append the separations from images begin..n_images that lie inside the cut-off; return the new count."""
    for i in range(n_images):
        px = dx - images[0, i]
        py = dy - images[1, i]
        pz = dz - images[2, i]
        square[i] = px * px + py * py + pz * pz
    start = count
    # Every index is written, and kept only by moving on: no branch to mispredict.
    for i in range(begin, n_images):
        chosen[count] = i
        count += square[i] <= cutoff2
    which, px, py, pz = chosen[start:count], x[start:count], y[start:count], z[start:count]
    for j in range(count - start):
        i = np.uint64(which[j])
        px[j] = dx - images[0, i]
        py[j] = dy - images[1, i]
        pz[j] = dz - images[2, i]
    return count


@kernel(fastmath=True, inline=True)
def weighted_sums(start, stop, weight, chosen, x, y, z, b1, b2):
    """Σ w (B₂ r_a r_b − B₁ δ_ab) over gathered images: xx, yy, xy, xz, yz."""
    xx = 0.0
    yy = 0.0
    xy = 0.0
    xz = 0.0
    yz = 0.0
    # Slices, because an index that might be negative would keep the loop from being vectorised.
    px, py, pz = x[start:stop], y[start:stop], z[start:stop]
    first, second, which = b1[start:stop], b2[start:stop], chosen[start:stop]
    for j in range(stop - start):
        w = weight[np.uint64(which[j])]
        w1 = w * first[j]
        bx = w * second[j] * px[j]
        by = w * second[j] * py[j]
        xx += bx * px[j] - w1
        yy += by * py[j] - w1
        xy += bx * py[j]
        xz += bx * pz[j]
        yz += by * pz[j]
    return xx, yy, xy, xz, yz


@kernel(fastmath=ORDERED)
def real_tensors(
    first,
    last,
    targets,
    sources,
    cell,
    inverse,
    images,
    lengths,
    phase,
    k,
    alpha,
    cutoff,
    on_site,
    self_term,
    out_re,
    out_im,
):
    """Add the real part and the self term of T/C to rows first..last of ``out``.

    targets (n_t, 3), sources (n_s, 3): Cartesian Å, reduced into the cell. cell, inverse (3, 3).
    images (3, n): lattice vectors by increasing length, zero first; lengths (n,); phase (2, n): cos and −sin of
    2π k·n for each. k (3,). alpha 1/Å, cutoff Å; a source closer than on_site Å is left out and self_term (1/Å³)
    added to the diagonal instead.
    out_re, out_im (n_t, n_s, 5): xx, yy, xy, xz, yz; out_im is left alone when its first axis is empty.
    """
    n_sources = sources.shape[0]
    n_all = images.shape[1]
    is_complex = out_im.shape[0] > 0
    capacity = CHUNK + n_all
    x = np.empty(capacity)
    y = np.empty(capacity)
    z = np.empty(capacity)
    distance2 = np.empty(capacity)
    b1 = np.empty(capacity)
    b2 = np.empty(capacity)
    chosen = np.empty(capacity + 1, np.int64)
    square = np.empty(n_all)
    starts = np.empty(n_sources + 1, np.int64)
    skipped = np.empty(n_sources, np.bool_)
    turns = np.empty(n_sources)
    shift = np.empty(3)
    cutoff2 = cutoff * cutoff
    for t in range(first, last):
        s = 0
        while s < n_sources:
            begin = s
            count = 0
            while s < n_sources and count < CHUNK:
                dx, dy, dz = nearest_image(
                    targets[t, 0] - sources[s, 0], targets[t, 1] - sources[s, 1], targets[t, 2] - sources[s, 2],
                    cell, inverse, shift,
                )  # fmt: skip
                turns[s] = shift[0] * k[0] + shift[1] * k[1] + shift[2] * k[2]
                starts[s] = count
                d2 = dx * dx + dy * dy + dz * dz
                # Image 0 is the nearest: it is the site itself where the target lies on it.
                skipped[s] = d2 < on_site * on_site
                n_images = np.searchsorted(lengths, cutoff + np.sqrt(d2), "right")
                count = gather(
                    dx,
                    dy,
                    dz,
                    1 if skipped[s] else 0,
                    n_images,
                    images,
                    cutoff2,
                    square,
                    chosen,
                    x,
                    y,
                    z,
                    count,
                )
                s += 1
            starts[s] = count
            for j in range(count):
                distance2[j] = x[j] * x[j] + y[j] * y[j] + z[j] * z[j]
            radial_functions(count, alpha, distance2, b1, b2)
            for p in range(begin, s):
                sums = weighted_sums(starts[p], starts[p + 1], phase[0], chosen, x, y, z, b1, b2)
                own = self_term if skipped[p] else 0.0
                c = np.cos(2.0 * np.pi * turns[p]) if turns[p] != 0.0 else 1.0
                if not is_complex:
                    for e in range(5):
                        out_re[t, p, e] += c * (sums[e] + (own if e < 2 else 0.0))
                    continue
                g = -np.sin(2.0 * np.pi * turns[p])
                imaginary = weighted_sums(starts[p], starts[p + 1], phase[1], chosen, x, y, z, b1, b2)
                for e in range(5):
                    real = sums[e] + (own if e < 2 else 0.0)
                    out_re[t, p, e] += c * real - g * imaginary[e]
                    out_im[t, p, e] += c * imaginary[e] + g * real


@kernel(fastmath=ORDERED)
def real_gradients(
    first, last, targets, sources, moments, cell, inverse, images, phase, k, alpha, cutoff, on_site, out
):
    """Add the real part of ∂B_a/∂x_c (divided by C) to rows first..last of ``out`` (n_t, 3, 3) complex.

    moments (n_s, 3) complex: sources' components. Other arguments as in `real_tensors`. The self term has no
    gradient: the field of a smeared dipole is even about its own centre.
    """
    shift = np.empty(3)
    cutoff2 = cutoff * cutoff
    a1 = TWO_OVER_SQRT_PI * alpha
    a2 = 2.0 * alpha * alpha * a1
    a3 = 2.0 * alpha * alpha * a2
    square = np.empty(1)
    one = np.empty(1)
    two = np.empty(1)
    r = np.empty(3)
    for t in range(first, last):
        for s in range(sources.shape[0]):
            dx, dy, dz = nearest_image(
                targets[t, 0] - sources[s, 0], targets[t, 1] - sources[s, 1], targets[t, 2] - sources[s, 2],
                cell, inverse, shift,
            )  # fmt: skip
            turn = 2.0 * np.pi * (shift[0] * k[0] + shift[1] * k[1] + shift[2] * k[2])
            carried = complex(np.cos(turn), -np.sin(turn))
            for i in range(images.shape[1]):
                r[0] = dx - images[0, i]
                r[1] = dy - images[1, i]
                r[2] = dz - images[2, i]
                r2 = r[0] * r[0] + r[1] * r[1] + r[2] * r[2]
                if r2 > cutoff2 or r2 < on_site * on_site:
                    continue
                square[0] = r2
                radial_functions(1, alpha, square, one, two)
                gauss = np.exp(-alpha * alpha * r2)
                b2 = two[0]
                b3 = (5.0 * b2 + a3 * gauss) / r2
                weight = carried * complex(phase[0, i], phase[1, i])
                along = moments[s, 0] * r[0] + moments[s, 1] * r[1] + moments[s, 2] * r[2]
                for a in range(3):
                    for c in range(3):
                        term = b2 * (r[a] * moments[s, c] + r[c] * moments[s, a]) - b3 * r[a] * r[c] * along
                        if a == c:
                            term += b2 * along
                        out[t, a, c] += weight * term
