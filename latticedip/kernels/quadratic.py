"""Quadratic forms of many rows, Σ_ij x_i H_ij x_j, with H real and symmetric.

Only half of H is multiplied. The product is written here and not handed to BLAS: in four-by-four blocks of dot products
it runs at the speed of a tuned library on one core, no second pool of threads gets in the way, and no product is ever
stored: it is contracted with its row at once.
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import kernel

#: Numbers in the rows held at one time: they stay in the second cache while every row of H passes by.
HELD = 24576
#: Sums may be reordered, but values that are not finite must survive: they are how bad input is found.
REORDERED = {"reassoc", "nsz", "contract", "arcp"}


@kernel(fastmath=REORDERED)
def quadratic_forms(first: int, last: int, rows: np.ndarray, half: np.ndarray, out: np.ndarray) -> None:
    """Write the form of rows first..last to ``out`` (n,).

    rows (n, m). half (M, M), M the next multiple of four: row j holds H_ji for the group of four that j is in, 2 H_ji
    for all i before it and is not read beyond; padding is zero.
    """
    m = rows.shape[1]
    padded = half.shape[0]
    capacity = max(4, HELD // max(1, padded) // 4 * 4)
    held = np.zeros((capacity, padded))
    sums = np.empty(capacity)
    for start in range(first, last, capacity):
        count = min(capacity, last - start)
        filled = (count + 3) // 4 * 4
        for r in range(count):
            for i in range(m):
                held[r, i] = rows[start + r, i]
        for r in range(count, filled):
            for i in range(m):
                held[r, i] = 0.0
        sums[:] = 0.0
        for j in range(0, padded, 4):
            for t in range(0, filled, 4):
                s00 = s01 = s02 = s03 = 0.0
                s10 = s11 = s12 = s13 = 0.0
                s20 = s21 = s22 = s23 = 0.0
                s30 = s31 = s32 = s33 = 0.0
                for i in range(j + 4):
                    a0 = held[t, i]
                    a1 = held[t + 1, i]
                    a2 = held[t + 2, i]
                    a3 = held[t + 3, i]
                    b0 = half[j, i]
                    b1 = half[j + 1, i]
                    b2 = half[j + 2, i]
                    b3 = half[j + 3, i]
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
                sums[t] += s00 * held[t, j] + s01 * held[t, j + 1] + s02 * held[t, j + 2] + s03 * held[t, j + 3]
                sums[t + 1] += s10 * held[t + 1, j] + s11 * held[t + 1, j + 1]
                sums[t + 1] += s12 * held[t + 1, j + 2] + s13 * held[t + 1, j + 3]
                sums[t + 2] += s20 * held[t + 2, j] + s21 * held[t + 2, j + 1]
                sums[t + 2] += s22 * held[t + 2, j + 2] + s23 * held[t + 2, j + 3]
                sums[t + 3] += s30 * held[t + 3, j] + s31 * held[t + 3, j + 1]
                sums[t + 3] += s32 * held[t + 3, j + 2] + s33 * held[t + 3, j + 3]
        for r in range(count):
            out[start + r] = sums[r]
