"""Exhaustive search over sign patterns, and the 3×3 forms that give a pattern its best axis.

A pattern s of n free signs is a whole number: bit i set means s_i = −1. The bits fall into three groups: ``a`` and
``b`` (the low ones) and the high ones. For one setting of the high bits the fields h on the low signs are summed, and

    E(s) = E_high + [½ s_L Q s_L + g_L s_L] + Σ_a h_i s_i + Σ_b h_i s_i,

where the bracket is a table over the low patterns made beforehand and the last two are tables over 2^|a| and 2^|b|
patterns filled in Gray order, one addition each. Every energy is then a sum of four numbers: no error builds up
along the search, and the innermost loop is vectorised.
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import kernel

#: Columns of a quadratic form: xx, yy, zz, yz, xz, xy.
N_FORM = 6
#: Stands for infinity, which the fast-math flags rule out.
FAR = 1e290


@kernel(inline=True)
def eigen_3x3(form, values, vectors):
    """Eigenvalues (3,) and eigenvectors (columns of (3, 3)) of a symmetric form (6,) by Jacobi rotations."""
    matrix = np.empty((3, 3))
    matrix[0, 0] = form[0]
    matrix[1, 1] = form[1]
    matrix[2, 2] = form[2]
    matrix[1, 2] = matrix[2, 1] = form[3]
    matrix[0, 2] = matrix[2, 0] = form[4]
    matrix[0, 1] = matrix[1, 0] = form[5]
    for i in range(3):
        for j in range(3):
            vectors[i, j] = 1.0 if i == j else 0.0
    for _ in range(30):
        off = abs(matrix[0, 1]) + abs(matrix[0, 2]) + abs(matrix[1, 2])
        size = abs(matrix[0, 0]) + abs(matrix[1, 1]) + abs(matrix[2, 2])
        if off <= 1e-17 * size or off == 0.0:
            break
        for p in range(2):
            for q in range(p + 1, 3):
                if matrix[p, q] == 0.0:
                    continue
                theta = (matrix[q, q] - matrix[p, p]) / (2.0 * matrix[p, q])
                t = 1.0 / (abs(theta) + np.sqrt(theta * theta + 1.0))
                if theta < 0.0:
                    t = -t
                c = 1.0 / np.sqrt(t * t + 1.0)
                s = t * c
                for i in range(3):
                    one, two = matrix[i, p], matrix[i, q]
                    matrix[i, p] = c * one - s * two
                    matrix[i, q] = s * one + c * two
                for i in range(3):
                    one, two = matrix[p, i], matrix[q, i]
                    matrix[p, i] = c * one - s * two
                    matrix[q, i] = s * one + c * two
                for i in range(3):
                    one, two = vectors[i, p], vectors[i, q]
                    vectors[i, p] = c * one - s * two
                    vectors[i, q] = s * one + c * two
    for i in range(3):
        values[i] = matrix[i, i]


@kernel(inline=True)
def lowest_on_sphere(form, pull, values, vectors):
    """Lowest value of u·Q·u − g·u over unit vectors u, for a form Q (6,) and a vector g (3,).

    With u = Σ c_i/(2(λ_i + µ)) in the eigenbasis, c = g in that basis, µ ≥ −λ_min is found from |u| = 1 by
    bisection (Moré and Sorensen, SIAM J. Sci. Stat. Comput. 4, 553 (1983), hard case included).
    """
    eigen_3x3(form, values, vectors)
    lowest = min(values[0], min(values[1], values[2]))
    size = np.sqrt(pull[0] * pull[0] + pull[1] * pull[1] + pull[2] * pull[2])
    if size == 0.0:
        return lowest
    c0 = pull[0] * vectors[0, 0] + pull[1] * vectors[1, 0] + pull[2] * vectors[2, 0]
    c1 = pull[0] * vectors[0, 1] + pull[1] * vectors[1, 1] + pull[2] * vectors[2, 1]
    c2 = pull[0] * vectors[0, 2] + pull[1] * vectors[1, 2] + pull[2] * vectors[2, 2]
    low, high = 0.0, 0.5 * size
    # |u| falls from (perhaps) infinity at shift 0 to at most 1 at shift size/2, the shift being µ + λ_min.
    for _ in range(200):
        middle = 0.5 * (low + high)
        if middle <= low or middle >= high:
            break
        d0, d1, d2 = values[0] - lowest + middle, values[1] - lowest + middle, values[2] - lowest + middle
        norm = 0.25 * (c0 * c0 / (d0 * d0) + c1 * c1 / (d1 * d1) + c2 * c2 / (d2 * d2))
        if norm > 1.0:
            low = middle
        else:
            high = middle
    # Dual value −µ − ¼ Σ c²/(λ + µ): exact to second order in the shift, and right in the hard case too.
    total = lowest - high
    d0, d1, d2 = values[0] - lowest + high, values[1] - lowest + high, values[2] - lowest + high
    if d0 > 0.0:
        total -= 0.25 * c0 * c0 / d0
    if d1 > 0.0:
        total -= 0.25 * c1 * c1 / d1
    if d2 > 0.0:
        total -= 0.25 * c2 * c2 / d2
    return total


@kernel(inline=True)
def fill_sums(fields, first, count, out):
    """out[x] = Σ_i ± fields[first + i] over all 2^count sign patterns x, filled by doubling."""
    total = 0.0
    for i in range(count):
        total += fields[first + i]
    out[0] = total
    for i in range(count):
        change = 2.0 * fields[first + i]
        half = 1 << i
        source = out[:half]
        target = out[half : 2 * half]
        for x in range(half):
            target[x] = source[x] - change


@kernel(inline=True)
def is_first(signs, inverse, factors):
    """True where no image of the pattern comes before it; + comes before −, compared sign by sign.

    inverse, factors (n_operations, n): the image has factors[g, p] · signs[inverse[g, p]] at p.
    """
    n = signs.shape[0]
    for g in range(inverse.shape[0]):
        for p in range(n):
            image = factors[g, p] * signs[inverse[g, p]]
            if image != signs[p]:
                if image > signs[p]:
                    return False
                break
    return True


@kernel(inline=True)
def insert(energy, code, energies, codes):
    """Put a pattern into a list sorted by energy; the last one falls out."""
    place = energies.shape[0] - 1
    while place > 0 and energies[place - 1] > energy:
        energies[place] = energies[place - 1]
        codes[place] = codes[place - 1]
        place -= 1
    energies[place] = energy
    codes[place] = code


@kernel(inline=True)
def is_wanted(code, n_free, free, signs, weights, zero, inverse, factors):
    """Spread a code over all signs; True where the net moment fits and no image of the pattern comes before it."""
    for i in range(n_free):
        signs[free[i]] = -1 if (code >> i) & 1 else 1
    for c in range(weights.shape[0]):
        total = 0.0
        for p in range(signs.shape[0]):
            total += weights[c, p] * signs[p]
        if abs(total) > zero:
            return False
    return is_first(signs, inverse, factors)


@kernel(fastmath=True)
def low_tables(n_a, n_b, form, linear, out):
    """out (n_forms, 2^n_a, 2^n_b): ½ s·Q·s + g·s of the low patterns, without the diagonal of Q.

    form (n_forms, n, n), linear (n_forms, n) over the free signs; the first n_a + n_b are the low ones.
    """
    n = n_a + n_b
    signs = np.empty(n)
    for c in range(out.shape[0]):
        for x in range(1 << n):
            total = 0.0
            for i in range(n):
                signs[i] = -1.0 if (x >> i) & 1 else 1.0
                field = linear[c, i]
                for j in range(i):
                    field += form[c, i, j] * signs[j]
                total += field * signs[i]
            out[c, x & ((1 << n_a) - 1), x >> n_a] = total


@kernel(inline=True)
def high_part(code, n_low, n_free, form, linear, signs, fields):
    """Energy of the high signs of a code by themselves; writes the fields they put on the low ones."""
    for i in range(n_low):
        fields[i] = 0.0
    total = 0.0
    for i in range(n_low, n_free):
        signs[i] = -1.0 if (code >> (i - n_low)) & 1 else 1.0
        field = linear[i]
        for j in range(n_low, i):
            field += form[i, j] * signs[j]
        total += field * signs[i]
        row = form[i]
        sign = signs[i]
        for j in range(n_low):
            fields[j] += row[j] * sign
    return total


@kernel(fastmath=True)
def search_along(
    first, last, n_chunks, n_a, n_b, form, linear, table, free, start, weights, zero, inverse, factors, limit,
    out_energies, out_codes,
):  # fmt: skip
    """Lowest patterns along given axes. Chunks first..last of n_chunks; each fills its own row of the lists.

    form (n_free, n_free), linear (n_free,): E = ½ s·Q·s + g·s without diagonal, over the free signs.
    table: of `low_tables`. free (n_free,): places of the free signs among all; start (n,) int8: the fixed ones.
    weights (n_c, n): sums that must vanish to ``zero``. inverse, factors: operations as in `is_first`.
    limit: patterns at or above this energy are not kept.
    out_energies (n_chunks, keep), filled with infinity before; out_codes (n_chunks, keep) int64.
    """
    n_free = form.shape[0]
    n_low = n_a + n_b
    n_high = 1 << (n_free - n_low)
    fields, values = np.empty(n_low), np.empty(n_free)
    sums_a, sums_b = np.empty(1 << n_a), np.empty(1 << n_b)
    signs = start.copy()
    for chunk in range(first, last):
        energies, codes = out_energies[chunk], out_codes[chunk]
        keep = energies.shape[0]
        bar = limit
        for high in range(n_high * chunk // n_chunks, n_high * (chunk + 1) // n_chunks):
            base = high_part(high, n_low, n_free, form, linear, values, fields)
            fill_sums(fields, 0, n_a, sums_a)
            fill_sums(fields, n_a, n_b, sums_b)
            for a in range(1 << n_a):
                row = table[a]
                shift = base + sums_a[a]
                lowest = FAR
                for b in range(sums_b.shape[0]):
                    value = row[b] + sums_b[b]
                    lowest = value if value < lowest else lowest
                if lowest + shift >= bar:
                    continue
                for b in range(sums_b.shape[0]):
                    energy = row[b] + sums_b[b] + shift
                    if energy < bar:
                        code = a + ((b + (high << n_b)) << n_a)
                        if is_wanted(code, n_free, free, signs, weights, zero, inverse, factors):
                            insert(energy, code, energies, codes)
                            bar = min(limit, energies[keep - 1])


@kernel(fastmath=True)
def search_best_axis(
    first, last, n_chunks, n_a, n_b, form, linear, constant, table, free, start, weights, zero, inverse, factors,
    pull, limit, out_energies, out_codes,
):  # fmt: skip
    """Lowest patterns, each along its own best axis; as `search_along`, with forms that are 3×3.

    form (7, n_free, n_free), linear (7, n_free), constant (7,): columns xx, yy, zz, yz, xz, xy of the form of the
    axis, and the net moment (linear only). pull (3,): energy −(net moment) pull·u in the applied field.
    A pattern is looked at closely only where Q − bar is not positive definite (Sylvester's criterion).
    """
    n_free = form.shape[1]
    n_low = n_a + n_b
    n_high = 1 << (n_free - n_low)
    size = np.sqrt(pull[0] * pull[0] + pull[1] * pull[1] + pull[2] * pull[2])
    fields, values = np.empty(n_low), np.empty(n_free)
    sums_a, sums_b = np.empty((7, 1 << n_a)), np.empty((7, 1 << n_b))
    base = np.empty(7)
    one, arm, eigenvalues, eigenvectors = np.empty(6), np.empty(3), np.empty(3), np.empty((3, 3))
    signs = start.copy()
    n_forms = 7 if size > 0.0 else 6
    for chunk in range(first, last):
        energies, codes = out_energies[chunk], out_codes[chunk]
        keep = energies.shape[0]
        bar = limit
        for high in range(n_high * chunk // n_chunks, n_high * (chunk + 1) // n_chunks):
            for c in range(n_forms):
                base[c] = constant[c] + high_part(high, n_low, n_free, form[c], linear[c], values, fields)
                fill_sums(fields, 0, n_a, sums_a[c])
                fill_sums(fields, n_a, n_b, sums_b[c])
            for a in range(1 << n_a):
                lowest = -1.0
                # With no bar yet every pattern is looked at.
                if bar < FAR and size == 0.0:
                    lowest = least_minor(a, table, sums_a, sums_b, base, bar)
                if lowest > 0.0:
                    continue
                for b in range(1 << n_b):
                    for c in range(6):
                        one[c] = table[c, a, b] + sums_b[c, b] + (base[c] + sums_a[c, a])
                    top = bar
                    if size > 0.0:
                        net = table[6, a, b] + sums_b[6, b] + (base[6] + sums_a[6, a])
                        for i in range(3):
                            arm[i] = net * pull[i]
                        top = bar + abs(net) * size
                    else:
                        arm[0] = arm[1] = arm[2] = 0.0
                    if bar < FAR and minor_of(one[0] - top, one[1] - top, one[2] - top, one[3], one[4], one[5]) > 0.0:
                        continue
                    energy = lowest_on_sphere(one, arm, eigenvalues, eigenvectors)
                    if energy < bar:
                        code = a + ((b + (high << n_b)) << n_a)
                        if is_wanted(code, n_free, free, signs, weights, zero, inverse, factors):
                            insert(energy, code, energies, codes)
                            bar = min(limit, energies[keep - 1])


@kernel(fastmath=True, inline=True)
def minor_of(xx, yy, zz, yz, xz, xy):
    """Smallest leading minor of a symmetric 3×3 matrix: above zero where the matrix is positive definite."""
    second = xx * yy - xy * xy
    third = zz * second - xx * yz * yz - yy * xz * xz + 2.0 * xy * yz * xz
    return min(xx, min(second, third))


@kernel(fastmath=True, inline=True)
def least_minor(a, table, sums_a, sums_b, base, bar):
    """Smallest leading minor of Q − bar over the patterns b of a row."""
    t0, t1, t2, t3, t4, t5 = table[0, a], table[1, a], table[2, a], table[3, a], table[4, a], table[5, a]
    s0, s1, s2, s3, s4, s5 = sums_b[0], sums_b[1], sums_b[2], sums_b[3], sums_b[4], sums_b[5]
    c0, c1, c2 = base[0] + sums_a[0, a] - bar, base[1] + sums_a[1, a] - bar, base[2] + sums_a[2, a] - bar
    c3, c4, c5 = base[3] + sums_a[3, a], base[4] + sums_a[4, a], base[5] + sums_a[5, a]
    lowest = FAR
    for b in range(s0.shape[0]):
        xx = t0[b] + s0[b] + c0
        yy = t1[b] + s1[b] + c1
        zz = t2[b] + s2[b] + c2
        yz = t3[b] + s3[b] + c3
        xz = t4[b] + s4[b] + c4
        xy = t5[b] + s5[b] + c5
        second = xx * yy - xy * xy
        third = zz * second - xx * yz * yz - yy * xz * xz + 2.0 * xy * yz * xz
        second = second if second < xx else xx
        third = third if third < second else second
        lowest = third if third < lowest else lowest
    return lowest
