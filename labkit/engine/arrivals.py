"""How arrivals are drawn: which choice the next task comes on, and the coin that belongs to it."""

from typing import NamedTuple

import numpy as np

from labkit.compiled import advance, compiled, inlined, kept, multiply_wide, prefetch
from labkit.fleet.model import ABSENT, Fleet

# Tasks drawn ahead of their placement when a fleet is larger than cache: enough to keep some dozens of memory
# reads in flight, few enough that the drawn options stay in the nearest cache.
AHEAD = 256


class Arrivals(NamedTuple):
    """The arrays that the compiled draws read."""

    options: np.ndarray  # uint32 (choices, options): the fleet's own table, not a copy
    threshold: np.ndarray | None  # uint32 (choices,): keep the choice when the coin's high half is below it
    alias: np.ndarray | None  # uint32 (choices,): else take this choice; both None when all demands are equal
    servers: np.uint64  # number of servers of a fleet without a table of choices, else 0
    distinct: np.bool_  # such a fleet: options of a task are distinct servers


def arrivals_of(fleet: Fleet) -> Arrivals:
    """Return the arrays of the fleet's arrival law."""
    if fleet.implicit is not None:
        law = fleet.implicit
        # Compiled loops tell read-only arrays from others by type: this one is read-only like a fleet's own.
        width = read_only(np.empty((0, law.options), np.uint32))
        return Arrivals(width, None, None, np.uint64(law.servers), np.bool_(law.distinct))
    threshold, alias = (None, None) if fleet.demand is None else _alias_table(fleet.demand)
    return Arrivals(fleet.options, threshold, alias, np.uint64(0), np.bool_(True))


def _alias_table(demand: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    threshold = np.empty(demand.size, np.uint32)
    alias = np.empty(demand.size, np.uint32)
    kept(fill_alias_table)(demand, float(np.sum(demand)), threshold, alias)
    return read_only(threshold), read_only(alias)


def read_only(array: np.ndarray) -> np.ndarray:
    """Return the same array, no longer writable."""
    array.setflags(write=False)
    return array


def fill_alias_table(demand, total, threshold, alias):
    """Fill an alias table (Walker 1977) in one sweep that needs no work space.

    The sweep of Hübschle-Schneider & Sanders (2022, "Parallel weighted random sampling"): one pointer walks
    the choices below the mean demand, one those above, and the excess of the current one above fills the
    walked ones up.
    """
    count = demand.size
    scale = count / total
    light = 0
    while light < count and demand[light] * scale > 1.0:
        light += 1
    heavy = 0
    while heavy < count and demand[heavy] * scale <= 1.0:
        heavy += 1
    left = demand[heavy] * scale if heavy < count else 0.0
    while heavy < count:
        if left > 1.0 and light < count:
            share = demand[light] * scale
            threshold[light] = np.uint32(min(share * 4294967296.0, 4294967295.0))
            alias[light] = heavy
            left -= 1.0 - share
            light += 1
            while light < count and demand[light] * scale > 1.0:
                light += 1
        else:
            following = heavy + 1
            while following < count and demand[following] * scale <= 1.0:
                following += 1
            threshold[heavy] = np.uint32(min(max(left, 0.0) * 4294967296.0, 4294967295.0))
            alias[heavy] = following if following < count else heavy
            if following < count:
                left += demand[following] * scale - 1.0
            heavy = following
    while light < count:
        threshold[light] = np.uint32(4294967295)
        alias[light] = light
        light += 1
        while light < count and demand[light] * scale > 1.0:
            light += 1


@inlined
def draw_row(word, choices, threshold, alias):
    """Turn one raw word into a choice and its coin."""
    row, coin = multiply_wide(word, choices)
    if threshold is None:
        return row, coin
    bound = np.uint64(threshold[row])
    other = np.uint64(alias[row])
    kept = (coin >> np.uint64(32)) < bound
    # Where the coin lies within its part of the interval is uniform again, to 32 bits.
    parts = bound if kept else np.uint64(4294967296) - bound
    inside = coin if kept else coin - (bound << np.uint64(32))
    return row if kept else other, (inside // parts) << np.uint64(32)


@inlined
def options_in(options, row):
    """Return how many options a row holds; absent ones come last."""
    count = options.shape[1]
    while count > 2 and options[row, np.uint64(count - 1)] == np.uint32(ABSENT):
        count -= 1
    return count


@compiled
def skip_taken(picked, row, position, rank):
    """Return the server with the given rank among those not yet picked in this row (few, so quadratic)."""
    floor = np.int64(-1)
    for _ in range(position):
        smallest = np.int64(9223372036854775807)
        for earlier in range(position):
            server = np.int64(picked[row, np.uint64(earlier)])
            if floor < server < smallest:
                smallest = server
        floor = smallest
        if np.int64(rank) >= smallest:
            rank += np.uint64(1)
    return rank


@kept
def draw_from_table(options, threshold, alias, state, loads, picked, coins, rows, count):
    """Draw `count` arrivals of a table of choices ahead, calling their memory into the caches.

    Parameters
    ----------
    options, threshold, alias : arrays
        As in `Arrivals`.
    state : uint64 array, shape (4,)
        The stream of arrivals, changed in place.
    loads : array, shape (servers,)
        The loads that the policy will look at.
    picked : uint32 array, shape (AHEAD, options), changed in place
    coins, rows : uint64 arrays, shape (AHEAD,), changed in place
    count : int
    """
    a, b, c, counter = state[0], state[1], state[2], state[3]
    choices = np.uint64(options.shape[0])
    for index in range(count):
        word, a, b, c, counter = advance(a, b, c, counter)
        row, coin = draw_row(word, choices, threshold, alias)
        coins[np.uint64(index)] = coin
        rows[np.uint64(index)] = row
        prefetch(options, row)
    state[0], state[1], state[2], state[3] = a, b, c, counter
    for index in range(count):
        row = rows[np.uint64(index)]
        for position in range(options.shape[1]):
            server = options[row, np.uint64(position)]
            picked[np.uint64(index), np.uint64(position)] = server
            # Fetching never faults, so an absent option needs no test.
            prefetch(loads, np.uint64(server))


@kept
def draw_from_all(servers, distinct, state, loads, picked, coins, count):
    """Draw `count` arrivals whose options are any servers, one raw word an option (see `draw_from_table`)."""
    a, b, c, counter = state[0], state[1], state[2], state[3]
    pairs = distinct and picked.shape[1] == 2
    for index in range(count if pairs else 0):
        here = np.uint64(index)
        word, a, b, c, counter = advance(a, b, c, counter)
        one = multiply_wide(word, servers)[0]
        word, a, b, c, counter = advance(a, b, c, counter)
        other, coin = multiply_wide(word, servers - np.uint64(1))
        other += np.uint64(other >= one)
        picked[here, np.uint64(0)] = np.uint32(one)
        picked[here, np.uint64(1)] = np.uint32(other)
        coins[here] = coin
        prefetch(loads, one)
        prefetch(loads, other)
    for index in range(0 if pairs else count):
        here = np.uint64(index)
        for position in range(picked.shape[1]):
            word, a, b, c, counter = advance(a, b, c, counter)
            if distinct:
                server, coin = multiply_wide(word, servers - np.uint64(position))
                server = skip_taken(picked, here, position, server)
            else:
                server, coin = multiply_wide(word, servers)
            coins[here] = coin
            picked[here, np.uint64(position)] = np.uint32(server)
            prefetch(loads, server)
    state[0], state[1], state[2], state[3] = a, b, c, counter
