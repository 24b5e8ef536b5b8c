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
def nearest_image(dx, dy, dz, cell, inverse, shift):  # type: ignore[no-untyped-def]
    """Bring a separation to within half a cell vector along each axis; ``shift`` receives the cells taken away."""
    for axis in range(3):
        f = dx * inverse[0, axis] + dy * inverse[1, axis] + dz * inverse[2, axis]
        shift[axis] = np.rint(f)
    dx -= shift[0] * cell[0, 0] + shift[1] * cell[1, 0] + shift[2] * cell[2, 0]
    dy -= shift[0] * cell[0, 1] + shift[1] * cell[1, 1] + shift[2] * cell[2, 1]
    dz -= shift[0] * cell[0, 2] + shift[1] * cell[1, 2] + shift[2] * cell[2, 2]
    return dx, dy, dz


@kernel(fastmath=ORDERED)
def real_tensors(first, last, targets, sources, cell, inverse, images, lengths, phase, k, alpha, cutoff, on_site, self_term, out_re, out_im):  # type: ignore[no-untyped-def]
    """Add the real part and the self term of T/C to rows first..last of ``out``.

    targets (n_t, 3), sources (n_s, 3): Cartesian Å, reduced into the cell. cell, inverse (3, 3).
    images (n, 3): lattice vectors by increasing length, zero first; lengths (n,); phase (n, 2): cos and −sin of
    2π k·n for each. k (3,). alpha 1/Å, cutoff Å; a source closer than on_site Å is left out and self_term (1/Å³)
    added to the diagonal instead.
    out_re, out_im (n_t, n_s, 5): xx, yy, xy, xz, yz; out_im is left alone when its first axis is empty.
    """
    n_sources = sources.shape[0]
    n_images = images.shape[0]
    is_complex = out_im.shape[0] > 0
    capacity = CHUNK + n_images
    x = np.empty(capacity)
    y = np.empty(capacity)
    z = np.empty(capacity)
    square = np.empty(capacity)
    weight_re = np.empty(capacity)
    weight_im = np.empty(capacity)
    b1 = np.empty(capacity)
    b2 = np.empty(capacity)
    starts = np.empty(n_sources + 1, np.int64)
    skipped = np.empty(n_sources, np.bool_)
    turns = np.empty(n_sources)
    shift = np.empty(3)
    cutoff2 = cutoff * cutoff
    site2 = on_site * on_site
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
                skipped[s] = d2 < site2
                reach = cutoff + np.sqrt(d2)
                # The home image is always first; it is dropped by overwriting when it is the site itself.
                i = 0
                while i < n_images and lengths[i] <= reach:
                    px = dx - images[i, 0]
                    py = dy - images[i, 1]
                    pz = dz - images[i, 2]
                    r2 = px * px + py * py + pz * pz
                    x[count] = px
                    y[count] = py
                    z[count] = pz
                    square[count] = r2
                    weight_re[count] = phase[i, 0]
                    weight_im[count] = phase[i, 1]
                    count += (r2 <= cutoff2) & ((i > 0) | (d2 >= site2))
                    i += 1
                s += 1
            starts[s] = count
            radial_functions(count, alpha, square, b1, b2)
            for p in range(begin, s):
                c = np.cos(2.0 * np.pi * turns[p])
                g = -np.sin(2.0 * np.pi * turns[p])
                xx = 0.0
                yy = 0.0
                xy = 0.0
                xz = 0.0
                yz = 0.0
                if is_complex:
                    ixx = 0.0
                    iyy = 0.0
                    ixy = 0.0
                    ixz = 0.0
                    iyz = 0.0
                    for i in range(starts[p], starts[p + 1]):
                        wr = weight_re[i]
                        wi = weight_im[i]
                        txx = b2[i] * x[i] * x[i] - b1[i]
                        tyy = b2[i] * y[i] * y[i] - b1[i]
                        txy = b2[i] * x[i] * y[i]
                        txz = b2[i] * x[i] * z[i]
                        tyz = b2[i] * y[i] * z[i]
                        xx += wr * txx
                        yy += wr * tyy
                        xy += wr * txy
                        xz += wr * txz
                        yz += wr * tyz
                        ixx += wi * txx
                        iyy += wi * tyy
                        ixy += wi * txy
                        ixz += wi * txz
                        iyz += wi * tyz
                    if skipped[p]:
                        xx += self_term
                        yy += self_term
                    out_re[t, p, 0] += c * xx - g * ixx
                    out_re[t, p, 1] += c * yy - g * iyy
                    out_re[t, p, 2] += c * xy - g * ixy
                    out_re[t, p, 3] += c * xz - g * ixz
                    out_re[t, p, 4] += c * yz - g * iyz
                    out_im[t, p, 0] += c * ixx + g * xx
                    out_im[t, p, 1] += c * iyy + g * yy
                    out_im[t, p, 2] += c * ixy + g * xy
                    out_im[t, p, 3] += c * ixz + g * xz
                    out_im[t, p, 4] += c * iyz + g * yz
                else:
                    for i in range(starts[p], starts[p + 1]):
                        bx = weight_re[i] * b2[i] * x[i]
                        by = weight_re[i] * b2[i] * y[i]
                        w1 = weight_re[i] * b1[i]
                        xx += bx * x[i] - w1
                        yy += by * y[i] - w1
                        xy += bx * y[i]
                        xz += bx * z[i]
                        yz += by * z[i]
                    if skipped[p]:
                        xx += self_term
                        yy += self_term
                    out_re[t, p, 0] += c * xx
                    out_re[t, p, 1] += c * yy
                    out_re[t, p, 2] += c * xy
                    out_re[t, p, 3] += c * xz
                    out_re[t, p, 4] += c * yz


@kernel(fastmath=ORDERED)
def real_gradients(first, last, targets, sources, moments, cell, inverse, images, phase, k, alpha, cutoff, on_site, out):  # type: ignore[no-untyped-def]
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
            for i in range(images.shape[0]):
                r[0] = dx - images[i, 0]
                r[1] = dy - images[i, 1]
                r[2] = dz - images[i, 2]
                r2 = r[0] * r[0] + r[1] * r[1] + r[2] * r[2]
                if r2 > cutoff2 or r2 < on_site * on_site:
                    continue
                square[0] = r2
                radial_functions(1, alpha, square, one, two)
                gauss = np.exp(-alpha * alpha * r2)
                b2 = two[0]
                b3 = (5.0 * b2 + a3 * gauss) / r2
                weight = carried * complex(phase[i, 0], phase[i, 1])
                along = moments[s, 0] * r[0] + moments[s, 1] * r[1] + moments[s, 2] * r[2]
                for a in range(3):
                    for c in range(3):
                        term = b2 * (r[a] * moments[s, c] + r[c] * moments[s, a]) - b3 * r[a] * r[c] * along
                        if a == c:
                            term += b2 * along
                        out[t, a, c] += weight * term
