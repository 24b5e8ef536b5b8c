"""Reciprocal part of the lattice sum: sums of plane waves at many places, for tensors and for fields.

The waves of one stretch differ by whole numbers m of one reciprocal vector b₃ only, and with e = exp(i b₃·x)

    Σ_m f_m e^m = f₀ + Σ_{m>0} [(f_m + f_−m) cos(m b₃·x) + i (f_m − f_−m) sin(m b₃·x)],

so that two waves share one cosine and one sine. With n = m − k along each axis q = n₁ b₁ + n₂ b₂ + n₃ b₃, and n₁, n₂
are the same for a stretch: the sums of f, n₃ f and n₃² f give Σ q_a q_b f = Σ b_ia b_jb Σ n_i n_j f, and those of f and
n₃ f give Σ q_a f. Places lie side by side in the innermost loops.

Flat arrays in, ``out`` buffers filled in place; nothing here knows of crystals.
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import ORDERED, kernel

#: Places taken together: long enough to vectorise, and all their phases stay in the fastest cache.
LANES = 192
#: Loops run over whole multiples of this: places that a vectorised loop left over would be rounded in another way, and
#: results would depend on how places are spread over threads.
WHOLE = 32
#: Axes of the elements xx, yy, xy, xz, yz, and of the products n₁n₁, n₁n₂, n₂n₂, n₁n₃, n₂n₃, n₃n₃.
ROW, COLUMN = (0, 1, 0, 0, 1), (0, 1, 1, 2, 2)
ROW_OF_SIX, COLUMN_OF_SIX = (0, 0, 1, 0, 1, 2), (0, 1, 1, 2, 2, 2)


@kernel(fastmath=ORDERED, inline=True)
def powers_of(n, unit, top, phases):
    """Fill phases (top + 1, 2, LANES), flat, with the powers of unit phases, by doubling: rounding grows with log m.

    unit (2, LANES): cosines and sines.
    """
    for i in range(n):
        j = np.uint64(i + LANES)
        phases[i] = 1.0
        phases[j] = 0.0
    if top > 0:
        for i in range(n):
            phases[np.uint64(i + 2 * LANES)] = unit[0, i]
            phases[np.uint64(i + 3 * LANES)] = unit[1, i]
    for m in range(2, top + 1):
        half = m // 2
        one, two = phases[2 * LANES * half :], phases[2 * LANES * (m - half) :]
        new = phases[2 * LANES * m :]
        for i in range(n):
            j = np.uint64(i + LANES)
            new[i] = one[i] * two[i] - one[j] * two[j]
            new[j] = one[i] * two[j] + one[j] * two[i]


@kernel(fastmath=ORDERED, inline=True)
def times(n, first, second, sign, out):
    """Products of phases (2, LANES), flat, the second conjugated where sign is −1."""
    for i in range(n):
        j = np.uint64(i + LANES)
        b = sign * second[j]
        out[i] = first[i] * second[i] - first[j] * b
        out[j] = first[i] * b + first[j] * second[i]


@kernel(fastmath=ORDERED, inline=True)
def held(fresh, value):
    """What a sum holds: nothing where it is fresh."""
    return 0.0 if fresh else value


@kernel(fastmath=ORDERED, inline=True)
def mixed(factors, at, cosine, sine):
    """One order: a factor times its cosine and the next times its sine."""
    return factors[at] * cosine + factors[at + 1] * sine


@kernel(fastmath=ORDERED, inline=True)
def add_two_field_orders(n, fresh, a, b, phases, sums):
    """Add two orders to both sums, fresh ones at first.

    a, b (8,): coefficients. phases (2, 2, LANES), sums (4, LANES): flat.
    """
    for i in range(n):
        # Unsigned numbers, because an index that might be negative would keep the loop from being vectorised.
        j, k, l = np.uint64(i + LANES), np.uint64(i + 2 * LANES), np.uint64(i + 3 * LANES)
        c, s, d, t = phases[i], phases[j], phases[k], phases[l]
        sums[i] = held(fresh, sums[i]) + mixed(a, 0, c, s) + mixed(b, 0, d, t)
        sums[j] = held(fresh, sums[j]) + mixed(a, 2, c, s) + mixed(b, 2, d, t)
        sums[k] = held(fresh, sums[k]) + mixed(a, 4, c, s) + mixed(b, 4, d, t)
        sums[l] = held(fresh, sums[l]) + mixed(a, 6, c, s) + mixed(b, 6, d, t)


@kernel(fastmath=ORDERED, inline=True)
def add_four_field_orders(n, fresh, a, b, e, f, phases, sums):
    """The same for four orders, phases (4, 2, LANES): sums are then loaded and stored half as often."""
    for i in range(n):
        j, k, l = np.uint64(i + LANES), np.uint64(i + 2 * LANES), np.uint64(i + 3 * LANES)
        c, s, d, t = phases[i], phases[j], phases[k], phases[l]
        u, v = phases[np.uint64(i + 4 * LANES)], phases[np.uint64(i + 5 * LANES)]
        w, x = phases[np.uint64(i + 6 * LANES)], phases[np.uint64(i + 7 * LANES)]
        sums[i] = (
            held(fresh, sums[i]) + (mixed(a, 0, c, s) + mixed(b, 0, d, t)) + (mixed(e, 0, u, v) + mixed(f, 0, w, x))
        )
        sums[j] = (
            held(fresh, sums[j]) + (mixed(a, 2, c, s) + mixed(b, 2, d, t)) + (mixed(e, 2, u, v) + mixed(f, 2, w, x))
        )
        sums[k] = (
            held(fresh, sums[k]) + (mixed(a, 4, c, s) + mixed(b, 4, d, t)) + (mixed(e, 4, u, v) + mixed(f, 4, w, x))
        )
        sums[l] = (
            held(fresh, sums[l]) + (mixed(a, 6, c, s) + mixed(b, 6, d, t)) + (mixed(e, 6, u, v) + mixed(f, 6, w, x))
        )


@kernel(fastmath=ORDERED, inline=True)
def add_field_stretch(n, lead, second, sign, sums, n1, n2, both, total):
    """Add n₁ Re(e p), n₂ Re(e p) and Re(e q) to a vector, and the imaginary parts to another where ``both``.

    e = lead · second for unit phases (2, LANES), the second conjugated where sign is −1; p, q: sums (4, LANES);
    total (6, LANES); all flat.
    """
    for i in range(n):
        j, k, l = np.uint64(i + LANES), np.uint64(i + 2 * LANES), np.uint64(i + 3 * LANES)
        b = sign * second[j]
        er = lead[i] * second[i] - lead[j] * b
        ei = lead[i] * b + lead[j] * second[i]
        p = er * sums[i] - ei * sums[j]
        total[i] += n1 * p
        total[j] += n2 * p
        total[k] += er * sums[k] - ei * sums[l]
        if both:
            p = er * sums[j] + ei * sums[i]
            total[l] += n1 * p
            total[np.uint64(i + 4 * LANES)] += n2 * p
            total[np.uint64(i + 5 * LANES)] += er * sums[l] + ei * sums[k]


@kernel(fastmath=ORDERED)
def reciprocal_fields(first, last, targets, waves, k, limits, stretches, coefficients, out):
    """Write Re and, where ``out`` has two parts, Im of Σ_q q f_q exp(i q·x) to rows first..last of ``out``.

    targets (n_t, 3): Cartesian Å. waves (3, 3): rows are the reciprocal vectors including 2π; q = (m − k)·waves.
    k (3,); limits (3,): largest |m| per axis. stretches (n, 3): m₁, m₂ and the number of orders |m₃| from 0, made even.
    coefficients (n, orders, 8): for each stretch and order |m₃| the factors of cosine and sine in the real and in the
    imaginary part of Σ f e^m, and the same of Σ (m − k₃) f e^m; zero beyond the largest order.
    out (parts, n_t, 3).
    """
    parts = out.shape[0]
    unit = np.empty((3, 2, LANES))
    one = np.empty(2 * LANES * (limits[0] + 1))
    two = np.empty(2 * LANES * (limits[1] + 1))
    three = np.empty(2 * LANES * coefficients.shape[1])
    lead = np.empty(2 * LANES)
    shared = np.empty(2 * LANES)
    sums = np.empty(4 * LANES)
    total = np.empty(6 * LANES)
    for start in range(first, last, LANES):
        count = min(LANES, last - start)
        n = (count + WHOLE - 1) // WHOLE * WHOLE
        for i in range(n):
            t = start + min(i, count - 1)
            turn = 0.0
            for axis in range(3):
                angle = targets[t, 0] * waves[axis, 0] + targets[t, 1] * waves[axis, 1] + targets[t, 2] * waves[axis, 2]
                unit[axis, 0, i] = np.cos(angle)
                unit[axis, 1, i] = np.sin(angle)
                turn += k[axis] * angle
            lead[i] = np.cos(turn)
            lead[LANES + i] = -np.sin(turn)
        powers_of(n, unit[0], limits[0], one)
        powers_of(n, unit[1], limits[1], two)
        powers_of(n, unit[2], coefficients.shape[1] - 1, three)
        total[:] = 0.0
        for r in range(stretches.shape[0]):
            m1 = stretches[r, 0]
            m2 = stretches[r, 1]
            if r == 0 or m1 != stretches[r - 1, 0]:
                times(n, lead, one[2 * LANES * abs(m1) :], 1.0 if m1 >= 0 else -1.0, shared)
            c = coefficients[r]
            m = 0
            while m + 4 <= stretches[r, 2]:
                add_four_field_orders(n, m == 0, c[m], c[m + 1], c[m + 2], c[m + 3], three[2 * LANES * m :], sums)
                m += 4
            if m < stretches[r, 2]:
                add_two_field_orders(n, m == 0, c[m], c[m + 1], three[2 * LANES * m :], sums)
            add_field_stretch(
                n, shared, two[2 * LANES * abs(m2) :], 1.0 if m2 >= 0 else -1.0, sums, m1 - k[0], m2 - k[1],
                parts == 2, total,
            )  # fmt: skip
        for part in range(parts):
            for i in range(count):
                for c in range(3):
                    out[part, start + i, c] = (
                        total[3 * part * LANES + i] * waves[0, c]
                        + total[(3 * part + 1) * LANES + i] * waves[1, c]
                        + total[(3 * part + 2) * LANES + i] * waves[2, c]
                    )


@kernel(fastmath=ORDERED, inline=True)
def add_two_tensor_orders(n, fresh, a, b, phases, sums):
    """Add two orders to three sums, fresh ones at first.

    a, b (6,): coefficients. phases (2, 2, LANES), sums (6, LANES): flat.
    """
    for i in range(n):
        j, k, l = np.uint64(i + LANES), np.uint64(i + 2 * LANES), np.uint64(i + 3 * LANES)
        four, five = np.uint64(i + 4 * LANES), np.uint64(i + 5 * LANES)
        c, s, d, t = phases[i], phases[j], phases[k], phases[l]
        sums[i] = held(fresh, sums[i]) + a[0] * c + b[0] * d
        sums[j] = held(fresh, sums[j]) + a[1] * s + b[1] * t
        sums[k] = held(fresh, sums[k]) + a[2] * c + b[2] * d
        sums[l] = held(fresh, sums[l]) + a[3] * s + b[3] * t
        sums[four] = held(fresh, sums[four]) + a[4] * c + b[4] * d
        sums[five] = held(fresh, sums[five]) + a[5] * s + b[5] * t


@kernel(fastmath=ORDERED, inline=True)
def add_four_tensor_orders(n, fresh, a, b, e, f, phases, sums):
    """The same for four orders, phases (4, 2, LANES)."""
    for i in range(n):
        j, k, l = np.uint64(i + LANES), np.uint64(i + 2 * LANES), np.uint64(i + 3 * LANES)
        four, five = np.uint64(i + 4 * LANES), np.uint64(i + 5 * LANES)
        c, s, d, t = phases[i], phases[j], phases[k], phases[l]
        u, v = phases[four], phases[five]
        w, x = phases[np.uint64(i + 6 * LANES)], phases[np.uint64(i + 7 * LANES)]
        sums[i] = held(fresh, sums[i]) + (a[0] * c + b[0] * d) + (e[0] * u + f[0] * w)
        sums[j] = held(fresh, sums[j]) + (a[1] * s + b[1] * t) + (e[1] * v + f[1] * x)
        sums[k] = held(fresh, sums[k]) + (a[2] * c + b[2] * d) + (e[2] * u + f[2] * w)
        sums[l] = held(fresh, sums[l]) + (a[3] * s + b[3] * t) + (e[3] * v + f[3] * x)
        sums[four] = held(fresh, sums[four]) + (a[4] * c + b[4] * d) + (e[4] * u + f[4] * w)
        sums[five] = held(fresh, sums[five]) + (a[5] * s + b[5] * t) + (e[5] * v + f[5] * x)


@kernel(fastmath=ORDERED, inline=True)
def add_tensor_stretch(n, lead, second, sign, sums, n1, n2, both, total):
    """Add n₁², n₁n₂ and n₂² Re(e p), n₁ and n₂ Re(e q) and Re(e r), and the imaginary parts where ``both``.

    e = lead · second for unit phases (2, LANES), the second conjugated where sign is −1; p, q, r: sums (6, LANES);
    total (12, LANES); all flat.
    """
    n11, n12, n22 = n1 * n1, n1 * n2, n2 * n2
    for i in range(n):
        j, k, l = np.uint64(i + LANES), np.uint64(i + 2 * LANES), np.uint64(i + 3 * LANES)
        four, five = np.uint64(i + 4 * LANES), np.uint64(i + 5 * LANES)
        b = sign * second[j]
        er = lead[i] * second[i] - lead[j] * b
        ei = lead[i] * b + lead[j] * second[i]
        p = er * sums[i] - ei * sums[j]
        q = er * sums[k] - ei * sums[l]
        total[i] += n11 * p
        total[j] += n12 * p
        total[k] += n22 * p
        total[l] += n1 * q
        total[four] += n2 * q
        total[five] += er * sums[four] - ei * sums[five]
        if both:
            p = er * sums[j] + ei * sums[i]
            q = er * sums[l] + ei * sums[k]
            total[np.uint64(i + 6 * LANES)] += n11 * p
            total[np.uint64(i + 7 * LANES)] += n12 * p
            total[np.uint64(i + 8 * LANES)] += n22 * p
            total[np.uint64(i + 9 * LANES)] += n1 * q
            total[np.uint64(i + 10 * LANES)] += n2 * q
            total[np.uint64(i + 11 * LANES)] += er * sums[five] + ei * sums[four]


@kernel(fastmath=ORDERED)
def reciprocal_tensors(first, last, targets, sources, waves, k, limits, stretches, coefficients, out):
    """Write Re and, where ``out`` has two parts, Im of Σ_q q_a q_b w_q exp(i q·(x_t − x_s)) for pairs first..last.

    Pair p is target p // n_s with source p % n_s. targets (n_t, 4), sources (n_s, 4) complex: unit phases exp(i b·x) of
    the three reciprocal vectors b and exp(−i k·x) of the shared shift. coefficients (n, orders, 6): for each stretch
    and order |m₃| the factors of cosine and sine in Σ w e^m, Σ (m − k₃) w e^m and Σ (m − k₃)² w e^m, w real. Other
    arguments as in `reciprocal_fields`. out (parts, n_t n_s, 5): xx, yy, xy, xz, yz.
    """
    parts = out.shape[0]
    n_sources = sources.shape[0]
    unit = np.empty((4, 2, LANES))
    one = np.empty(2 * LANES * (limits[0] + 1))
    two = np.empty(2 * LANES * (limits[1] + 1))
    three = np.empty(2 * LANES * coefficients.shape[1])
    lead = np.empty(2 * LANES)
    shared = np.empty(2 * LANES)
    sums = np.empty(6 * LANES)
    total = np.empty(12 * LANES)
    element = np.empty(LANES)
    factors = np.empty((5, 6))
    for e in range(5):
        for j in range(6):
            a, b, u, v = ROW[e], COLUMN[e], ROW_OF_SIX[j], COLUMN_OF_SIX[j]
            factors[e, j] = waves[u, a] * waves[v, b] + (waves[v, a] * waves[u, b] if u != v else 0.0)
    for start in range(first, last, LANES):
        count = min(LANES, last - start)
        n = (count + WHOLE - 1) // WHOLE * WHOLE
        for i in range(n):
            pair = start + min(i, count - 1)
            t = pair // n_sources
            s = pair - t * n_sources
            for axis in range(4):
                phase = targets[t, axis] * sources[s, axis].conjugate()
                unit[axis, 0, i] = phase.real
                unit[axis, 1, i] = phase.imag
        for i in range(n):
            lead[i] = unit[3, 0, i]
            lead[LANES + i] = unit[3, 1, i]
        powers_of(n, unit[0], limits[0], one)
        powers_of(n, unit[1], limits[1], two)
        powers_of(n, unit[2], coefficients.shape[1] - 1, three)
        total[:] = 0.0
        for r in range(stretches.shape[0]):
            m1 = stretches[r, 0]
            m2 = stretches[r, 1]
            if r == 0 or m1 != stretches[r - 1, 0]:
                times(n, lead, one[2 * LANES * abs(m1) :], 1.0 if m1 >= 0 else -1.0, shared)
            c = coefficients[r]
            m = 0
            while m + 4 <= stretches[r, 2]:
                add_four_tensor_orders(n, m == 0, c[m], c[m + 1], c[m + 2], c[m + 3], three[2 * LANES * m :], sums)
                m += 4
            if m < stretches[r, 2]:
                add_two_tensor_orders(n, m == 0, c[m], c[m + 1], three[2 * LANES * m :], sums)
            add_tensor_stretch(
                n, shared, two[2 * LANES * abs(m2) :], 1.0 if m2 >= 0 else -1.0, sums, m1 - k[0], m2 - k[1],
                parts == 2, total,
            )  # fmt: skip
        for part in range(parts):
            for e in range(5):
                element[:] = 0.0
                for j in range(6):
                    factor = factors[e, j]
                    held = total[(6 * part + j) * LANES :]
                    for i in range(n):
                        element[i] += factor * held[i]
                for i in range(count):
                    out[part, start + i, e] = element[i]
