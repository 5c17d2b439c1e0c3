"""Small checks used at the public door only; each refusal is one sentence."""

import difflib
import math
import numbers
from collections.abc import Iterable
from typing import Any

from labkit.errors import InputError

# Whole numbers up to here are exact as floats, too.
LARGEST_WHOLE = 2**53


def shown(value: Any) -> str:
    """Return a value as a refusal shows it; Python does not write out numbers of thousands of digits."""
    try:
        return repr(value)
    except (ValueError, RecursionError):
        return "a number of thousands of digits" if isinstance(value, int) else f"a {type(value).__name__}"


def check_whole(name: str, value: Any, *, least: int = 1) -> int:
    """Return `value` as an int when it is a whole number from `least` to `LARGEST_WHOLE`."""
    whole = isinstance(value, numbers.Integral) and not isinstance(value, bool)
    if not whole or int(value) < least:
        raise InputError(f"{name} is {shown(value)}; give a whole number of at least {least}.")
    if int(value) > LARGEST_WHOLE:
        size = f"{float(value):.4g}" if int(value) < 10**300 else "far larger"
        raise InputError(f"{name} is {size}; give a whole number of at most {LARGEST_WHOLE}.")
    return int(value)


def check_number(name: str, value: Any) -> float:
    """Return `value` as a float when it is a finite real number."""
    real = isinstance(value, numbers.Real) and not isinstance(value, bool)
    try:
        real = real and math.isfinite(float(value))
    except OverflowError:
        real, value = False, "far larger than any float"
    if not real:
        raise InputError(f"{name} is {shown(value)}; give a finite number.")
    return float(value)


def check_positive(name: str, value: Any) -> float:
    """Return `value` as a float when it is finite and above zero."""
    number = check_number(name, value)
    if number <= 0:
        raise InputError(f"{name} is {shown(value)}; give a number above 0.")
    return number


def check_fraction(name: str, value: Any, *, closed: bool = False) -> float:
    """Return `value` as a float when it lies inside (0, 1), or in [0, 1] when `closed`."""
    number = check_number(name, value)
    inside = 0 <= number <= 1 if closed else 0 < number < 1
    if not inside:
        bounds = "from 0 to 1" if closed else "above 0 and below 1"
        raise InputError(f"{name} is {shown(value)}; give a number {bounds}.")
    return number


def check_member(name: str, value: Any, allowed: Iterable[str]) -> str:
    """Return `value` when it is one of the `allowed` words; the refusal names the nearest."""
    words = list(allowed)
    if isinstance(value, str) and value in words:
        return value
    raise InputError(f"{name} is {shown(value)}; {nearest(value, words)}.")


def nearest(value: Any, words: Iterable[str]) -> str:
    """Return the end of a refusal: the nearest allowed word, or the whole list."""
    words = list(words)
    close = difflib.get_close_matches(str(value), words, n=1)
    allowed = f"allowed: {', '.join(words)}"
    return f"did you mean {close[0]!r} ({allowed})" if close else allowed
