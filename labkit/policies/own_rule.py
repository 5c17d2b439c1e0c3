"""A user's own rule, written in a notebook cell, at compiled speed."""

import hashlib
import inspect
import re
import textwrap
from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numba
import numpy as np
from numba.core.errors import NumbaError

from labkit.compiled import CONFIG, OPTIONS, bind, borrowed, compiled, unit_interval
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.policies.base import Policy

ARGUMENTS = ("options", "loads", "capacity", "coin")
_PLAIN = "use numbers, comparisons, loops and the given arrays only"
_SOURCES: dict[str, str] = {}

# The line of numba's report that says what is wrong; its other lines say how it got there.
_TELLING = re.compile(
    r"(name '\w+' is not defined|Untyped global name '\w+'|Unknown attribute '\w+'|Can't unify return type"
    r"[^\n]*|No implementation of function [^\n]*|Use of unsupported[^\n]*)"
)


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
        self._keep()
        if CONFIG.DISABLE_JIT:
            return

        array: Any = numba.types.Array
        kinds = (np.uint32, load, np.float64)
        arrays = [array(numba.from_dtype(np.dtype(kind)), 1, "C", readonly=True) for kind in kinds]
        signature = (*arrays, numba.float64)
        try:
            self._compiled.compile(signature)
        except NumbaError as error:
            refusal = self.explain(error)
            assert refusal is not None
            raise refusal from error
        returned = self._compiled.overloads[signature].signature.return_type
        if not isinstance(returned, numba.types.Integer | numba.types.Boolean):
            raise InputError(
                f"policy {self.name} returns {returned}; it must return a whole number on every path, the "
                "position of the picked server within options."
            )

    def explain(self, error: Exception) -> InputError | None:
        """Return the refusal for an error inside the rule."""
        if isinstance(error, NumbaError):
            told = _TELLING.search(str(error))
            reason = told.group(0) if told else str(error).strip().splitlines()[-1]
            if "setitem" in reason:
                reason = "it changes one of its arguments"
            return InputError(f"policy {self.name} cannot be compiled: {reason.strip(' .')}; {_PLAIN}.")
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

        if self._kept is None:
            if _SOURCES.get(self.name) == self.source:
                self.source = _SOURCES[self.name] = source_of(self.function)
            self._kept = packed(self.function)

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
    arguments = tuple(inspect.signature(function).parameters)
    if arguments != ARGUMENTS:
        raise InputError(
            f"policy {name} takes ({', '.join(arguments)}); it must take ({', '.join(ARGUMENTS)})."
        )
    if name.replace("_", "-") in BUILT_IN:
        raise InputError(f"policy {name} has the name of a built-in policy; give it another name.")
    if "random" in function.__code__.co_names:
        raise InputError(f"policy {name} draws random numbers of its own; use its argument coin instead.")
    return OwnRule(function)


def source_of(function: Callable) -> str:
    """Return the text of a rule as it is recorded: its source, and the values it takes from outside."""
    code = function.__code__
    try:
        text = textwrap.dedent(inspect.getsource(function))
    except (OSError, TypeError):
        text = ""
    # For code made from a string some Python versions return the lines of another file.
    if f"def {code.co_name}(" not in text:
        constants = [value for value in code.co_consts if not inspect.iscode(value)]
        digest = hashlib.sha256(code.co_code + repr(constants).encode()).hexdigest()
        text = f"# no source text; digest of the compiled function: {digest}\n"
    outside = inspect.getclosurevars(function)
    for name, value in sorted({**outside.globals, **outside.nonlocals}.items()):
        if isinstance(value, bool | int | float | str | tuple):
            text += f"# {name} = {value!r}\n"
    return text


def recorded_source(name: str) -> str | None:
    """Return the source of the user's rule last defined under this policy name, or None."""
    return _SOURCES.get(name)
