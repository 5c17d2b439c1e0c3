"""The factor on all capacities at which a share of failures, known with limits, meets a risk."""

import math
from collections.abc import Callable
from dataclasses import dataclass

import pandas as pd

from labkit.errors import InputError

# A fleet this many times as large settles any question of a target, or nothing does.
LARGEST = 64.0
STEP = 1.25

# What went wrong how often, with lower and upper limit.
Share = tuple[float, float, float]


@dataclass(frozen=True)
class FoundScale:
    """What `find_scale` found.

    Attributes
    ----------
    estimate, lower, upper : float
        The factors at which the share, and its limits, meet the risk.
    at_least : bool
        The least factor that was to be tried meets it already.
    curve : pandas.DataFrame
        One row a factor that was tried: scale, share, lower, upper.
    """

    estimate: float
    lower: float
    upper: float
    at_least: bool
    curve: pd.DataFrame


def find_scale(
    share_at: Callable[[float], Share], *, risk: float, tolerance: float, least: float, of: str
) -> FoundScale:
    """Search for the factors at which a share, and its two limits, meet the risk.

    Parameters
    ----------
    share_at : callable
        The share at a factor; it should fall as the factor grows.
    risk : float
    tolerance : float
        How exactly, as a share of the factor.
    least : float
        The least factor to be tried; 0: 1 ÷ `LARGEST`.
    of : str
        Name of the share, for the refusal.

    Raises
    ------
    InputError
        When no factor up to `LARGEST` (times the least, where that is above 1) will do.
    """
    known: dict[float, Share] = {}  # by the logarithm of the factor

    def limits(logarithm: float) -> Share:
        if logarithm not in known:
            known[logarithm] = share_at(math.exp(logarithm))
        return known[logarithm]

    floor = math.log(least) if least > 0 else -math.log(LARGEST)
    ends = []
    for which in range(3):

        def beyond(logarithm: float, which: int = which) -> bool:
            return limits(logarithm)[which] > risk

        low, high = _bracket(beyond, sorted(known), floor, f"{of} down to the risk of {risk:g}")
        # A share moves in steps where capacities are rounded: the side that meets the risk is the answer.
        while high - low > tolerance:
            middle = (low + high) / 2
            low, high = (middle, high) if beyond(middle) else (low, middle)
        ends.append(high)
    curve = pd.DataFrame(
        [(math.exp(logarithm), *values) for logarithm, values in sorted(known.items())],
        columns=["scale", "share", "lower", "upper"],
    )
    estimate, lower, upper = (math.exp(end) for end in (ends[0], min(ends), max(ends)))
    return FoundScale(estimate, lower, upper, ends[0] == floor, curve)


def _bracket(
    beyond: Callable[[float], bool], tried: list[float], floor: float, goal: str
) -> tuple[float, float]:
    """Return logarithms of factors on both sides of the wanted one; twice the least where that will do."""
    low = max((each for each in tried if beyond(each)), default=max(0.0, floor))
    below = [each for each in tried if not beyond(each)]
    while not beyond(low):
        if low <= floor:
            return low, low
        below.append(low)
        low = max(floor, low - math.log(STEP))
    high = min((each for each in below if each > low), default=low + math.log(STEP))
    while beyond(high):
        low, high = high, high + math.log(STEP)
        if high > math.log(LARGEST) + max(0.0, floor):
            raise InputError(
                f"no capacity up to {LARGEST:g} times the present one brings {goal}; accept a larger risk "
                "or a longer target."
            )
    return low, high
