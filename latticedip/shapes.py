"""Demagnetizing factors of bodies, as pure functions of their sizes.

Each returns three factors along the body's own axes; they add up to one. The factors of an ellipsoid hold at
every point of it. The field inside a prism or a cylinder varies: theirs are volume averages for uniform
magnetization (the magnetometric factors at susceptibility zero).

The closed forms for prism and cylinder are sums of terms that cancel almost wholly in long or flat bodies
(eight digits in a rod of 1:10⁴). They are evaluated in decimal arithmetic with as many extra digits as the
cancellation takes, so the result is right to the last digits of a double for any proportions.

Sizes are positive and finite here; `latticedip.sample` checks what a user gives.
"""

from __future__ import annotations

import math
from decimal import Context, Decimal, DivisionByZero, InvalidOperation, Overflow, localcontext

Factors = tuple[float, float, float]

#: Correct digits that remain after cancellation: double precision and a margin.
KEPT_DIGITS = 30


def ellipsoid_factors(semi_axes: Factors) -> Factors:
    """Return the demagnetizing factors of an ellipsoid, for its three axes in the order given.

    N_a = (abc/3) R_D(b², c², a²): the integral of J. A. Osborn, Phys. Rev. 67, 351 (1945), and E. C. Stoner,
    Phil. Mag. 36, 803 (1945), in Carlson's symmetric form. Only the ratios of the lengths matter.
    """
    # A tenth of a second to import, which a study without an ellipsoid need not wait for.
    from scipy.special import elliprd

    largest = max(semi_axes)
    a, b, c = (size / largest for size in semi_axes)
    product = a * b * c / 3
    return (
        float(product * elliprd(b * b, c * c, a * a)),
        float(product * elliprd(c * c, a * a, b * b)),
        float(product * elliprd(a * a, b * b, c * c)),
    )


def prism_factors(edges: Factors) -> Factors:
    """Return the volume-averaged demagnetizing factors of a rectangular prism, in the order of its edges.

    Source: A. Aharoni, J. Appl. Phys. 83, 3432 (1998), eq. 1. Only the ratios of the lengths matter.
    """
    with localcontext(_context(max(edges) / min(edges))):
        a, b, c = (Decimal(edge) for edge in edges)
        return (
            float(_prism_along_third(b, c, a)),
            float(_prism_along_third(c, a, b)),
            float(_prism_along_third(a, b, c)),
        )


def cylinder_factors(diameter: float, height: float) -> Factors:
    """Return the volume-averaged demagnetizing factors of a circular cylinder whose axis is the third.

    With t = height/diameter and k² = 1/(1 + t²), K and E the complete elliptic integrals:
    N_3 = 1 + 4/(3πt) {1 − [(1 − t²) E(k) + t² K(k)]/k}.
    Source: R. I. Joseph, J. Appl. Phys. 37, 4639 (1966); D.-X. Chen, J. A. Brug, R. B. Goldfarb,
    IEEE Trans. Magn. 27, 3601 (1991), susceptibility zero.
    """
    ratio = max(diameter, height) / min(diameter, height)
    with localcontext(_context(ratio)):
        t = Decimal(height) / Decimal(diameter)
        root = (1 + t * t).sqrt()
        first, second = _complete_elliptic(t / root, 1 / root)
        along = 1 + 4 / (3 * _pi() * t) * (1 - root * ((1 - t * t) * second + t * t * first))
        across = (1 - along) / 2
        return float(across), float(across), float(along)


def _context(ratio: float) -> Context:
    # Terms grow as ratio² and the factor itself may be as small as ratio⁻²: four powers at most.
    digits = KEPT_DIGITS + 4 * max(0, math.ceil(math.log10(ratio)))
    return Context(prec=digits, traps=[InvalidOperation, DivisionByZero, Overflow])


def _prism_along_third(a: Decimal, b: Decimal, c: Decimal) -> Decimal:
    """Return the factor along edge c of a prism a × b × c (edges and half edges give the same)."""
    a2, b2, c2 = a * a, b * b, c * c
    ab, bc, ca, abc = (a2 + b2).sqrt(), (b2 + c2).sqrt(), (c2 + a2).sqrt(), (a2 + b2 + c2).sqrt()
    logs = (
        (c2 - b2) / (2 * b * c) * _log_ratio(a, bc)
        + (c2 - a2) / (2 * c * a) * _log_ratio(b, ca)
        + b / (2 * c) * _log_ratio(a, b)
        + a / (2 * c) * _log_ratio(b, a)
        - c / (2 * a) * _log_ratio(b, c)
        - c / (2 * b) * _log_ratio(a, c)
    )
    powers = (
        (a * a2 + b * b2 - 2 * c * c2) / (3 * a * b * c)
        + (a2 + b2 - 2 * c2) * abc / (3 * a * b * c)
        + c * (ca + bc) / (a * b)
        - (ab * ab * ab + bc * bc * bc + ca * ca * ca) / (3 * a * b * c)
    )
    return (logs + 2 * _arctan(a * b / (c * abc)) + powers) / _pi()


def _log_ratio(x: Decimal, rest: Decimal) -> Decimal:
    """Return ln[(r + x)/(r − x)] for r² = x² + rest², in the form without a difference."""
    return 2 * (((x * x + rest * rest).sqrt() + x) / rest).ln()


def _arctan(x: Decimal) -> Decimal:
    """Return arctan x for x ≥ 0: the argument is halved until the power series converges fast."""
    halvings = 0
    while x > Decimal("0.01"):
        x = x / (1 + (1 + x * x).sqrt())
        halvings += 1
    total, power, n = x, x, 1
    while True:
        power = -power * x * x
        n += 2
        grown = total + power / n
        if grown == total:
            return total * 2**halvings
        total = grown


def _pi() -> Decimal:
    return 4 * _arctan(Decimal(1))


def _complete_elliptic(complement: Decimal, modulus: Decimal) -> tuple[Decimal, Decimal]:
    """Return K(k) and E(k) for modulus k and complement √(1 − k²), by the arithmetic-geometric mean.

    Source: M. Abramowitz, I. A. Stegun, Handbook of Mathematical Functions, 17.6.
    """
    a, b, c = Decimal(1), complement, modulus
    weight = Decimal("0.5")
    total = weight * c * c
    # c falls quadratically: once its square is below the last digit, further steps change nothing.
    while 1 + c * c != 1:
        a, b, c = (a + b) / 2, (a * b).sqrt(), (a - b) / 2
        weight *= 2
        total += weight * c * c
    first = _pi() / (2 * a)
    return first, first * (1 - total)
