"""The rule by which replicates are added until a mean is known well enough; no more than plain Python."""

import math
from dataclasses import dataclass
from typing import Any

from labkit.checks import check_fraction, check_whole
from labkit.errors import InputError

# Fewer replicates tell too little of a spread to stop at.
LEAST_TO_STOP = 10
# A look follows after at least a quarter more replicates, and at most three times as many.
LEAST_STEP, MOST_STEP = 1.25, 3
# So many equal values, and at least 3 ÷ precision, are believed to be all the values that there are: one that
# n replicates do not show has a share of at most 3/n, at 95 %.
EQUAL_BELIEVED = 100


@dataclass(frozen=True)
class StoppingRule:
    """How well a mean is to be known, and from how few and many replicates.

    Attributes
    ----------
    precision : float
        Largest half-width of the interval of the mean, as a share of the mean.
    confidence : float
        Coverage of that interval.
    replicates, most_replicates : int
        First look, and the number at which it ends in any case.
    measure : str
    """

    precision: float
    confidence: float
    replicates: int
    most_replicates: int
    measure: str

    def needed(self, count: int, width: float) -> float:
        """Return how many replicates a group needs, from its half-width over mean after `count` of them.

        A width of 0 says that all values are equal; an infinite one, that their mean is 0.
        """
        if width == 0:
            return max(EQUAL_BELIEVED, 3 / self.precision)
        return count * (width / self.precision) ** 2

    def next_look(self, count: int, widths: list[float]) -> int | None:
        """Return at how many replicates to look again after `count`, or None when it is enough.

        Parameters
        ----------
        count : int
        widths : list of float
            Of each group, as in `needed`.
        """
        needed = max(self.needed(count, width) for width in widths)
        if needed <= count or count >= self.most_replicates:
            return None
        # a little more than needed, so that the next look is the last one whatever the spread says then
        wanted = min(max(needed * (1 + count**-0.5), LEAST_STEP * count), MOST_STEP * count)
        return min(math.ceil(wanted), self.most_replicates)

    def outcome(self, count: int, width: float) -> str:
        """Return in words what the rule was for one group, and how it ended."""
        rule = f"mean {self.measure} within {100 * self.precision:g} % at {100 * self.confidence:g} %"
        reached = self.needed(count, width) <= count
        if width == 0:
            found = "all equal"
        else:
            found = f"{100 * width:.3g} %" if width < 1 else "no farther from 0 than its error"
        ended = f"reached with {count} replicates" if reached else f"not reached with the most, {count}"
        return f"{rule}: {ended}: {found}"


def stopping_rule(
    precision: Any, replicates: Any, most_replicates: Any, measure: str = "gap", confidence: Any = 0.95
) -> StoppingRule:
    """Return a checked rule.

    Raises
    ------
    InputError
        When a number is refused.
    """
    precision = check_fraction("precision", precision)
    confidence = check_fraction("confidence", confidence)
    replicates = check_whole("replicates", replicates)
    if replicates < LEAST_TO_STOP:
        raise InputError(
            f"replicates is {replicates}; with a precision the first look is after that many, so give at "
            f"least {LEAST_TO_STOP}."
        )
    most_replicates = check_whole("most_replicates", most_replicates)
    if most_replicates < replicates:
        raise InputError(
            f"most_replicates is {most_replicates}; give at least as many as replicates, {replicates}."
        )
    return StoppingRule(precision, confidence, replicates, most_replicates, measure)
