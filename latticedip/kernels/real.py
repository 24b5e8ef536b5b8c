"""Real part of the lattice sum: pairs of targets and sources, with the images inside the cut-off.

Targets that lie together share one list of images.

Flat arrays in, ``out`` buffers filled in place; nothing here knows of crystals.
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import ORDERED, kernel
from latticedip.kernels.radial import TWO_OVER_SQRT_PI, U_MAX, radial_functions

#: Images of a source are taken in groups of this many, whose terms are added up side by side.
LANES = 4
#: Groups evaluated together: long enough to vectorise, short enough for the fastest caches.
GROUPS = 96


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
def near_images(dx, dy, dz, images, lengths, reach, square, chosen):
    """Write to ``chosen`` the images that lie within reach of a separation; return how many."""
    n_images = np.searchsorted(lengths, reach + np.sqrt(dx * dx + dy * dy + dz * dz), "right")
    for i in range(n_images):
        px = dx - images[0, i]
        py = dy - images[1, i]
        pz = dz - images[2, i]
        square[i] = px * px + py * py + pz * pz
    count = 0
    reach2 = reach * reach
    # Every index is written, and kept only by moving on: no branch to mispredict.
    for i in range(n_images):
        chosen[count] = i
        count += square[i] <= reach2
    return count


@kernel(fastmath=ORDERED, inline=True)
def take_images(source, offset, turn, images, phase, chosen, taken, count, start, room, places, vectors, weights):
    """List chosen images taken..count of a source as groups of LANES from ``start`` on, ``room`` at most.

    offset (3,): Å, added to every image; turn: its phase in turns. places (3, GROUPS), vectors (LANES, 3, GROUPS) and
    weights (2, LANES, GROUPS), flat: position of the source, lattice vector and phase of the image. Returns the number
    of groups.
    """
    c = np.cos(2.0 * np.pi * turn) if turn != 0.0 else 1.0
    g = -np.sin(2.0 * np.pi * turn) if turn != 0.0 else 0.0
    groups = min((count - taken + LANES - 1) // LANES, room)
    for a in range(3):
        for j in range(groups):
            places[a * GROUPS + start + j] = source[a]
    for lane in range(LANES):
        for j in range(groups):
            entry = taken + lane * groups + j
            i = np.uint64(chosen[min(entry, count - 1)])
            at = start + j
            for a in range(3):
                vectors[(3 * lane + a) * GROUPS + at] = offset[a] + images[a, i]
            # Groups are filled up with images of no weight.
            kept = 1.0 if entry < count else 0.0
            weights[0, lane * GROUPS + at] = kept * (c * phase[0, i] - g * phase[1, i])
            weights[1, lane * GROUPS + at] = kept * (c * phase[1, i] + g * phase[0, i])
    return groups


@kernel(fastmath=ORDERED, inline=True)
def separations(n, tx, ty, tz, places, vectors, site2, far2, apart, square):
    """Separations target − source − lattice vector (3, GROUPS), flat, and their squares; return how many are on site.

    An image on the target is moved out to far2, beyond which there is nothing to be seen.
    """
    on_site = 0
    for i in range(n):
        # Unsigned numbers, because an index that might be negative would keep the loop from being vectorised.
        j, k = np.uint64(i + GROUPS), np.uint64(i + 2 * GROUPS)
        x = (tx - places[i]) - vectors[i]
        y = (ty - places[j]) - vectors[j]
        z = (tz - places[k]) - vectors[k]
        r2 = x * x + y * y + z * z
        apart[i] = x
        apart[j] = y
        apart[k] = z
        is_on = r2 < site2
        on_site += is_on
        square[i] = far2 if (is_on or r2 > far2) else r2
    return on_site


@kernel(fastmath=ORDERED, inline=True)
def group_sums(n, apart, b1, b2, weights, sums):
    """Σ w (B₂ r_a r_b − B₁ δ_ab) over the LANES images of each group: xx, yy, xy, xz, yz in sums (5, GROUPS), flat.

    apart (LANES, 3, GROUPS), b1, b2 (LANES, n) and weights (LANES, GROUPS), flat.
    """
    first0, first1, first2, first3 = b1[:n], b1[n : 2 * n], b1[2 * n : 3 * n], b1[3 * n : 4 * n]
    second0, second1, second2, second3 = b2[:n], b2[n : 2 * n], b2[2 * n : 3 * n], b2[3 * n : 4 * n]
    for i in range(n):
        xx = 0.0
        yy = 0.0
        xy = 0.0
        xz = 0.0
        yz = 0.0
        for lane in range(LANES):
            x = apart[np.uint64(i + 3 * lane * GROUPS)]
            y = apart[np.uint64(i + (3 * lane + 1) * GROUPS)]
            z = apart[np.uint64(i + (3 * lane + 2) * GROUPS)]
            w = weights[np.uint64(i + lane * GROUPS)]
            if lane == 0:
                w1 = w * first0[i]
                w2 = w * second0[i]
            elif lane == 1:
                w1 = w * first1[i]
                w2 = w * second1[i]
            elif lane == 2:
                w1 = w * first2[i]
                w2 = w * second2[i]
            else:
                w1 = w * first3[i]
                w2 = w * second3[i]
            bx = w2 * x
            by = w2 * y
            xx += bx * x - w1
            yy += by * y - w1
            xy += bx * y
            xz += bx * z
            yz += by * z
        sums[i] = xx
        sums[np.uint64(i + GROUPS)] = yy
        sums[np.uint64(i + 2 * GROUPS)] = xy
        sums[np.uint64(i + 3 * GROUPS)] = xz
        sums[np.uint64(i + 4 * GROUPS)] = yz


@kernel(fastmath=ORDERED)
def real_tensors(
    first,
    last,
    starts,
    centres,
    radii,
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
    out,
):
    """Add the real part and the self term of T/C at the targets of boxes first..last to ``out``.

    starts (n_boxes + 1,): the rows of targets in each box. centres (n_boxes, 3), radii (n_boxes,): Å.
    targets (n_t, 3), sources (n_s, 3): Cartesian Å, reduced into the cell. cell, inverse (3, 3).
    images (3, n): lattice vectors by increasing length, zero first; lengths (n,); phase (2, n): cos and −sin of
    2π k·n for each. k (3,). alpha 1/Å, cutoff Å; a source closer than on_site Å is left out and self_term (1/Å³)
    added to the diagonal instead.
    out (parts, n_t, n_s, 5): real and, where parts is 2, imaginary parts of xx, yy, xy, xz, yz.
    """
    n_sources = sources.shape[0]
    parts = out.shape[0]
    square = np.empty(images.shape[1])
    chosen = np.empty(images.shape[1] + 1, np.int64)
    shift = np.empty(3)
    offset = np.empty(3)
    places = np.zeros(3 * GROUPS)
    vectors = np.zeros(3 * LANES * GROUPS)
    weights = np.zeros((2, LANES * GROUPS))
    apart = np.empty(3 * LANES * GROUPS)
    distance2 = np.empty(LANES * GROUPS)
    b1 = np.empty(LANES * GROUPS)
    b2 = np.empty(LANES * GROUPS)
    sums = np.empty(5 * GROUPS)
    owner = np.empty(GROUPS, np.int64)
    begins = np.empty(GROUPS + 1, np.int64)
    site2 = on_site * on_site
    # There exp(−u²) is 5e-22: an image put there adds nothing.
    far2 = (U_MAX / alpha) ** 2
    for box in range(first, last):
        reach = cutoff + radii[box]
        s = 0
        taken = 0
        count = 0
        turn = 0.0
        while s < n_sources:
            # Fill the list with images of as many sources as go into it; a source with many goes on in the next list.
            groups = 0
            members = 0
            while s < n_sources and groups < GROUPS:
                if taken == 0:
                    dx, dy, dz = nearest_image(
                        centres[box, 0] - sources[s, 0], centres[box, 1] - sources[s, 1],
                        centres[box, 2] - sources[s, 2], cell, inverse, shift,
                    )  # fmt: skip
                    turn = shift[0] * k[0] + shift[1] * k[1] + shift[2] * k[2]
                    for a in range(3):
                        offset[a] = shift[0] * cell[0, a] + shift[1] * cell[1, a] + shift[2] * cell[2, a]
                    count = near_images(dx, dy, dz, images, lengths, reach, square, chosen)
                new = take_images(
                    sources[s], offset, turn, images, phase, chosen, taken, count, groups, GROUPS - groups, places,
                    vectors, weights,
                )  # fmt: skip
                owner[members] = s
                begins[members] = groups
                members += new > 0
                groups += new
                taken += LANES * new
                if taken >= count:
                    s += 1
                    taken = 0
            begins[members] = groups
            # Whole vectors: what is left over has no weight.
            n = (groups + 7) // 8 * 8
            for part in range(2):
                for lane in range(LANES):
                    for j in range(groups, n):
                        weights[part, lane * GROUPS + j] = 0.0
            for t in range(starts[box], starts[box + 1]):
                found = 0
                for lane in range(LANES):
                    found += separations(
                        n, targets[t, 0], targets[t, 1], targets[t, 2], places, vectors[3 * lane * GROUPS :], site2,
                        far2, apart[3 * lane * GROUPS :], distance2[lane * n :],
                    )  # fmt: skip
                radial_functions(LANES * n, alpha, distance2, b1, b2)
                for part in range(parts):
                    group_sums(n, apart, b1, b2, weights[part], sums)
                    for p in range(members):
                        xx = 0.0
                        yy = 0.0
                        xy = 0.0
                        xz = 0.0
                        yz = 0.0
                        for j in range(begins[p], begins[p + 1]):
                            xx += sums[j]
                            yy += sums[GROUPS + j]
                            xy += sums[2 * GROUPS + j]
                            xz += sums[3 * GROUPS + j]
                            yz += sums[4 * GROUPS + j]
                        out[part, t, owner[p], 0] += xx
                        out[part, t, owner[p], 1] += yy
                        out[part, t, owner[p], 2] += xy
                        out[part, t, owner[p], 3] += xz
                        out[part, t, owner[p], 4] += yz
                if found == 0:
                    continue
                for p in range(members):
                    for j in range(begins[p], begins[p + 1]):
                        for lane in range(LANES):
                            x = apart[3 * lane * GROUPS + j]
                            y = apart[(3 * lane + 1) * GROUPS + j]
                            z = apart[(3 * lane + 2) * GROUPS + j]
                            if x * x + y * y + z * z < site2:
                                for part in range(parts):
                                    out[part, t, owner[p], 0] += self_term * weights[part, lane * GROUPS + j]
                                    out[part, t, owner[p], 1] += self_term * weights[part, lane * GROUPS + j]


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
