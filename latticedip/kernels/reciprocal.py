"""Reciprocal part of the lattice sum: a table of phases of the targets times one of weighted phases of the sources.

The product is written here and not handed to BLAS: in four-by-four blocks of dot products it runs at the speed of a
tuned library on one core, each thread works on targets of its own, and no second pool of threads gets in the way.
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import kernel
from latticedip.kernels.phases import phase_table

#: Targets whose phases are held at one time, and waves taken at one time: both tables stay in the second cache.
ROWS = 64
WAVES = 1024


@kernel(fastmath=True, inline=True)
def add_products(table, right, out):
    """Add table (rows, n) times right (columns, n) transposed to ``out``; rows and columns are multiples of four."""
    n = table.shape[1]
    for begin in range(0, n, WAVES):
        end = min(n, begin + WAVES)
        for j in range(0, right.shape[0], 4):
            for t in range(0, table.shape[0], 4):
                s00 = s01 = s02 = s03 = 0.0
                s10 = s11 = s12 = s13 = 0.0
                s20 = s21 = s22 = s23 = 0.0
                s30 = s31 = s32 = s33 = 0.0
                # Slices, because an index that might be negative would keep the loop from being vectorised.
                left0, left1 = table[t, begin:end], table[t + 1, begin:end]
                left2, left3 = table[t + 2, begin:end], table[t + 3, begin:end]
                right0, right1 = right[j, begin:end], right[j + 1, begin:end]
                right2, right3 = right[j + 2, begin:end], right[j + 3, begin:end]
                for i in range(end - begin):
                    a0 = left0[i]
                    a1 = left1[i]
                    a2 = left2[i]
                    a3 = left3[i]
                    b0 = right0[i]
                    b1 = right1[i]
                    b2 = right2[i]
                    b3 = right3[i]
                    s00 += a0 * b0
                    s01 += a0 * b1
                    s02 += a0 * b2
                    s03 += a0 * b3
                    s10 += a1 * b0
                    s11 += a1 * b1
                    s12 += a1 * b2
                    s13 += a1 * b3
                    s20 += a2 * b0
                    s21 += a2 * b1
                    s22 += a2 * b2
                    s23 += a2 * b3
                    s30 += a3 * b0
                    s31 += a3 * b1
                    s32 += a3 * b2
                    s33 += a3 * b3
                out[t, j] += s00
                out[t, j + 1] += s01
                out[t, j + 2] += s02
                out[t, j + 3] += s03
                out[t + 1, j] += s10
                out[t + 1, j + 1] += s11
                out[t + 1, j + 2] += s12
                out[t + 1, j + 3] += s13
                out[t + 2, j] += s20
                out[t + 2, j + 1] += s21
                out[t + 2, j + 2] += s22
                out[t + 2, j + 3] += s23
                out[t + 3, j] += s30
                out[t + 3, j + 1] += s31
                out[t + 3, j + 2] += s32
                out[t + 3, j + 3] += s33


@kernel()
def reciprocal_tensors(first, last, targets, waves, runs, k, limits, right, out):
    """Write Σ_q of the reciprocal part to rows first..last of ``out`` (parts, n_t, n_s, 5).

    right (columns, 2 n_q): weighted phases of the sources, one row per (part, source, element), padded with rows of
    zeros to a multiple of four; other arguments as in `phase_table`.
    """
    parts, _, n_sources, elements = out.shape
    table = np.zeros((ROWS, right.shape[1]))
    products = np.empty((ROWS, right.shape[0]))
    for start in range(first, last, ROWS):
        count = min(ROWS, last - start)
        padded = (count + 3) // 4 * 4
        phase_table(0, count, targets[start : start + count], waves, runs, k, limits, table)
        products[:padded] = 0.0
        add_products(table[:padded], right, products[:padded])
        for t in range(count):
            column = 0
            for part in range(parts):
                for s in range(n_sources):
                    for e in range(elements):
                        out[part, start + t, s, e] = products[t, column]
                        column += 1
