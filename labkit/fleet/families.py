"""Fleets of known shape: unit servers named 0 .. n - 1, unit demands."""

from typing import Any

import numpy as np

from labkit.checks import check_whole
from labkit.errors import InputError
from labkit.fleet.model import CompleteLaw, Fleet
from labkit.fleet.names import MOST_SERVERS
from labkit.memory import check_memory
from labkit.randomness import generator, seed_sequence

_STREAM = 3  # apart from arrivals, coins and sizes: one seed may make a fleet and then place work on it
_ROUNDS = 50  # rounds without progress after which a random regular fleet starts again
_TRIES = 1_000
_SWITCHED = 5_000  # choices up to which a random regular fleet is mixed by switches


def ring(n: int) -> Fleet:
    """Return a ring: server i shares a choice with server i + 1, the last with the first.

    Parameters
    ----------
    n : int
        Servers, at least 3; there are as many choices.

    Returns
    -------
    Fleet
        Capacities and demands are 1.

    Raises
    ------
    InputError
        When `n` is no whole number of at least 3.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.ring(4).choices[["option_1", "option_2"]].values.tolist()
    [[0, 1], [1, 2], [2, 3], [3, 0]]
    """
    return torus(_servers("n", n, least=3))


def torus(*sides: int) -> Fleet:
    """Return a grid of any dimension, closed in every direction.

    Parameters
    ----------
    *sides : int
        Servers along each direction, at least 3 each. The server at (x, y, ...) has the name
        (x · sides[1] + y) · sides[2] + ...

    Returns
    -------
    Fleet
        prod(sides) servers and as many choices for every direction.

    Raises
    ------
    InputError
        When there is no side, or one is no whole number of at least 3.

    Examples
    --------
    The neighbours of server 0 on a grid of 3 by 4:

    >>> import labkit as lk
    >>> grid = lk.torus(3, 4)
    >>> grid
    Fleet(12 servers, 24 choices of 2 options, capacity 1 each, demand 1 each)
    >>> sorted(grid.to_networkx()[0])
    [1, 3, 4, 8]
    """
    if not sides:
        raise InputError("sides is empty; give at least one side, for example torus(16, 16).")
    sides = tuple(check_whole(f"side {place + 1}", side, least=3) for place, side in enumerate(sides))
    size = _total("sides", sides)
    _fits("sides", size, 16 * len(sides))
    options = np.empty((size, len(sides), 2), dtype=np.uint32)
    here = np.arange(size, dtype=np.uint32).reshape(sides)
    for axis in range(len(sides)):
        options[:, axis, 0] = here.reshape(-1)
        options[:, axis, 1] = np.roll(here, -1, axis=axis).reshape(-1)
    return Fleet._from_positions(size, options.reshape(-1, 2))


def hypercube(dimension: int) -> Fleet:
    """Return a hypercube: 2^dimension servers, a choice for every two whose names differ in one binary digit.

    Parameters
    ----------
    dimension : int
        From 1 to 31; there are dimension · 2^(dimension - 1) choices.

    Returns
    -------
    Fleet
        Choices by digit, the last digit first; capacities and demands are 1.

    Raises
    ------
    InputError
        When `dimension` is no whole number from 1 to 31.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.hypercube(2).choices[["option_1", "option_2"]].values.tolist()
    [[0, 1], [2, 3], [0, 2], [1, 3]]
    >>> lk.hypercube(10)
    Fleet(1024 servers, 5120 choices of 2 options, capacity 1 each, demand 1 each)
    """
    dimension = check_whole("dimension", dimension)
    if dimension > 31:
        raise InputError(f"dimension is {dimension}; give at most 31.")
    size = 1 << dimension
    _fits("dimension", size, 8 * dimension + 16)
    options = np.empty((dimension, size // 2, 2), dtype=np.uint32)
    here = np.arange(size, dtype=np.uint32)
    for digit in range(dimension):
        bit = np.uint32(1 << digit)
        low = here[(here & bit) == 0]
        options[digit, :, 0] = low
        options[digit, :, 1] = low | bit
    return Fleet._from_positions(size, options.reshape(-1, 2))


def ladder(n: int) -> Fleet:
    """Return a ladder: two paths of n servers (0 .. n - 1 and n .. 2n - 1) joined by n rungs.

    Parameters
    ----------
    n : int
        Rungs, at least 1; there are 2n servers and 3n - 2 choices.

    Returns
    -------
    Fleet
        The two paths first, then the rungs; capacities and demands are 1.

    Raises
    ------
    InputError
        When `n` is no whole number of at least 1.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.ladder(3).choices[["option_1", "option_2"]].values.tolist()
    [[0, 1], [1, 2], [3, 4], [4, 5], [0, 3], [1, 4], [2, 5]]
    """
    n = check_whole("n", n)
    _total("n", (2, n))
    _fits("n", 2 * n, 32)
    here = np.arange(2 * n, dtype=np.uint32)
    first = np.concatenate([here[: n - 1], here[n:-1], here[:n]])
    second = np.concatenate([here[1:n], here[n + 1 :], here[n:]])
    return Fleet._from_positions(2 * n, np.column_stack([first, second]))


def complete(n: int, options: int = 2, distinct: bool = True) -> Fleet:
    """Return a fleet in which a choice is any set of servers, all equally likely.

    No table of choices is built, so that n = 10^7 takes no memory.

    Parameters
    ----------
    n : int
        Servers, at least 2.
    options : int
        Servers in a choice, at least 1.
    distinct : bool
        Whether the options of a choice differ; if not, each is drawn from all servers on its own, and the
        same server may be drawn twice.

    Raises
    ------
    InputError
        When a number is out of range, or more distinct options are asked for than there are servers.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.complete(10_000_000)
    Fleet(10000000 servers, any 2 distinct options equally likely, capacity 1 each)
    """
    n = _servers("n", n, least=2)
    options = check_whole("options", options)
    if not isinstance(distinct, bool | np.bool_):
        raise InputError(f"distinct is {distinct!r}; give True or False.")
    if distinct and options > n:
        raise InputError(f"options is {options}; at most {n} of {n} servers are distinct.")
    return Fleet._from_law(CompleteLaw(n, options, bool(distinct)))


def ring_with_chords(n: int, chords: int, *, rng: Any) -> Fleet:
    """Return a ring with extra choices between pairs of servers that are no neighbours, drawn at random.

    Parameters
    ----------
    n : int
        Servers, at least 3.
    chords : int
        Extra choices, at most n(n - 3)/2; every set of so many different pairs is equally likely.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Source of randomness.

    Returns
    -------
    Fleet
        The n choices of the ring first, then the chords.

    Raises
    ------
    InputError
        When a number is out of range.

    Examples
    --------
    A ring of 4 has room for two chords:

    >>> import labkit as lk
    >>> lk.ring_with_chords(4, 2, rng=1).choices[["option_1", "option_2"]].values.tolist()
    [[0, 1], [1, 2], [2, 3], [3, 0], [0, 2], [1, 3]]
    """
    seed = seed_sequence(rng)
    n = _servers("n", n, least=3)
    chords = check_whole("chords", chords, least=0)
    most = n * (n - 3) // 2
    if chords > most:
        raise InputError(f"chords is {chords}; a ring of {n} servers has room for at most {most}.")
    _fits("n", n, 32)
    # To draw without repetition takes a table of all pairs, where they are not many more than the chords.
    _fits("chords", chords, 48 + 8 * min(50, most // max(1, chords)), "choices")
    # Pairs at distance 2, 3, ... along the ring, n starts each; opposite servers, met last, only n/2.
    pairs = generator(seed, 0, _STREAM).choice(most, size=chords, replace=False) if chords else np.arange(0)
    start = pairs % n
    ends = np.column_stack([start, (start + 2 + pairs // n) % n]).astype(np.uint32)
    return Fleet._from_positions(n, np.concatenate([ring(n).options, ends]))


def random_regular(n: int, degree: int, *, rng: Any) -> Fleet:
    """Return a random fleet in which every server is in `degree` choices, no two alike.

    Parameters
    ----------
    n : int
        Servers.
    degree : int
        Choices a server is in, from 1 to n - 1; n · degree must be even.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Source of randomness.

    Returns
    -------
    Fleet
        n · degree / 2 choices, ordered by their servers.

    Raises
    ------
    InputError
        When there is no such fleet.

    Notes
    -----
    Each server has `degree` open ends; ends are paired at random, pairs that would be a loop or repeat a
    choice are opened again, and the whole starts over when no open ends can be paired (in the manner of
    A. Steger and N. C. Wormald, "Generating random regular graphs quickly", Combin. Probab. Comput. 8,
    1999). About (degree² - 1)/4 pairs are opened again, whatever n, which large fleets do not feel. Fleets of
    up to 5,000 choices are then mixed by random switches of two choices, a chain whose limit law is uniform
    (C. Cooper, M. Dyer and C. Greenhill, "Sampling regular graphs and a peer-to-peer network", Combin.
    Probab. Comput. 16, 2007). Above half of n - 1, the missing choices are drawn instead.

    Examples
    --------
    >>> import labkit as lk
    >>> fleet = lk.random_regular(8, 3, rng=1)
    >>> fleet
    Fleet(8 servers, 12 choices of 2 options, capacity 1 each, demand 1 each)
    >>> [choices for _, choices in fleet.to_networkx().degree]
    [3, 3, 3, 3, 3, 3, 3, 3]
    """
    seed = seed_sequence(rng)
    n = _servers("n", n, least=2)
    degree = check_whole("degree", degree)
    if degree >= n:
        raise InputError(f"degree is {degree}; with {n} servers give at most {n - 1}.")
    if n * degree % 2:
        raise InputError(f"n × degree is {n} × {degree}, an odd number; make one of them even.")
    # Above half, all pairs of servers are listed; else some copies of the open ends.
    _fits("degree", n, 24 * n if 2 * degree > n - 1 else 40 * degree)
    generated = generator(seed, 0, _STREAM)
    if 2 * degree > n - 1:
        first, second = np.triu_indices(n, 1)
        missing = _regular_keys(n, n - 1 - degree, generated)
        keys = np.setdiff1d(first * n + second, missing, assume_unique=True)
    else:
        keys = _regular_keys(n, degree, generated)
    return Fleet._from_positions(n, np.column_stack([keys // n, keys % n]).astype(np.uint32))


def _regular_keys(n: int, degree: int, generated: np.random.Generator) -> np.ndarray:
    """Return the sorted keys low · n + high of a random regular graph's edges."""
    for _ in range(_TRIES):
        keys = np.empty(0, dtype=np.int64)
        ends = np.repeat(np.arange(n, dtype=np.int64), degree)
        idle = 0
        while len(ends) and idle < _ROUNDS:
            pairs = generated.permutation(ends).reshape(-1, 2)
            pairs.sort(axis=1)
            drawn = pairs[:, 0] * n + pairs[:, 1]
            fresh = np.zeros(len(drawn), dtype=bool)
            fresh[np.unique(drawn, return_index=True)[1]] = True
            fresh &= (pairs[:, 0] != pairs[:, 1]) & ~_among(drawn, keys)
            idle = 0 if fresh.any() else idle + 1
            if fresh.any():
                keys = np.sort(np.concatenate([keys, drawn[fresh]]))
            ends = pairs[~fresh].reshape(-1)
        if not len(ends):
            return _switched(n, keys, generated) if len(keys) <= _SWITCHED else keys
    raise InputError(
        f"no fleet with n = {n}, degree = {degree} was found in {_TRIES} tries; use another rng."
    )


def _switched(n: int, keys: np.ndarray, generated: np.random.Generator) -> np.ndarray:
    """Exchange ends between two edges at a time, wherever the graph stays simple."""
    edges = [divmod(key, n) for key in keys.tolist()]
    present = set(keys.tolist())
    steps = 20 * len(edges) + 100 if len(edges) > 1 else 0
    draws = generated.integers(max(1, len(edges)), size=(steps, 2)).tolist()
    turns = generated.integers(2, size=steps).tolist()
    for (one, other), turn in zip(draws, turns, strict=True):
        (a, b), (c, d) = edges[one], edges[other][:: 1 - 2 * turn]
        first, second = (min(a, d), max(a, d)), (min(c, b), max(c, b))
        new = {first[0] * n + first[1], second[0] * n + second[1]}
        if first[0] == first[1] or second[0] == second[1] or len(new) < 2 or new & present:
            continue
        present -= {min(a, b) * n + max(a, b), min(c, d) * n + max(c, d)}
        present |= new
        edges[one], edges[other] = first, second
    return np.array(sorted(present), dtype=np.int64)


def _among(drawn: np.ndarray, keys: np.ndarray) -> np.ndarray:
    place = np.searchsorted(keys, drawn)
    found = place < len(keys)
    found[found] = keys[place[found]] == drawn[found]
    return found


def _fits(name: str, count: int, bytes_each: int, what: str = "servers") -> None:
    check_memory(f"{name} asks for {count:,} {what}, which", count * bytes_each, "give fewer")


def _servers(name: str, value: Any, *, least: int) -> int:
    whole = check_whole(name, value, least=least)
    _total(name, (whole,))
    return whole


def _total(name: str, factors: tuple[int, ...]) -> int:
    total = 1
    for factor in factors:
        total *= factor
    if total > MOST_SERVERS:
        raise InputError(f"{name} asks for {total} servers; a fleet holds at most {MOST_SERVERS}.")
    return total
