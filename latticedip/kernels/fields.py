"""Real part of the field of given moments, for many targets: targets that lie together share one list of images.

Flat arrays in, ``out`` buffers filled in place; nothing here knows of crystals.
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import ORDERED, kernel
from latticedip.kernels.radial import U_MAX, radial_functions


@kernel(fastmath=ORDERED, inline=True)
def separations(n, tx, ty, tz, sx, sy, sz, site2, far2, x, y, z, square):
    """Separations target − image and their squares; an image on the target, or beyond far2, is put at far2."""
    for i in range(n):
        px = tx - sx[i]
        py = ty - sy[i]
        pz = tz - sz[i]
        r2 = px * px + py * py + pz * pz
        x[i] = px
        y[i] = py
        z[i] = pz
        square[i] = far2 if (r2 < site2 or r2 > far2) else r2


@kernel(fastmath=True, inline=True)
def summed(n, x, y, z, square, b1, b2, mx, my, mz, size):
    """Σ [B₂ r (r·m) − B₁ m] over images, and Σ B₂ r² |m| as a measure of what was added up."""
    bx = 0.0
    by = 0.0
    bz = 0.0
    weight = 0.0
    for i in range(n):
        along = b2[i] * (x[i] * mx[i] + y[i] * my[i] + z[i] * mz[i])
        bx += along * x[i] - b1[i] * mx[i]
        by += along * y[i] - b1[i] * my[i]
        bz += along * z[i] - b1[i] * mz[i]
        weight += b2[i] * square[i] * size[i]
    return bx, by, bz, weight


@kernel(fastmath=ORDERED)
def real_fields(
    first, last, starts, centres, radii, targets, images, moments, sizes, alpha, cutoff, on_site, self_term, out, weight
):
    """Add the real part and the self term of B/C at the targets of boxes first..last to ``out``.

    starts (n_boxes + 1,): rows of targets (n_t, 3) in each box. centres (n_boxes, 3), radii (n_boxes,): Å.
    images (3, n): Cartesian positions of all images of all sources that can come within the cut-off of a target.
    moments (parts, 3, n): real and, where parts is 2, imaginary parts of their moments in µB, phases included.
    sizes (n,): |m| of each. alpha 1/Å, cutoff Å; an image closer than on_site Å is left out and self_term times its
    moment added. out (parts, n_t, 3); weight (n_t,) receives Σ B₂ r² |m|.
    """
    n_images = images.shape[1]
    parts = moments.shape[0]
    near = np.empty(n_images, np.int64)
    position = np.empty((3, n_images))
    moment = np.empty((parts, 3, n_images))
    size = np.empty(n_images)
    x = np.empty(n_images)
    y = np.empty(n_images)
    z = np.empty(n_images)
    square = np.empty(n_images)
    b1 = np.empty(n_images)
    b2 = np.empty(n_images)
    site2 = on_site * on_site
    # There exp(−u²) is 5e-22: an image put there adds nothing.
    far2 = (U_MAX / alpha) ** 2
    for box in range(first, last):
        reach2 = (cutoff + radii[box]) ** 2
        cx = centres[box, 0]
        cy = centres[box, 1]
        cz = centres[box, 2]
        for i in range(n_images):
            px = cx - images[0, i]
            py = cy - images[1, i]
            pz = cz - images[2, i]
            square[i] = px * px + py * py + pz * pz
        n = 0
        # Every index is written, and kept only by moving on: no branch to mispredict.
        for i in range(n_images):
            near[n] = i
            n += square[i] <= reach2
        for i in range(n):
            j = np.uint64(near[i])
            size[i] = sizes[j]
            for c in range(3):
                position[c, i] = images[c, j]
                for part in range(parts):
                    moment[part, c, i] = moments[part, c, j]
        for t in range(starts[box], starts[box + 1]):
            separations(
                n, targets[t, 0], targets[t, 1], targets[t, 2], position[0], position[1], position[2], site2, far2,
                x, y, z, square,
            )  # fmt: skip
            radial_functions(n, alpha, square, b1, b2)
            for part in range(parts):
                bx, by, bz, added = summed(
                    n, x, y, z, square, b1, b2, moment[part, 0], moment[part, 1], moment[part, 2], size
                )
                out[part, t, 0] += bx
                out[part, t, 1] += by
                out[part, t, 2] += bz
                weight[t] = added
            for i in range(n):
                if x[i] * x[i] + y[i] * y[i] + z[i] * z[i] < site2:
                    for part in range(parts):
                        for c in range(3):
                            out[part, t, c] += self_term * moment[part, c, i]
