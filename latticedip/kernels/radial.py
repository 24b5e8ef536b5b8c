"""Radial functions of the real part of an Ewald sum, written so that the compiler can vectorise them.

With u = α r and B₀ = erfc(u)/r the functions are

    B₁ = −(1/r) dB₀/dr = erfc(u)/r³ + (2α/√π) exp(−u²)/r²
    B₂ = −(1/r) dB₁/dr = (3 B₁ + (4α³/√π) exp(−u²))/r²
    B₃ = −(1/r) dB₂/dr = (5 B₂ + (8α⁵/√π) exp(−u²))/r²

(Smith, CCP5 Information Quarterly 4, 13 (1982); Toukmaji et al., J. Chem. Phys. 113, 10913 (2000), eq. 2.10).
"""

from __future__ import annotations

import numpy as np

from latticedip.kernels.jit import ORDERED, kernel

#: exp(u²) erfc(u) for 0 ≤ u ≤ 7 as a polynomial in z = (1/(u + 3) − MIDDLE) · SCALE, z in [−1, 1]: Chebyshev
#: interpolation of degree 18 in 50-digit arithmetic, written in powers of z. Relative error below 3e-15.
ERFCX = (
    0.3036713764373405725, 0.3660387674041010191, 0.2089673165885273221, 0.08921109008228038494,
    0.02713301982748064554, 0.005013932744316391323, 0.0001521350575163002713, -0.0001698474038852676953,
    -0.00002526089046869037744, 6.354901437735357745e-6, 1.516018715132793866e-6, -3.486705962463673965e-7,
    -7.896405484529459042e-8, 2.563350440368728456e-8, 3.092719995348928831e-9, -1.96585687443999313e-9,
    9.245728002082049026e-12, 1.101220112329053399e-10, -1.244570151203470745e-11,
)  # fmt: skip
(C0, C1, C2, C3, C4, C5, C6, C7, C8, C9, C10, C11, C12, C13, C14, C15, C16, C17, C18) = ERFCX
U_MAX = 7.0
SHIFT = 3.0
MIDDLE = 0.5 * (1 / (U_MAX + SHIFT) + 1 / SHIFT)
SCALE = 2 / (1 / SHIFT - 1 / (U_MAX + SHIFT))

#: exp(r) for |r| ≤ ln(2)/2 in powers of r: Chebyshev interpolation of degree 11 in 50-digit arithmetic. Relative error
#: below 5e-18.
EXP = (
    0.99999999999999999693, 0.99999999999999999976, 0.50000000000000183855, 0.16666666666666680806,
    0.041666666666488095494, 0.0083333333333196006108, 0.0013888888952314775033, 0.00019841269890047114,
    0.000024801485482328084808, 2.7557240918578656379e-6, 2.7632639639191857038e-7, 2.5110037606079760437e-8,
)  # fmt: skip
(E0, E1, E2, E3, E4, E5, E6, E7, E8, E9, E10, E11) = EXP

LOG2_E = 1.4426950408889634
# ln 2 in two parts, the first with trailing zeros, so that n·LN2_HIGH is exact (Cody and Waite 1980).
LN2_HIGH = 6.93147180369123816490e-01
LN2_LOW = 1.90821492927058770002e-10
# Adding and taking away 1.5·2⁵² rounds to the nearest whole number and leaves it in the low bits.
ROUNDER = 6755399441055744.0
TWO_OVER_SQRT_PI = 1.1283791670955126


@kernel(fastmath=ORDERED, inline=True)
def exp_negative(x):
    """exp(x) for −700 < x ≤ 0 to 2 units in the last place, without a call or a branch."""
    shifted = x * LOG2_E + ROUNDER
    n = shifted - ROUNDER
    r = (x - n * LN2_HIGH) - n * LN2_LOW
    p = E11
    p = p * r + E10
    p = p * r + E9
    p = p * r + E8
    p = p * r + E7
    p = p * r + E6
    p = p * r + E5
    p = p * r + E4
    p = p * r + E3
    p = p * r + E2
    p = p * r + E1
    p = p * r + E0
    bits = (np.float64(shifted).view(np.int64) << np.int64(52)) + np.int64(0x3FF0000000000000)
    return p * np.int64(bits).view(np.float64)


@kernel(fastmath=ORDERED, inline=True)
def scaled_erfc(u):
    """exp(u²) erfc(u) for 0 ≤ u ≤ 7, relative error below 3e-15."""
    return scaled_erfc_of((1.0 / (u + SHIFT) - MIDDLE) * SCALE)


@kernel(fastmath=ORDERED, inline=True)
def scaled_erfc_of(z):
    """The same by the variable of its polynomial."""
    p = C18
    p = p * z + C17
    p = p * z + C16
    p = p * z + C15
    p = p * z + C14
    p = p * z + C13
    p = p * z + C12
    p = p * z + C11
    p = p * z + C10
    p = p * z + C9
    p = p * z + C8
    p = p * z + C7
    p = p * z + C6
    p = p * z + C5
    p = p * z + C4
    p = p * z + C3
    p = p * z + C2
    p = p * z + C1
    return p * z + C0


@kernel(fastmath=ORDERED, inline=True)
def radial_functions(n, alpha, square, b1, b2):
    """Fill b1 and b2 with B₁ and B₂ for the first n squared distances; α > 0 in 1/Å."""
    a1 = TWO_OVER_SQRT_PI * alpha
    a2 = 2.0 * alpha * alpha * a1
    for i in range(n):
        r2 = square[i]
        r = np.sqrt(r2)
        shifted = alpha * r + SHIFT
        # One division for 1/r and 1/(u + 3): it takes as long as ten products.
        both = 1.0 / (r * shifted)
        inverse = both * shifted
        inverse2 = inverse * inverse
        gauss = exp_negative(-alpha * alpha * r2)
        first = gauss * (scaled_erfc_of((both * r - MIDDLE) * SCALE) * inverse + a1) * inverse2
        b1[i] = first
        b2[i] = (3.0 * first + a2 * gauss) * inverse2
