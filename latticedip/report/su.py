"""Values with their standard uncertainty in brackets."""

from __future__ import annotations

import math
from decimal import Decimal, localcontext

from latticedip.report.tables import fixed

#: The uncertainty is given with two digits where these are at most this, else with one (the rule of nineteen).
TWO_DIGITS_UP_TO = 19
#: Digits of a value that has no uncertainty.
SIGNIFICANT = 6
#: Values with a leading digit beyond these powers of ten are written with a power.
SMALLEST_POWER, LARGEST_POWER = -5, 7


def format_su(value: float | None, su: float | None) -> str:
    """Return a value with its standard uncertainty in units of the last digit given: 0.1234 and 0.0012 as 0.1234(12).

    The uncertainty has two digits up to 19 and one beyond (the rule of crystallographic journals); a large one is
    written out, with the value rounded to the same place: 12300(400). Very small and very large values get a power of
    ten: 1.50(2)e-9. Without an uncertainty (None, NaN, infinite or 0) the value has six significant digits; without a
    value the text is "-".

    Raises ValueError for a negative uncertainty.
    """
    if value is None or not math.isfinite(value):
        return "-"
    if su is None or not math.isfinite(su) or su == 0.0:
        return f"{value:.{SIGNIFICANT}g}"
    if su < 0:
        raise ValueError(f"a standard uncertainty is at least 0, got {su!r}.")
    exact, uncertainty = Decimal(repr(float(value))), Decimal(repr(float(su)))
    power = max((x for x in (exact, uncertainty) if x), key=abs).adjusted()
    if SMALLEST_POWER < power < LARGEST_POWER:
        return _written(exact, uncertainty)
    return f"{_written(exact.scaleb(-power), uncertainty.scaleb(-power))}e{power}"


def with_su(value: float, decimals: int, su: float | None) -> str:
    """A value with its standard uncertainty as `format_su`, else with some decimals: where there is none, or none that
    a thousandth of the last decimal could tell from 0.
    """
    if su is None or not math.isfinite(su) or su < 10.0 ** -(decimals + 3):
        return fixed(value, decimals)
    return format_su(value, su)


def _written(value: Decimal, su: Decimal) -> str:
    digits, place = _leading(su)
    with localcontext() as context:
        # Room for every digit between the largest and the smallest double.
        context.prec = 700
        rounded = value.quantize(Decimal(1).scaleb(place))
    number = f"{rounded:f}"
    return f"{number if rounded else number.lstrip('-')}({digits * 10 ** max(0, place)})"


def _leading(su: Decimal) -> tuple[int, int]:
    """Leading digits of an uncertainty as a whole number, and the power of ten that they count."""
    place = su.adjusted() - 1
    digits = round(su.scaleb(-place))
    if digits <= TWO_DIGITS_UP_TO:
        return digits, place
    # From nine and a half on this is 10, of the same place.
    return round(su.scaleb(-place - 1)), place + 1
