"""Static split: fixed shares from the fair split of the demand, and no look at the loads."""

from typing import Any, ClassVar

import numpy as np

from labkit.compiled import unit_interval
from labkit.fleet.model import Fleet
from labkit.policies.base import Policy
from labkit.policies.one_choice import toss
from labkit.survey.demand import evenly_balanced
from labkit.survey.fair import fair_profile


def choose(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    bounds = state[0]
    if bounds.shape[0] == 0:
        return toss(weights, options, row, count, coin)
    target = unit_interval(coin)
    picked = np.uint64(0)
    for position in range(count - 1):
        picked += np.uint64(bounds[choice, np.uint64(position)] <= target)
    return picked


class StaticSplit(Policy):
    """Place by fixed probabilities, those of the max-min fair split of the demand (`labkit.survey`).

    On average every server gets what the fair profile gives it, and the fullest the optimum; no rule can do
    better on average. It needs the demands, but no loads, so that late reports do not matter to it. What it
    leaves is chance: with m tasks a server's load varies like sqrt(m).

    Where an even split is fair already, as on regular fleets, it is the same as one-choice.

    Examples
    --------
    Of the 18 that north and east share, half goes north; of the 12 that east and south share, all goes south,
    since east is full enough:

    >>> import pandas as pd
    >>> import labkit as lk
    >>> servers = pd.DataFrame({"server": ["north", "east", "south"], "capacity": [10, 10, 40]})
    >>> choices = pd.DataFrame(
    ...     {"option_1": ["north", "east"], "option_2": ["east", "south"], "demand": [18, 12]}
    ... )
    >>> rule = lk.StaticSplit()
    >>> rule.name, rule.knows
    ('static-split', 'the demands; no loads')
    >>> (bounds,) = rule.prepare(lk.Fleet(servers, choices))
    >>> bounds.tolist()
    [[0.5], [0.0]]
    """

    choose = staticmethod(choose)
    knows, compares = "the demands; no loads", 0.0
    by_table: ClassVar[bool] = True

    @property
    def name(self) -> str:
        """The policy in words."""
        return "static-split"

    def prepare(self, fleet: Fleet) -> tuple[Any, ...]:
        """Return, for each choice, the bounds between the options' parts of [0, 1); none for even splits."""
        if evenly_balanced(fleet):
            return (np.empty((0, 1)),)
        return (bounds_of(fair_profile(fleet).split.by_option()[:, : fleet.options.shape[1]]),)


def bounds_of(carried: np.ndarray) -> np.ndarray:
    """Return the upper bounds of all options' parts but the last, for what each option carries.

    Parameters
    ----------
    carried : numpy.ndarray, shape (choices, options)
        Amounts of at least 0; a choice without any gets no bound above 0.

    Returns
    -------
    numpy.ndarray, shape (choices, options − 1)
        Not falling along a row. The part of an option that carries nothing is empty.
    """
    passed = np.cumsum(carried, axis=1)
    total = passed[:, -1:]
    # The last option that carries anything ends at 1 exactly, and so does what comes after it.
    shares = np.divide(passed, total, out=np.ones_like(passed), where=total > 0)
    return np.ascontiguousarray(shares[:, :-1])
