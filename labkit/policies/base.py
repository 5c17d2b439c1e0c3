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
        """Return what the chooser needs to know about the fleet, a tuple of arrays and numbers."""
        return ()

    def renewal(self, fleet: Fleet) -> int:
        """Return how often, in tasks, `renew` is called, just before the task; 0 for never.

        `WITH_REPORTS` stands for before the first task and whenever loads are reported.
        """
        return 0

    def own_state(self, state: tuple[Any, ...]) -> tuple[Any, ...]:
        """Return the state for one replicate: with copies of the arrays that `renew` and `after` change."""
        return state

    def check(self, load: type) -> None:
        """Refuse a rule that cannot be compiled for loads of this type."""

    def explain(self, error: Exception) -> InputError | None:
        """Return the refusal for an error inside the rule, or None when it is not the rule's."""
        return None

    def __repr__(self) -> str:
        return f"<policy {self.name}>"

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Policy) and self.name == other.name

    def __hash__(self) -> int:
        return hash(self.name)
