"""What every policy is: a name that can be written down, a prepared state, and one compiled chooser."""

from typing import Any, ClassVar

from labkit.errors import InputError
from labkit.fleet.model import Fleet

# For `Policy.renewal`: work the state out before the first task and whenever loads are reported.
WITH_REPORTS = -1


def keep(state, seen):
    """Leave the state as it is."""


def rest(state, loads, weights, options, row, count, server, amount, fresh):
    """Do nothing after a placement."""


class Policy:
    """A rule that picks a server from a choice.

    A policy file defines one chooser, a plain function that numba can compile::

        choose(state, seen, weights, options, row, count, choice, coin, own) -> position

    state : tuple
        What `prepare` returned for the fleet.
    seen : array, shape (servers,), read-only
        The loads that the policy may look at.
    weights : array, shape (servers,), or None
        Numbers in the ratio of the capacities, whole where those share a unit; None when all are equal. A
        test for None costs nothing once compiled.
    options : uint32 array of two dimensions, row : uint64, count : int
        The task may go to the servers ``options[row, 0 .. count - 1]``.
    choice : uint64
        Number of the choice in the fleet's table (`row` need not be it); 0 when choices are not listed.
    coin : uint64
        A uniform word that belongs to the arrival, the same for every policy.
    own : uint64 array, shape (4,)
        A second stream (``labkit.compiled.next_raw(own)``) for a policy that needs more randomness.

    Examples
    --------
    Rules are equal when their names are; those with one chooser share compiled code:

    >>> import labkit as lk
    >>> rule = lk.Mixed(beta=0.25)
    >>> rule.name, rule.kernel_name
    ('mixed(beta=0.25)', 'Mixed')
    >>> rule == lk.Mixed(beta=0.5), rule.kernel_name == lk.Mixed(beta=0.5).kernel_name
    (False, True)
    """

    choose: Any
    # A plain function ``renew(state, seen)`` that numba can compile: it works out anew what depends on loads.
    renew: Any = staticmethod(keep)
    # A plain function ``after(state, loads, weights, options, row, count, server, amount, fresh)`` that numba
    # can compile, called right after each placement with its server and task size; `fresh` tells whether the
    # policy sees loads as they are. Unlike the chooser it may change `state` and `loads`.
    after: Any = staticmethod(rest)
    # What it must know at dispatch time, and the share of tasks for which it looks at their options.
    knows: str = "the loads of the options"
    compares: float = 1.0
    # Whether it moves work already placed, so that loads are no longer whole numbers.
    moves_work: ClassVar[bool] = False
    # Whether its tables go by the position of an option within its choice, and whether what it decides
    # depends on the loads of servers beyond the options.
    by_table: ClassVar[bool] = False
    looks_far: bool = False
    cached: ClassVar[bool] = True

    @property
    def name(self) -> str:
        """The policy in words, with its parameters; `parse_policy` reads it back."""
        raise NotImplementedError

    @property
    def kernel_name(self) -> str:
        """The word that keys compiled code: equal for policies that share one chooser."""
        return type(self).__name__

    def prepare(self, fleet: Fleet) -> tuple[Any, ...]:
        """Return what the chooser needs to know about the fleet.

        Parameters
        ----------
        fleet : Fleet

        Returns
        -------
        tuple of arrays and numbers
            The `state` of the chooser; empty for a rule that needs none.

        Raises
        ------
        InputError
            When the rule cannot work on this fleet.

        Examples
        --------
        >>> import labkit as lk
        >>> lk.LeastLoaded().prepare(lk.ring(4))
        ()
        >>> (beta,) = lk.Mixed(beta=0.25).prepare(lk.ring(4))
        >>> float(beta)
        0.25
        """
        return ()

    def renewal(self, fleet: Fleet) -> int:
        """Return how often, in tasks, `renew` is called, just before the task; 0 for never.

        `WITH_REPORTS` stands for before the first task and whenever loads are reported.

        Parameters
        ----------
        fleet : Fleet

        Returns
        -------
        int

        Examples
        --------
        >>> import labkit as lk
        >>> lk.LeastLoaded().renewal(lk.ring(8)), lk.SmoothFeedback(every=20).renewal(lk.ring(8))
        (0, 20)
        """
        return 0

    def own_state(self, state: tuple[Any, ...]) -> tuple[Any, ...]:
        """Return the state for one replicate: with copies of the arrays that `renew` and `after` change.

        Parameters
        ----------
        state : tuple
            What `prepare` returned.

        Returns
        -------
        tuple
            Arrays that nothing changes are shared.

        Examples
        --------
        Differences change with every placement, tables never do:

        >>> import numpy as np
        >>> import labkit as lk
        >>> differences, tables = np.zeros(3), np.ones(3)
        >>> mine = lk.TreeFlow().own_state((differences, tables))
        >>> mine[0] is differences, mine[1] is tables
        (False, True)
        """
        return state

    def check(self, load: type) -> None:
        """Refuse a rule that cannot be compiled for loads of this type.

        Parameters
        ----------
        load : type
            Of one server's load: whole numbers, or floats where tasks have sizes.

        Raises
        ------
        InputError
            Only for rules made by `labkit.policy`; built-in rules suit both types.

        Examples
        --------
        >>> import labkit as lk
        >>> @lk.policy
        ... def by_name(options, loads, capacity, coin):
        ...     return "first"
        >>> by_name.check(int)  # doctest: +ELLIPSIS
        Traceback (most recent call last):
            ...
        labkit.errors.InputError: policy by-name returns a text; it must return a whole number ...
        """

    def explain(self, error: Exception) -> InputError | None:
        """Return the refusal for an error inside the rule, or None when it is not the rule's.

        Parameters
        ----------
        error : Exception
            What the compiled loop raised.

        Returns
        -------
        InputError or None

        Examples
        --------
        >>> import labkit as lk
        >>> @lk.policy
        ... def beyond(options, loads, capacity, coin):
        ...     return loads[len(loads)]
        >>> print(beyond.explain(IndexError("index is out of bounds")))
        policy beyond looked beyond the end of an array: index is out of bounds.
        >>> lk.LeastLoaded().explain(IndexError("index is out of bounds")) is None
        True
        """
        return None

    def __repr__(self) -> str:
        return f"<policy {self.name}>"

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Policy) and self.name == other.name

    def __hash__(self) -> int:
        return hash(self.name)
