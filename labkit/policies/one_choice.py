"""One choice: a coin, and no look at the loads."""

import numpy as np

from labkit.compiled import inlined, multiply_wide, unit_interval
from labkit.policies.base import Policy


@inlined
def toss(weights, options, row, count, coin):
    """Return an option's position by a coin that is fair, or weighted by capacity when capacities differ."""
    if weights is None:
        return multiply_wide(coin, np.uint64(count))[0]
    total = 0.0
    for position in range(count):
        total += weights[options[row, np.uint64(position)]]
    target = unit_interval(coin) * total
    passed = 0.0
    picked = np.uint64(0)
    for position in range(count - 1):
        passed += weights[options[row, np.uint64(position)]]
        picked += np.uint64(passed <= target)
    return picked


def choose(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    return toss(weights, options, row, count, coin)


class OneChoice(Policy):
    """Place by a fair coin among the options, weighted by capacity when capacities differ.

    For n tasks on n servers the gap is of order log n / log log n; for many more tasks it is near
    sqrt(2 m ln n / n) (Raab & Steger 1998).

    Examples
    --------
    >>> import labkit as lk
    >>> rule = lk.OneChoice()
    >>> rule.name, rule.knows
    ('one-choice', 'nothing')
    >>> lk.place(lk.ring(4), rule, tasks=4000, rng=1).loads.tolist()
    [[1024, 1024, 973, 979]]
    """

    choose = staticmethod(choose)
    knows, compares = "nothing", 0.0

    @property
    def name(self) -> str:
        """The policy in words."""
        return "one-choice"
