"""Pairwise averaging: a reference that no placement rule can be, since it moves work already placed."""

from typing import ClassVar

import numpy as np

from labkit.policies.base import Policy


def choose(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    return np.uint64(0)


def level_out(state, loads, weights, options, row, count, server, amount, fresh):
    """Share the work of all the task's options in the ratio of their capacities."""
    work = 0.0
    room = 0.0
    for position in range(count):
        option = np.uint64(options[row, np.uint64(position)])
        work += loads[option]
        room += 1.0 if weights is None else weights[option]
    for position in range(count):
        option = np.uint64(options[row, np.uint64(position)])
        loads[option] = work / room * (1.0 if weights is None else weights[option])


class PairwiseAveraging(Policy):
    """Level out the utilisation of the task's options after it is added: a reference, not a placement rule.

    It moves work that is already placed, in any fraction, so that it shows what the network itself allows:
    what a placement rule loses against it, it loses because placed work stays. Loads become fractions. What
    is reported of loads does not matter to it.

    Notes
    -----
    On a ring of n servers the mean square of the difference between servers k apart is (k(n − k) − 1) / n,
    so its spread grows like sqrt(n), too (as a bound: Alistarh, Nadiradze & Sabour 2020).

    Examples
    --------
    A task has been put on the first of two servers, which then share all that they have; the third is no
    option of it:

    >>> import numpy as np
    >>> import labkit as lk
    >>> rule = lk.PairwiseAveraging()
    >>> rule.name, rule.moves_work
    ('pairwise-averaging', True)
    >>> loads, options = np.array([3.0, 0.0, 5.0]), np.array([[0, 1]], np.uint32)
    >>> rule.after((), loads, None, options, 0, 2, 0, 1.0, True)
    >>> loads.tolist()
    [1.5, 1.5, 5.0]
    """

    choose = staticmethod(choose)
    after = staticmethod(level_out)
    moves_work: ClassVar[bool] = True
    knows = "the loads of the options, and it moves work already placed"

    @property
    def name(self) -> str:
        """The policy in words."""
        return "pairwise-averaging"
