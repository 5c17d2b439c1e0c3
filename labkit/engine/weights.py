"""Capacities as the choosers compare them: whole numbers where they share a unit."""

from fractions import Fraction
from math import lcm

import numpy as np

# More different capacities than this, or a finer common unit, and equal utilisations are chance anyway.
MOST_VALUES = 4_096
FINEST = 10_000
_LARGEST = 2**31


def comparison_weights(capacity: np.ndarray | None) -> np.ndarray | None:
    """Return numbers in the ratio of the capacities, for comparing utilisations without rounding.

    Utilisations are compared by products load × capacity. In whole numbers these are exact, so that equal
    utilisations are equal in whatever unit the user gave the capacities (0.1 and 0.3 as well as 1 and 3).

    Parameters
    ----------
    capacity : float64 array, shape (servers,), or None
        None when every capacity is one.

    Returns
    -------
    float64 array, shape (servers,), read-only, or None
        None when all are equal; the capacities themselves when they share no unit that is coarse enough.
    """
    if capacity is None:
        return None
    values, places = np.unique(capacity, return_inverse=True)
    if values.size == 1:
        return None
    if values.size > MOST_VALUES:
        return capacity
    ratios = values / values[0]
    nearest = [Fraction(float(ratio)).limit_denominator(FINEST) for ratio in ratios]
    unit = 1
    for ratio, fraction in zip(ratios, nearest, strict=True):
        unit = lcm(unit, fraction.denominator)
        if abs(float(fraction) - ratio) > 1e-12 * ratio or fraction * unit > _LARGEST or unit > _LARGEST:
            return capacity
    whole = np.array([float(fraction * unit) for fraction in nearest])[places]
    whole.setflags(write=False)
    return whole
