"""Exact reduction of offsets by lattice vectors, and tables of plane-wave phases."""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import ORDERED, kernel

#: 2²⁷ + 1: splits a double into two halves whose products are exact (Dekker, Numer. Math. 18, 224 (1971)).
SPLITTER = 134217729.0


@kernel(inline=True)
def two_sum(a, b):
    """Return the rounded sum and its exact rounding error (Knuth)."""
    total = a + b
    part = total - a
    return total, (a - (total - part)) + (b - part)


@kernel(inline=True)
def two_product(a, b):
    """Return the rounded product and its exact rounding error (Dekker)."""
    product = a * b
    t = SPLITTER * a
    a_high = t - (t - a)
    a_low = a - a_high
    t = SPLITTER * b
    b_high = t - (t - b)
    b_low = b - b_high
    return product, ((a_high * b_high - product) + a_high * b_low + a_low * b_high) + a_low * b_low


@kernel(inline=True)
def without(offset, cells, cell, rest):
    """offset − cells @ cell, exact to the last place of every component."""
    for c in range(3):
        high = offset[c]
        low = 0.0
        for axis in range(3):
            product, error = two_product(-cells[axis], cell[axis, c])
            high, carry = two_sum(high, product)
            low += carry + error
        rest[c] = high + low


@kernel()
def reduce_offsets(first, last, offsets, cell, inverse, steps, reduced_inverse, k, out, out_cells, out_turns):
    """Take whole lattice vectors from rows first..last of ``offsets``, in compensated arithmetic.

    cell, inverse (3, 3): the cell as given. steps (3, 3): whole numbers, the reduced cell is steps @ cell, and
    reduced_inverse its inverse. k (3,): in the cell as given.
    out (n, 3): the rest, within half a reduced cell vector; out_cells (n, 3): the lattice vector taken away, in
    the cell as given; out_turns (n,): k·cells modulo 1. Every rest is exact to its own last place.
    """
    rest = np.empty(3)
    total = np.empty(3)
    extra = np.empty(3)
    for row in range(first, last):
        for axis in range(3):
            f = (
                offsets[row, 0] * inverse[0, axis]
                + offsets[row, 1] * inverse[1, axis]
                + offsets[row, 2] * inverse[2, axis]
            )
            total[axis] = np.rint(f)
        without(offsets[row], total, cell, rest)
        # Twice at most: from the given cell into the reduced one, then over an edge where rounding erred.
        for _ in range(2):
            moved = False
            for axis in range(3):
                f = (
                    rest[0] * reduced_inverse[0, axis]
                    + rest[1] * reduced_inverse[1, axis]
                    + rest[2] * reduced_inverse[2, axis]
                )
                extra[axis] = np.rint(f)
                moved = moved or extra[axis] != 0.0
            if not moved:
                break
            for axis in range(3):
                for step in range(3):
                    total[axis] += extra[step] * steps[step, axis]
            without(offsets[row], total, cell, rest)
        turns = 0.0
        for c in range(3):
            out[row, c] = rest[c]
            out_cells[row, c] = total[c]
            product, error = two_product(total[c], k[c])
            turns += (product - np.rint(product)) + error
        out_turns[row] = turns - np.rint(turns)


@kernel(fastmath=ORDERED, inline=True)
def unit_phases(point, waves, k, limits, powers, third_re, third_im):
    """Powers of the three unit phases exp(i b·x) of a point, and the phase exp(−i k·x) that all waves share.

    powers (3, widest) complex: non-negative powers of each. third_re, third_im (2 limits[2] + 1,): all powers of the
    third. Built by doubling, so that rounding grows with log m only.
    """
    lead = 0.0
    for axis in range(3):
        angle = point[0] * waves[axis, 0] + point[1] * waves[axis, 1] + point[2] * waves[axis, 2]
        lead += k[axis] * angle
        powers[axis, 0] = 1.0
        if limits[axis] > 0:
            powers[axis, 1] = complex(np.cos(angle), np.sin(angle))
        for m in range(2, limits[axis] + 1):
            half = m // 2
            powers[axis, m] = powers[axis, half] * powers[axis, m - half]
    for m in range(limits[2] + 1):
        value = powers[2, m]
        third_re[limits[2] + m] = value.real
        third_im[limits[2] + m] = value.imag
        third_re[limits[2] - m] = value.real
        third_im[limits[2] - m] = -value.imag
    return complex(np.cos(lead), -np.sin(lead))


@kernel(fastmath=ORDERED)
def phase_table(first, last, points, waves, runs, k, limits, out):
    """Fill rows first..last of ``out`` (n, 2 n_q) with cos(q·x) and then sin(q·x).

    points (n, 3): Cartesian Å. waves (3, 3): rows are the reciprocal vectors including 2π; q = (m − k)·waves.
    runs (n_runs, 5): first q, number of q, m₁, m₂ and the first m₃ of each stretch of consecutive m₃.
    limits (3,): largest |m| per axis.
    """
    n_q = np.uint64(out.shape[1] // 2)
    widest = max(limits[0], limits[1], limits[2]) + 1
    powers = np.empty((3, widest), np.complex128)
    re = np.empty(2 * limits[2] + 1)
    im = np.empty(2 * limits[2] + 1)
    for row in range(first, last):
        start = unit_phases(points[row], waves, k, limits, powers, re, im)
        for r in range(runs.shape[0]):
            a = runs[r, 2]
            b = runs[r, 3]
            pa = powers[0, a] if a >= 0 else powers[0, -a].conjugate()
            pb = powers[1, b] if b >= 0 else powers[1, -b].conjugate()
            base = start * pa * pb
            x = base.real
            y = base.imag
            # Unsigned numbers, because an index that might be negative would keep the loop from being vectorised.
            q = np.uint64(runs[r, 0])
            c = np.uint64(runs[r, 4] + limits[2])
            for i in range(np.uint64(runs[r, 1])):
                out[row, q + i] = x * re[c + i] - y * im[c + i]
                out[row, n_q + q + i] = x * im[c + i] + y * re[c + i]
