from __future__ import annotations

import doctest
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from perdure._cli import rounding
from perdure._cli.rounding import bound, rounded, rounded_like, seconds_text


@pytest.mark.parametrize(
    ("value", "error", "expected"),
    [
        (0.021653, 0.00043, ("0.02165", "0.00043")),
        (23.5507, 0.02, ("23.551", "0.020")),
        (12.3456, 0.21, ("12.35", "0.21")),
        (0.5, 0.0996, ("0.50", "0.10")),  # the error gains a digit by rounding
        (123456.0, 7800.0, ("123500", "7800")),
        (0.003, 0.02, ("0.003", "0.020")),
        (0.0, 0.3, ("0.00", "0.30")),
        (-1e-5, 0.02, ("0.000", "0.020")),  # not -0.000
        (-2.5, 0.31, ("-2.50", "0.31")),
        (12345678.0, 1300.0, ("1.23457e7", "0.00013e7")),
        (1.2347e-9, 2.1e-11, ("1.235e-9", "0.021e-9")),
        (1.0, 3.8e-19, ("1", "3.8e-19")),  # an error below rounding
        (2.0, 0.0, ("2", "")),
        (1 / 3, None, ("0.333333", "")),
        (float("nan"), None, ("nan", "")),
    ],
)
def test_rounded(value: float, error: float | None, expected: tuple[str, str]) -> None:
    assert rounded(value, error) == expected


def test_examples_of_the_docstrings() -> None:
    outcome = doctest.testmod(rounding)
    assert outcome.attempted >= 3
    assert outcome.failed == 0


def parts(text: str) -> tuple[Decimal, int, str]:
    """Number, power of ten of its last digit, and the power written apart."""
    mantissa, _, power = text.partition("e")
    exponent = Decimal(mantissa).as_tuple().exponent
    assert isinstance(exponent, int)
    return Decimal(text), exponent + int(power or 0), power


@given(st.floats(-1e6, 1e6), st.floats(1e-8, 1e12))
def test_both_are_right_to_the_last_digit_shown(value: float, error: float) -> None:
    value_text, error_text = rounded(value, error)
    shown, last, power = parts(value_text)
    shown_error, last_error, power_error = parts(error_text)
    assert power == power_error
    # a trailing zero that rounding to tens leaves is a digit shown, but not one that was rounded to
    step = max(Decimal(1).scaleb(last), Decimal(1).scaleb(shown_error.adjusted() - 1))
    assert abs(shown - Decimal(value)) <= step / 2
    # two significant digits: at worst 1.05 shown as 1.0 or 1.1
    assert abs(shown_error - Decimal(error)) <= Decimal("0.05") * Decimal(error)
    digits = shown_error.scaleb(1 - shown_error.adjusted())
    assert digits == digits.to_integral_value()
    assert last_error <= shown_error.adjusted()


@given(st.floats(1e-300, 1e300))
def test_bounds_stay_true_and_close(number: float) -> None:
    above, below = Decimal(bound(number, upper=True)), Decimal(bound(number, upper=False))
    assert below <= Decimal(number) <= above
    assert above - below <= Decimal("0.1") * Decimal(number)


@pytest.mark.parametrize(
    ("number", "upper", "expected"),
    [(0.000291, True, "0.00030"), (0.00999, True, "0.010"), (3391.0, False, "3300"), (2e-7, True, "2.0e-7")],
)
def test_bound(number: float, upper: bool, expected: str) -> None:
    # the double nearest to 2e-7 lies below it
    assert bound(number, upper=upper) == expected


def test_interval_ends_get_the_digits_of_their_number() -> None:
    assert rounded_like(0.0208, 0.021653, 0.00043) == "0.02080"
    assert rounded_like(1.1e-9, 1.2347e-9, 2.1e-11) == "1.100e-9"
    assert rounded_like(float("inf"), 1.0, 0.1) == "inf"


@pytest.mark.parametrize(
    ("seconds", "expected"),
    [
        (0.04, "0.0 s"),
        (9.96, "10 s"),
        (61.4, "61 s"),
        (599.0, "599 s"),
        (725.0, "12 min"),
        (12600.0, "3.5 h"),
    ],
)
def test_seconds_text(seconds: float, expected: str) -> None:
    assert seconds_text(seconds) == expected
