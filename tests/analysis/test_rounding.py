"""Numbers show what their error justifies, and no more."""

from decimal import Decimal, localcontext

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from labkit.analysis.rounding import DIGITS, exact, rounded

finite = st.floats(allow_nan=False, allow_infinity=False)
errors = st.floats(min_value=0, exclude_min=True, allow_nan=False, allow_infinity=False)


def last_digit(text: str) -> Decimal:
    """The value of one unit in the last digit that a text shows, zeros that only fill up included."""
    return Decimal(1).scaleb(Decimal(text).as_tuple().exponent)


@given(finite, errors)
@example(0.0, 5e-324)
@example(-1e-320, 1.0)
@example(1.7976931348623157e308, 5e-324)
@example(9.995, 0.0996)
@example(123456.0, 996.0)
def test_texts_read_back_within_half_a_unit_of_the_last_digit(value, error):
    shown, uncertain = rounded(value, error)
    # the unit is that of the second digit of the error, however the number is written
    digits = Decimal(uncertain)
    unit = Decimal(1).scaleb(digits.adjusted() - DIGITS + 1)
    assert abs(digits - Decimal(error)) <= unit / 2
    assert abs(Decimal(shown) - Decimal(value)) <= unit / 2


@given(finite, errors)
def test_no_more_digits_than_the_error_justifies(value, error):
    shown, uncertain = rounded(value, error)
    significant = Decimal(uncertain).as_tuple().digits
    assert len(significant) == DIGITS or set(significant[DIGITS:]) == {0}
    unit = Decimal(1).scaleb(Decimal(uncertain).adjusted() - DIGITS + 1)
    with localcontext(prec=1000):
        assert Decimal(shown) % unit == 0
    if unit < 1:
        assert last_digit(shown) == last_digit(uncertain) == unit


@pytest.mark.parametrize(
    ("value", "error", "expected"),
    [
        (0.123456, 0.0123, ("0.123", "0.012")),
        (0.12, 0.00996, ("0.120", "0.010")),
        (98765.4, 996.0, ("98800", "1000")),
        (12345.6, 678.0, ("12350", "680")),
        (-0.0001, 0.2, ("0.00", "0.20")),
        (1.23456e-12, 3.4e-14, ("1.235e-12", "3.4e-14")),
        (3.0, 0.0, ("3", "0")),
        (0.1 + 0.2, 0.0, ("0.3", "0")),
    ],
)
def test_examples(value, error, expected):
    assert rounded(value, error) == expected


@given(st.integers(-(10**14), 10**14))
def test_whole_numbers_are_exact(number):
    assert exact(float(number)) == str(number)
