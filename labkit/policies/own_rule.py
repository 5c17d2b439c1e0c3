"""A user's own rule, written in a notebook cell, at compiled speed."""

import hashlib
import inspect
import re
from collections.abc import Callable, Iterable, Mapping
from functools import lru_cache
from typing import Any

import numba
import numpy as np

from labkit.checks import nearest
from labkit.compiled import CONFIG, OPTIONS, bind, borrowed, compiled, unit_interval
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.policies.base import Policy
from labkit.policies.compile_errors import kind_in_words, reason
from labkit.policies.outside import fingerprints, source_of

ARGUMENTS = ("options", "loads", "capacity", "coin")
_SOURCES: dict[str, str] = {}


@compiled
def rule(options, loads, capacity, coin):
    """Stand for the user's function until `bind` puts it in place."""
    return 0


def choose(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    among = borrowed(options)[row, :count]
    return np.uint64(rule(among, borrowed(seen), borrowed(state[0]), unit_interval(coin)))


class OwnRule(Policy):
    """A policy made by `lk.policy` from a user's function; call it to try the function itself."""

    cached = False
    looks_far = True

    def __init__(self, function: Callable, source: str | None = None) -> None:
        self.function = function
        self.source = source_of(function) if source is None else source
        self._kept: bytes | None = None
        self._keeping = False
        self._outside: dict[str, str] = {}
        self.__doc__ = function.__doc__
        # A user's index is checked: a wrong one must not read somebody else's memory.
        self._compiled = numba.njit(boundscheck=True, **OPTIONS)(function)
        self.choose = bind(choose, self.kernel_name, rule=self._compiled)
        _SOURCES[self.name] = self.source

    @property
    def digest(self) -> str:
        """Eight digits for the source."""
        return hashlib.sha256(self.source.encode()).hexdigest()[:8]

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
        capacity = np.ones(fleet.size) if fleet.capacity is None else fleet.capacity
        capacity.setflags(write=False)
        return (capacity,)

    def check(self, load: type) -> None:
        """Compile the rule alone, so that what is wrong with it can be told in one sentence."""
        if CONFIG.DISABLE_JIT:
            self._keep()
            return

        signature = self._signature(load)
        try:
            self._compiled.compile(signature)
        except Exception as error:  # numba lets AttributeError, ValueError and others of its own out, too
            raise InputError(
                f"policy {self.name} cannot be compiled: {reason(self.function, error, ARGUMENTS)}."
            ) from error
        self._keep()
        returned = self._compiled.overloads[signature].signature.return_type
        if not isinstance(returned, numba.types.Integer | numba.types.Boolean):
            raise InputError(
                f"policy {self.name} returns {_return_words(returned)}; it must return a whole number on "
                "every path, the position of the picked server within options."
            )

    @staticmethod
    def _signature(load: type) -> tuple:
        array: Any = numba.types.Array
        kinds = (np.uint32, load, np.float64)
        arrays = [array(numba.from_dtype(np.dtype(kind)), 1, "C", readonly=True) for kind in kinds]
        return (*arrays, numba.float64)

    def pick(self, options: np.ndarray, loads: np.ndarray, capacity: np.ndarray, coin: float) -> int:
        """Return what the compiled rule picks, whatever it is; arrays are C-contiguous and read-only."""
        return int(self._compiled(options, loads, capacity, coin))

    def anew(self) -> "OwnRule":
        """Return the same rule, to be compiled once more."""
        return OwnRule(self.function, self.source)

    def changed_outside(self) -> list[str]:
        """Return the names from outside whose values are no longer those that the rule was compiled with."""
        if self._kept is None:
            return []
        now = fingerprints(self.function)
        return sorted(name for name in self._outside.keys() | now if self._outside.get(name) != now.get(name))

    def explain(self, error: Exception) -> InputError | None:
        """Return the refusal for an error inside the rule."""
        if isinstance(error, IndexError):
            return InputError(f"policy {self.name} looked beyond the end of an array: {error}.")
        return InputError(f"policy {self.name} failed with {type(error).__name__}: {error}.")

    def __call__(self, options: Any, loads: Any, capacity: Any, coin: float) -> Any:
        """Call the user's function itself, not compiled."""
        return self.function(options, loads, capacity, coin)

    def __reduce__(self) -> tuple:
        """Send the function itself, since another process does not have the notebook, and its source."""
        self._keep()
        return _again, (self._kept, self.source)

    def _keep(self) -> None:
        """Take the rule as it is at its first use: what is recorded and what is sent is what was compiled."""
        from labkit.sharing.work import packed

        if self._keeping:  # its function holds the rule, so that packing the one asks for the other
            raise InputError(f"policy {self.name} cannot be compiled: it calls itself; write a loop instead.")
        if self._kept is None:
            if _SOURCES.get(self.name) == self.source:
                self.source = _SOURCES[self.name] = source_of(self.function)
            self._outside = fingerprints(self.function)
            self._keeping = True
            try:
                self._kept = packed(self.function)
            finally:
                self._keeping = False

    def __eq__(self, other: object) -> bool:
        return isinstance(other, OwnRule) and self.function is other.function

    def __hash__(self) -> int:
        return hash(self.function)


@lru_cache(maxsize=64)
def _again(function: bytes, source: str) -> OwnRule:
    """Return a rule that came from another process, the same one each time, so that it is compiled once."""
    from labkit.sharing.work import unpacked

    return OwnRule(unpacked(function), source)


def policy(function: Callable) -> OwnRule:
    """Turn a function into a policy that runs at compiled speed.

    Parameters
    ----------
    function : callable
        ``function(options, loads, capacity, coin)`` returns the position of the picked server *within*
        `options`, from 0. `options` (uint32 array) holds the server positions of the task's choice, `loads`
        the loads as the policy may see them, `capacity` the capacities, `coin` a uniform float in [0, 1) that
        belongs to the arrival. The arrays cannot be changed. It must be plain enough for numba: numbers,
        arrays, loops, tests; constants that it uses from outside are taken as they are at its first use.

    Returns
    -------
    OwnRule
        To be given to `labkit.place` in place of a policy's name; it is recorded under the function's name,
        with its source.

    Raises
    ------
    InputError
        When the function takes other arguments, has no name or that of a built-in policy, or draws random
        numbers of its own (they could not be repeated). `labkit.place` refuses a rule that cannot be
        compiled, returns no position, or looks beyond the end of an array.

    Examples
    --------
    >>> import labkit as lk
    >>> @lk.policy
    ... def stay_first(options, loads, capacity, coin):
    ...     return 1 if loads[options[1]] + 2 <= loads[options[0]] else 0
    >>> lk.place(lk.ring(8), stay_first, tasks=100, rng=1).measures["policy"][0]
    'stay-first'
    """
    from labkit.policies.naming import BUILT_IN

    if not inspect.isfunction(function):
        raise InputError(f"policy got {function!r}; decorate a plain function of {', '.join(ARGUMENTS)}.")
    name = function.__name__
    if not re.fullmatch(r"[A-Za-z]\w*", name):
        raise InputError(f"policy got a function called {name!r}; give it a name that begins with a letter.")
    signature = inspect.signature(function)
    plain = all(each.kind == each.POSITIONAL_OR_KEYWORD for each in signature.parameters.values())
    if tuple(signature.parameters) != ARGUMENTS or not plain:
        raise InputError(f"policy {name} takes {signature}; it must take ({', '.join(ARGUMENTS)}).")
    if function.__code__.co_flags & (
        inspect.CO_GENERATOR | inspect.CO_COROUTINE | inspect.CO_ASYNC_GENERATOR
    ):
        raise InputError(
            f"policy {name} is a generator or a coroutine; use return instead of yield or async."
        )
    if name.replace("_", "-") in BUILT_IN:
        raise InputError(f"policy {name} has the name of a built-in policy; give it another name.")
    if "random" in function.__code__.co_names:
        raise InputError(f"policy {name} draws random numbers of its own; use its argument coin instead.")
    return OwnRule(function)


def _return_words(kind: Any) -> str:
    words = kind_in_words(str(kind))
    return f"{words} ({kind})" if words.startswith("a number") else words


def own_rules(namespace: Mapping[str, Any]) -> list[OwnRule]:
    """Return the rules that a notebook's cells defined so far, in the order of their first definition.

    Parameters
    ----------
    namespace : mapping
        ``globals()`` of the notebook.

    Returns
    -------
    list of OwnRule
        Each rule once. A name that IPython keeps for itself (``_``, ``_12``) does not count.

    Raises
    ------
    InputError
        When two different rules have one name, under which records could not tell them apart.

    Examples
    --------
    >>> import labkit as lk
    >>> @lk.policy
    ... def always_first(options, loads, capacity, coin):
    ...     return 0
    >>> own_rules({"always_first": always_first, "loads": 3})
    [<policy always-first>]
    """
    found: dict[str, OwnRule] = {}
    for name, value in namespace.items():
        if not isinstance(value, OwnRule) or name.startswith("_"):
            continue
        if found.setdefault(value.name, value) != value:
            raise InputError(f"policy {value.name} is defined twice; give one of the two another name.")
    return list(found.values())


def rules_named(policies: Iterable[str], namespace: Mapping[str, Any]) -> list[Policy]:
    """Return the rules that a list names: a notebook's own by their names, others as `labkit.place` does.

    Parameters
    ----------
    policies : iterable of str
        Such as ``["my-rule", "least-loaded"]``; a rule ``my_rule`` is called my-rule.
    namespace : mapping
        ``globals()`` of the notebook.

    Raises
    ------
    InputError
        For a name that is neither.
    """
    from labkit.policies.naming import BUILT_IN, parse_policy
    from labkit.text import name_part

    own = {rule.name: rule for rule in own_rules(namespace)}
    rules = []
    for policy in policies:
        if policy not in own and own and isinstance(policy, str) and name_part(policy) not in BUILT_IN:
            raise InputError(f"policy is {policy!r}; {nearest(policy, [*own, *BUILT_IN])}.")
        rules.append(own[policy] if policy in own else parse_policy(policy))
    return rules


def recorded_source(name: str) -> str | None:
    """Return the source of the user's rule last defined under this policy name, or None."""
    return _SOURCES.get(name)
