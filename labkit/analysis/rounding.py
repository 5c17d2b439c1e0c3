"""Numbers rounded by their uncertainty: two digits of the error, and the value to the same decimal place."""

import math
from decimal import ROUND_HALF_EVEN, Context, Decimal, localcontext

# Significant digits of an error.
DIGITS = 2

# Significant digits of a number without any error.
EXACT = 12

# Numbers with a digit outside these powers of ten are written with a power of ten.
_LEAST, _MOST = -9, 15

# Enough for the smallest and the largest float side by side.
_CONTEXT = Context(prec=800, rounding=ROUND_HALF_EVEN, Emin=-9999, Emax=9999)


def rounded(value: float, error: float) -> tuple[str, str]:
    """Return a value and its error as texts.

    Parameters
    ----------
    value, error : float
        Finite; the error at least 0.

    Returns
    -------
    tuple of str
        The error with two significant digits, the value to the same decimal place. A value without error is
        written with up to 12 digits, its error as 0.

    Examples
    --------
    >>> rounded(0.123456, 0.0123)
    ('0.123', '0.012')
    >>> rounded(98765.4, 996)
    ('98800', '1000')
    >>> rounded(0.1 + 0.2, 0.0)
    ('0.3', '0')
    """
    if error == 0:
        return exact(value), "0"
    place = last_place(error)
    return at_place(value, place), at_place(error, place)


def last_place(error: float) -> int:
    """Return the power of ten of the last digit that an error above 0 justifies."""
    with localcontext(_CONTEXT):
        number = Decimal(error)
        place = number.adjusted() - DIGITS + 1
        carried = number.quantize(Decimal(1).scaleb(place)).adjusted() > number.adjusted()
    return place + carried


def at_place(value: float, place: int) -> str:
    """Return a value rounded to the power of ten `place`, ties to the even digit."""
    with localcontext(_CONTEXT):
        number = Decimal(value).quantize(Decimal(1).scaleb(place))
        if not number:
            number = abs(number)  # no minus before zero
        if place < _LEAST or max(number.adjusted(), place) > _MOST:
            return f"{number:e}"
        return f"{number:f}" if place <= 0 else str(int(number))


def exact(value: float) -> str:
    """Return a value without error: a whole number as it is, another with up to 12 digits."""
    if math.isfinite(value) and value == int(value) and abs(value) < 10.0**_MOST:
        return str(int(value))
    return f"{value:.{EXACT}g}"
