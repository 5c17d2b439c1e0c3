"""Mixed: least-loaded some of the time, one choice the rest."""

from typing import Any

import numpy as np

from labkit.checks import check_fraction
from labkit.compiled import next_raw, unit_interval
from labkit.fleet.model import Fleet
from labkit.policies.base import Policy
from labkit.policies.least_loaded import least_fair
from labkit.policies.one_choice import toss


def choose(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    # Both answers, then one of them: cheaper than a branch that cannot be predicted.
    looked = least_fair(seen, weights, options, row, count, coin)
    tossed = toss(weights, options, row, count, coin)
    return looked if unit_interval(next_raw(own)) < state[0] else tossed


class Mixed(Policy):
    """Place by least-loaded with probability `beta`, else by one choice: the (1+beta) process.

    Parameters
    ----------
    beta : float
        From 0 (one-choice) to 1 (least-loaded).

    Raises
    ------
    InputError
        When `beta` lies outside.

    Notes
    -----
    Peres, Talwar & Wieder (2015). It also models load reports for a share of the tasks only.

    Examples
    --------
    >>> import labkit as lk
    >>> rule = lk.Mixed(beta=0.25)
    >>> rule.name, rule.compares
    ('mixed(beta=0.25)', 0.25)
    >>> lk.Mixed(beta=1.5)
    Traceback (most recent call last):
        ...
    labkit.errors.InputError: beta is 1.5; give a number from 0 to 1.
    """

    choose = staticmethod(choose)

    def __init__(self, beta: float) -> None:
        self.beta = check_fraction("beta", beta, closed=True)
        self.knows, self.compares = "the loads of the options, for a share of the tasks", float(self.beta)

    @property
    def name(self) -> str:
        """The policy in words."""
        return f"mixed(beta={self.beta!r})"

    def prepare(self, fleet: Fleet) -> tuple[Any, ...]:
        """Return the share of tasks that look at the loads."""
        return (np.float64(self.beta),)
