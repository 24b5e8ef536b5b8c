"""Quadratic forms of many ±1 patterns by table look-up: Σ_ij s_i Q_ij s_j for each row of signs.

Signs are taken six at a time. A pair of such groups has 64 × 64 values of its part of the sum; they are tabulated once
for many rows, and each row then costs one addition per pair of groups: N²/72 additions instead of N² products (the
method of Arlazarov, Dinic, Kronrod and Faradžev, Sov. Math. Dokl. 11, 1209 (1970), for a quadratic form).
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import kernel

#: Signs per group. A table of 64 × 64 doubles fills the fastest cache.
GROUP = 6
STATES = 64
#: Rows that share one set of tables: their sums stay in the second cache, and tables cost little beside look-ups.
ROWS = 16384


@kernel(inline=True)
def pair_table(block: np.ndarray, table: np.ndarray) -> None:
    """Fill table[64 a + b] with Σ_ij s_i(a) block_ij s_j(b), s_i(a) = +1 where bit i of a is set, else −1."""
    rows = np.empty((GROUP, STATES))
    for i in range(GROUP):
        for b in range(STATES):
            total = 0.0
            for j in range(GROUP):
                total += block[i, j] if (b >> j) & 1 else -block[i, j]
            rows[i, b] = total
    for b in range(STATES):
        total = 0.0
        for i in range(GROUP):
            total -= rows[i, b]
        table[b] = total
    # A state is an earlier one with its highest sign turned up.
    for i in range(GROUP):
        half = 1 << i
        for a in range(half, 2 * half):
            for b in range(STATES):
                table[STATES * a + b] = table[STATES * (a - half) + b] + 2.0 * rows[i, b]


@kernel()
def sign_forms(first: int, last: int, signs: np.ndarray, form: np.ndarray, out: np.ndarray) -> None:
    """Write Σ_ij s_i Q_ij s_j to rows first..last of ``out`` (n,); NaN where a row holds anything but ±1.

    signs (n, N) int8. form (G·6, G·6): Q, symmetric, padded with zeros to whole groups.
    """
    n = signs.shape[1]
    groups = form.shape[0] // GROUP
    codes = np.empty((groups, ROWS), np.uint16)
    table = np.empty(STATES * STATES)
    block = np.empty((GROUP, GROUP))
    sums = np.empty(ROWS)
    for start in range(first, last, ROWS):
        count = min(ROWS, last - start)
        for r in range(count):
            bad = False
            for g in range(groups):
                code = 0
                for j in range(min(GROUP, n - g * GROUP)):
                    s = signs[start + r, g * GROUP + j]
                    bad |= s != 1 and s != -1
                    code |= (s > 0) << j
                codes[g, r] = code
            sums[r] = np.nan if bad else 0.0
        for g in range(groups):
            for h in range(g, groups):
                # The form is symmetric: each pair of groups once, the crossed ones doubled.
                weight = 1.0 if g == h else 2.0
                for i in range(GROUP):
                    for j in range(GROUP):
                        block[i, j] = weight * form[g * GROUP + i, h * GROUP + j]
                pair_table(block, table)
                for r in range(count):
                    sums[r] += table[STATES * codes[g, r] + codes[h, r]]
        for r in range(count):
            out[start + r] = sums[r]
