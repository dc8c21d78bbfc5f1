"""Numbers as a reader wants them: rounded to two significant digits of their error.

Minus signs are typographic (U+2212), as in print.
"""

from __future__ import annotations

import math
from decimal import ROUND_HALF_EVEN, Decimal

__all__ = ["plain_number", "value_with_error"]

MINUS = "\N{MINUS SIGN}"

_ERROR_DIGITS = 2
_LEAST_DECIMALS, _MOST_DECIMALS = -4, 7  # of the error; beyond, a power of ten is split off
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def value_with_error(value: float, error: float | None) -> str:
    """Value and error to two significant digits of the error.

    Parameters
    ----------
    value : float
        Best value.
    error : float or None
        1σ error in the unit of the value. None (or 0, an exact number) gives the value alone with
        four significant digits.

    Returns
    -------
    str
        For instance ``"5.3 ± 1.1"``.

    Raises
    ------
    ValueError
        The value is not finite, or the error is negative or not finite.

    """
    if not math.isfinite(value):
        raise ValueError(f"value must be finite, found {value!r}")
    if error is None or error == 0.0:
        return plain_number(value)
    if not (math.isfinite(error) and error > 0.0):
        raise ValueError(f"error must be positive and finite, found {error!r}")
    value_exact, error_exact = Decimal(repr(float(value))), Decimal(repr(float(error)))
    rounded = _to_digits(error_exact, _ERROR_DIGITS)
    decimals = _ERROR_DIGITS - 1 - rounded.adjusted()
    if _LEAST_DECIMALS <= decimals <= _MOST_DECIMALS:
        return f"{_fixed(value_exact, decimals)} ± {_fixed(rounded, decimals)}"
    power = max(rounded.adjusted(), value_exact.adjusted() if value_exact else rounded.adjusted())
    shift = Decimal(1).scaleb(-power)
    places = decimals + power
    mantissa = f"{_fixed(value_exact * shift, places)} ± {_fixed(rounded * shift, places)}"
    return f"({mantissa}) × 10{str(power).translate(_SUPERSCRIPT)}"


def plain_number(value: float | None, digits: int = 4) -> str:
    """Number with `digits` significant digits; an em dash for None.

    Numbers of 10⁶ and more, or below 10⁻⁴, get a power of ten: ``"3.130 × 10⁸"``.
    """
    if value is None:
        return "—"
    if not math.isfinite(value):
        return "∞" if value > 0 else f"{MINUS}∞" if value < 0 else "not a number"
    exact = Decimal(repr(float(value)))
    if not exact:
        return "0"
    rounded = _to_digits(exact, digits)
    power = rounded.adjusted()
    if -4 <= power < 6:
        return _fixed(rounded, max(digits - 1 - power, 0))
    mantissa = _fixed(rounded.scaleb(-power), digits - 1)
    return f"{mantissa} × 10{str(power).translate(_SUPERSCRIPT)}"


def _to_digits(number: Decimal, digits: int) -> Decimal:
    """Round to significant digits; 0.0996 to two of them is 0.10."""
    step = Decimal(1).scaleb(number.adjusted() - digits + 1)
    return number.quantize(step, rounding=ROUND_HALF_EVEN)


def _fixed(number: Decimal, decimals: int) -> str:
    """Fixed-point text; negative `decimals` round to tens, hundreds, ..."""
    rounded = number.quantize(Decimal(1).scaleb(-decimals), rounding=ROUND_HALF_EVEN)
    text = f"{abs(rounded):f}"
    return text if rounded >= 0 or not rounded else MINUS + text
