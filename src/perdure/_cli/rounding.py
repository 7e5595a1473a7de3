"""Numbers as text, with as many digits as their errors leave them."""

from __future__ import annotations

import math
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Context, Decimal

__all__ = ["bound", "rounded", "rounded_like", "seconds_text"]

# Enough for every double written out in full.
_CONTEXT = Context(prec=800)
# A double has no more significant digits than these.
_MOST_DIGITS = 15


def rounded(value: float, error: float | None) -> tuple[str, str]:
    """A value and its standard error, both to two significant digits of the error.

    Parameters
    ----------
    value : float
        Finite.
    error : float or None
        Not negative. With 0, None, or a value that is not finite, the value gets six significant digits.

    Returns
    -------
    tuple of str
        Value and error, both plain or both with the same power of ten, unless the error is smaller than any
        digit of the value. The error is "" where there is none.

    Examples
    --------
    >>> rounded(0.021653, 0.00043)
    ('0.02165', '0.00043')
    >>> rounded(123456.0, 7800.0)
    ('123500', '7800')
    >>> rounded(1.2347e-9, 2.1e-11)
    ('1.235e-9', '0.021e-9')
    """
    if error is None or not math.isfinite(error) or error <= 0.0:
        return _plain(value), ""
    if error < abs(value) * 10.0**-_MOST_DIGITS:
        # Less than the last digit of the value: the two have no digit in common.
        return f"{value:.{_MOST_DIGITS}g}", _write(error, _last_digit(error), _power(_exponent(error)))
    last, power = _layout(value, error)
    return _write(value, last, power), _write(error, min(last, _last_digit(error)), power)


def rounded_like(number: float, value: float, error: float) -> str:
    """`number` with the digits and the power of ten of ``rounded(value, error)``."""
    if number == 0.0 or error <= 0.0 or not math.isfinite(number):
        return _plain(number)
    return _write(number, *_layout(value, error))


def bound(number: float, *, upper: bool) -> str:
    """A bound to two significant digits, rounded to the side that keeps it true."""
    if number == 0.0 or not math.isfinite(number):
        return _plain(number)
    last = _exponent(number) - 1
    rounding = ROUND_CEILING if upper else ROUND_FLOOR
    exact = Decimal(number).quantize(Decimal(1).scaleb(last), rounding=rounding, context=_CONTEXT)
    number = float(exact)
    return _write(number, _last_digit(abs(number)), _power(_exponent(number)))


def seconds_text(seconds: float) -> str:
    """A duration: ``0.4 s``, ``61 s``, ``12 min``, ``3.5 h``."""
    if seconds < 9.95:
        return f"{seconds:.1f} s"
    if seconds < 600.0:
        return f"{seconds:.0f} s"
    return f"{seconds / 60.0:.0f} min" if seconds < 7200.0 else f"{seconds / 3600.0:.1f} h"


def _plain(value: float) -> str:
    """Six significant digits."""
    return f"{value:.6g}" if math.isfinite(value) else str(value)


def _exponent(number: float) -> int:
    """Power of ten of the first digit; number is not zero."""
    return Decimal(number).adjusted()


def _last_digit(error: float) -> int:
    """Power of ten of the second digit of `error`, after rounding: 0.0996 is 0.10."""
    last = _exponent(error) - 1
    return Decimal(error).quantize(Decimal(1).scaleb(last), ROUND_HALF_EVEN, _CONTEXT).adjusted() - 1


def _power(exponent: int) -> int:
    """Power of ten to write apart for numbers of this size: none from 0.0001 to 9999999."""
    return exponent if not -4 <= exponent < 7 else 0


def _layout(value: float, error: float) -> tuple[int, int]:
    """Power of ten of the last digit of the value, and power of ten to write apart."""
    exponent = max(_exponent(number) for number in (value, error) if number != 0.0)
    return max(_last_digit(error), exponent - _MOST_DIGITS + 1), _power(exponent)


def _write(number: float, last: int, power: int) -> str:
    """`number` rounded at the digit 10**last, divided by 10**power where that is not 0."""
    exact = Decimal(number).quantize(Decimal(1).scaleb(last), ROUND_HALF_EVEN, _CONTEXT)
    if exact == 0:
        exact = abs(exact)  # no "-0.00"
    text = f"{exact.scaleb(-power, _CONTEXT):f}"
    return f"{text}e{power}" if power else text
