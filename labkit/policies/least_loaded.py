"""Least-loaded: the option with the lowest utilisation."""

import numpy as np

from labkit.checks import check_member
from labkit.compiled import inlined, multiply_wide
from labkit.policies.base import Policy

TIES = ("random", "first")


@inlined
def lower(seen, weights, one, other):
    """Tell whether server `one` has a lower utilisation than server `other` (cross-multiplied)."""
    if weights is None:
        return seen[one] < seen[other]
    return seen[one] * weights[other] < seen[other] * weights[one]


@inlined
def level(seen, weights, one, other):
    """Tell whether the two servers have the same utilisation."""
    if weights is None:
        return seen[one] == seen[other]
    return seen[one] * weights[other] == seen[other] * weights[one]


@inlined
def least_fair(seen, weights, options, row, count, coin):
    """Return the position of the lowest utilisation, equal ones by a fair coin."""
    best = np.uint64(options[row, np.uint64(0)])
    if count == 2:
        other = np.uint64(options[row, np.uint64(1)])
        tied = np.uint64(level(seen, weights, other, best)) & (coin >> np.uint64(63))
        return np.uint64(lower(seen, weights, other, best)) | tied
    ties = np.uint64(1)
    for position in range(1, count):
        other = np.uint64(options[row, np.uint64(position)])
        below = lower(seen, weights, other, best)
        ties = np.uint64(1) if below else ties + np.uint64(level(seen, weights, other, best))
        best = other if below else best
    rank = multiply_wide(coin, ties)[0]
    passed = np.uint64(0)
    picked = np.uint64(0)
    for position in range(count):
        tied = level(seen, weights, np.uint64(options[row, np.uint64(position)]), best)
        picked = np.uint64(position) if tied and passed == rank else picked
        passed += np.uint64(tied)
    return picked


def choose_fair(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    return least_fair(seen, weights, options, row, count, coin)


def choose_first(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    picked = np.uint64(0)
    best = np.uint64(options[row, picked])
    for position in range(1, count):
        other = np.uint64(options[row, np.uint64(position)])
        below = lower(seen, weights, other, best)
        best = other if below else best
        picked = np.uint64(position) if below else picked
    return picked


class LeastLoaded(Policy):
    """Place on the option with the lowest utilisation before the task is added.

    Parameters
    ----------
    ties : {"random", "first"}
        Equal utilisations by a fair coin, or always the option named first. With the options drawn from
        separate groups the second has the smaller gap (Vöcking 2003).

    Raises
    ------
    InputError
        When `ties` is another word.

    Notes
    -----
    With d options on all servers the gap is ln ln n / ln d + O(1) whatever the number of tasks (Azar, Broder,
    Karlin & Upfal 1999; Berenbrink, Czumaj, Steger & Vöcking 2006); on sparse networks it is larger.

    Examples
    --------
    The same arrivals that leave one-choice 24 tasks above the mean:

    >>> import labkit as lk
    >>> rule = lk.LeastLoaded()
    >>> rule.name, lk.LeastLoaded(ties="first").name
    ('least-loaded', 'least-loaded(ties=first)')
    >>> lk.place(lk.ring(4), rule, tasks=4000, rng=1).loads.tolist()
    [[1000, 999, 1001, 1000]]
    """

    def __init__(self, ties: str = "random") -> None:
        self.ties = check_member("ties", ties, TIES)
        self.choose = choose_fair if ties == "random" else choose_first

    @property
    def name(self) -> str:
        """The policy in words."""
        return "least-loaded" if self.ties == "random" else f"least-loaded(ties={self.ties})"

    @property
    def kernel_name(self) -> str:
        """The word that keys compiled code."""
        return f"LeastLoaded_{self.ties}"
