"""A user's own rule, written in a notebook cell, at compiled speed."""

import hashlib
import inspect
import textwrap
from collections.abc import Callable
from typing import Any

import numpy as np

from labkit.compiled import bind, compiled, unit_interval
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.policies.base import Policy

ARGUMENTS = ("options", "loads", "capacity", "coin")
_SOURCES: dict[str, str] = {}


@compiled
def rule(options, loads, capacity, coin):
    """Stand for the user's function until `bind` puts it in place."""
    return 0


def choose(state, seen, capacity, options, row, count, coin, own):  # noqa: D103
    return np.uint64(rule(options[row, :count], seen, state[0], unit_interval(coin)))


class OwnRule(Policy):
    """A policy made by `lk.policy` from a user's function."""

    cached = False

    def __init__(self, function: Callable) -> None:
        self.function = function
        self.source = source_of(function)
        self.digest = hashlib.sha256(self.source.encode()).hexdigest()[:8]
        self.__doc__ = function.__doc__
        self.choose = bind(choose, self.kernel_name, rule=compiled(function))
        _SOURCES[self.name] = self.source

    @property
    def name(self) -> str:
        """The function's name with hyphens."""
        return self.function.__name__.replace("_", "-")

    @property
    def kernel_name(self) -> str:
        """The word that keys compiled code."""
        return f"OwnRule_{self.function.__name__}_{id(self.function):x}"

    def prepare(self, fleet: Fleet) -> tuple[Any, ...]:
        """Return the capacities, always as an array."""
        return (np.ones(fleet.size) if fleet.capacity is None else fleet.capacity,)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, OwnRule) and self.function is other.function

    def __hash__(self) -> int:
        return hash(self.function)


def policy(function: Callable) -> OwnRule:
    """Turn a function into a policy that runs at compiled speed.

    Parameters
    ----------
    function : callable
        ``function(options, loads, capacity, coin)`` returns the position of the picked server *within*
        `options`, from 0. `options` (uint32 array) holds the server positions of the task's choice, `loads`
        the loads as the policy may see them, `capacity` the capacities, `coin` a uniform float in [0, 1) that
        belongs to the arrival. It must be plain enough for numba: numbers, arrays, loops, tests.

    Returns
    -------
    OwnRule
        To be given to `labkit.place` in place of a policy's name; it is recorded under the function's name,
        with its source.

    Raises
    ------
    InputError
        When the function takes other arguments, has the name of a built-in policy, or has no readable source.

    Examples
    --------
    >>> import labkit as lk
    >>> @lk.policy
    ... def stay_first(options, loads, capacity, coin):
    ...     return 1 if loads[options[1]] + 2 <= loads[options[0]] else 0
    >>> lk.place(lk.ring(8), stay_first, tasks=100, rng=1).measures["policy"][0]
    'stay-first'
    """
    if not inspect.isfunction(function):
        raise InputError(f"policy got {function!r}; decorate a plain function of {', '.join(ARGUMENTS)}.")
    arguments = tuple(inspect.signature(function).parameters)
    if arguments != ARGUMENTS:
        raise InputError(
            f"policy {function.__name__} takes ({', '.join(arguments)}); "
            f"it must take ({', '.join(ARGUMENTS)})."
        )
    from labkit.policies.naming import BUILT_IN

    if function.__name__.replace("_", "-") in BUILT_IN:
        raise InputError(
            f"policy {function.__name__} has the name of a built-in policy; give it another name."
        )
    return OwnRule(function)


def source_of(function: Callable) -> str:
    """Return the source text of a rule, as it is recorded."""
    try:
        return textwrap.dedent(inspect.getsource(function))
    except (OSError, TypeError) as reason:
        raise InputError(
            f"policy {function.__name__} has no source text to record; define it in a file or a cell."
        ) from reason


def recorded_source(name: str) -> str | None:
    """Return the source of the user's rule last defined under this policy name, or None."""
    return _SOURCES.get(name)
