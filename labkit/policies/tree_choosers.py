"""How tree flow picks a server: eight choosers, and what keeps the differences up to date."""

import numpy as np

from labkit.compiled import borrowed, compiled, inlined, next_raw
from labkit.policies.least_loaded import least_fair

LOW = np.uint64(2**32 - 1)


@inlined
def drawn(head, entries, choice, word):
    """Return whether a raw word draws a set, the number of the set, and the way, two positions in one word.

    The high half of the word tells whether, the low half which column of the choice's alias table (Walker
    1977) and which part of it. There is no branch here nor below: each would have references counted.
    """
    product = (word & LOW) * head[choice, np.uint64(1)]
    entry = head[choice, np.uint64(0)] + (product >> np.uint64(32))
    part = np.uint64((product & LOW) >= np.uint64(entries[entry, np.uint64(0)])) << np.uint64(1)
    some = np.uint64((word >> np.uint64(32)) < head[choice, np.uint64(2)])
    return (
        some,
        np.uint64(entries[entry, np.uint64(1) + part]),
        np.uint64(entries[entry, np.uint64(2) + part]),
    )


@inlined
def follow(steered, apart, way, other):
    """Return the position that lowers a difference when the task is steered, else the other position."""
    position = (way >> (np.uint64(apart <= 0.0) << np.uint64(4))) & np.uint64(0xFFFF)
    return other ^ ((other ^ position) & (np.uint64(0) - steered))


@inlined
def by_sign(difference, head, entries, choice, own, other):
    """Return the position that the sign of the drawn set's difference picks, or the other one."""
    some, number, way = drawn(head, entries, choice, next_raw(own))
    apart = difference[number]
    return follow(some & np.uint64(apart != 0.0), apart, way, other)


@inlined
def by_size(difference, head, entries, slope, choice, own, other):
    """As `by_sign`, but a small difference often picks none: a second word is held against |difference|."""
    some, number, way = drawn(head, entries, choice, next_raw(own))
    apart = difference[number]
    # A whole number below 2³² is exact as a float.
    enough = np.float64(next_raw(own) >> np.uint64(32)) < abs(apart) * slope[number]
    return follow(some & np.uint64(enough), apart, way, other)


@inlined
def push_by_sign(difference, head, entries, value, slot):
    """Return what all sets together push along a pair: above 0 towards its second option, in 2⁻³²."""
    push = np.int64(0)
    for index in range(head[slot], head[slot + np.uint64(1)]):
        apart = difference[np.uint64(entries[np.uint64(index)])]
        push += value[np.uint64(index)] * (np.int64(apart > 0.0) - np.int64(apart < 0.0))
    return push


@inlined
def push_by_size(difference, head, entries, value, slope, slot):
    """As `push_by_sign`, each set in proportion to its difference, up to its strength."""
    push = np.int64(0)
    for index in range(head[slot], head[slot + np.uint64(1)]):
        number = np.uint64(entries[np.uint64(index)])
        push += np.int64(value[np.uint64(index)] * max(-1.0, min(1.0, difference[number] * slope[number])))
    return push


@inlined
def by_coin(bounds, choice, count, coin):
    """Return the position that the arrival's coin picks with the choice's fixed probabilities."""
    picked = np.uint64((coin >> np.uint64(32)) >= bounds[choice, np.uint64(0)])
    for position in range(1, count - 1):
        picked += np.uint64((coin >> np.uint64(32)) >= bounds[choice, np.uint64(position)])
    return picked


@compiled
def climb(difference, start, sets, step, server, amount, keeps):
    """Change the differences of all sets around a server."""
    first = start[server]
    last = start[server + np.uint64(1)] if keeps else first
    for index in range(first, last):
        difference[np.uint64(sets[np.uint64(index)])] += step[np.uint64(index)] * amount


def choose_net_sign_local(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    other = least_fair(seen, weights, options, row, count, coin)
    word = np.int64(next_raw(own) >> np.uint64(32))
    difference, head, entries = borrowed(state[0]), borrowed(state[1]), borrowed(state[2])
    value = borrowed(state[9])
    width = state[10]
    slot = choice * np.uint64(width * (width - 1) // 2)
    if count == 2:
        push = push_by_sign(difference, head, entries, value, slot)
        return follow(np.uint64(word < abs(push)), push, np.uint64(1), other)
    for first in range(width):
        for second in range(first + 1, width):
            push = push_by_sign(difference, head, entries, value, slot)
            way = np.uint64(second | first << 16)
            other = follow(np.uint64(0 <= word < abs(push)), push, way, other)
            # Below 0 once a pair has it.
            word -= abs(push)
            slot += np.uint64(1)
    return other


def choose_net_sign_coin(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    difference, head, entries = borrowed(state[0]), borrowed(state[1]), borrowed(state[2])
    value, bounds = borrowed(state[9]), borrowed(state[7])
    width = state[10]
    slot = choice * np.uint64(width * (width - 1) // 2)
    draw = np.int64(coin >> np.uint64(32))
    # Half of a push moves the bound: the fixed probabilities are those without any.
    if count == 2:
        push = push_by_sign(difference, head, entries, value, slot)
        return np.uint64(draw >= np.int64(bounds[choice, np.uint64(0)]) - (push >> 1))
    picked = np.uint64(0)
    for position in range(count - 1):
        bound = np.int64(bounds[choice, np.uint64(position)])
        place = slot
        for first in range(width):
            for second in range(first + 1, width):
                push = push_by_sign(difference, head, entries, value, place)
                bound -= (push >> 1) * np.int64((first <= position) & (position < second))
                place += np.uint64(1)
        picked += np.uint64(draw >= bound)
    return picked


def choose_net_linear_local(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    other = least_fair(seen, weights, options, row, count, coin)
    word = np.int64(next_raw(own) >> np.uint64(32))
    difference, head, entries = borrowed(state[0]), borrowed(state[1]), borrowed(state[2])
    value, slope = borrowed(state[9]), borrowed(state[6])
    width = state[10]
    slot = choice * np.uint64(width * (width - 1) // 2)
    if count == 2:
        push = push_by_size(difference, head, entries, value, slope, slot)
        return follow(np.uint64(word < abs(push)), push, np.uint64(1), other)
    for first in range(width):
        for second in range(first + 1, width):
            push = push_by_size(difference, head, entries, value, slope, slot)
            way = np.uint64(second | first << 16)
            other = follow(np.uint64(0 <= word < abs(push)), push, way, other)
            # Below 0 once a pair has it.
            word -= abs(push)
            slot += np.uint64(1)
    return other


def choose_net_linear_coin(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    difference, head, entries = borrowed(state[0]), borrowed(state[1]), borrowed(state[2])
    value, bounds = borrowed(state[9]), borrowed(state[7])
    slope = borrowed(state[6])
    width = state[10]
    slot = choice * np.uint64(width * (width - 1) // 2)
    draw = np.int64(coin >> np.uint64(32))
    # Half of a push moves the bound: the fixed probabilities are those without any.
    if count == 2:
        push = push_by_size(difference, head, entries, value, slope, slot)
        return np.uint64(draw >= np.int64(bounds[choice, np.uint64(0)]) - (push >> 1))
    picked = np.uint64(0)
    for position in range(count - 1):
        bound = np.int64(bounds[choice, np.uint64(position)])
        place = slot
        for first in range(width):
            for second in range(first + 1, width):
                push = push_by_size(difference, head, entries, value, slope, place)
                bound -= (push >> 1) * np.int64((first <= position) & (position < second))
                place += np.uint64(1)
        picked += np.uint64(draw >= bound)
    return picked


def choose_drawn_sign_local(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    other = least_fair(seen, weights, options, row, count, coin)
    difference, head, entries = borrowed(state[0]), borrowed(state[1]), borrowed(state[2])
    return by_sign(difference, head, entries, choice, own, other)


def choose_drawn_sign_coin(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    other = by_coin(borrowed(state[7]), choice, count, coin)
    difference, head, entries = borrowed(state[0]), borrowed(state[1]), borrowed(state[2])
    return by_sign(difference, head, entries, choice, own, other)


def choose_drawn_linear_local(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    other = least_fair(seen, weights, options, row, count, coin)
    difference, head, entries = borrowed(state[0]), borrowed(state[1]), borrowed(state[2])
    return by_size(difference, head, entries, borrowed(state[6]), choice, own, other)


def choose_drawn_linear_coin(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    other = by_coin(borrowed(state[7]), choice, count, coin)
    difference, head, entries = borrowed(state[0]), borrowed(state[1]), borrowed(state[2])
    return by_size(difference, head, entries, borrowed(state[6]), choice, own, other)


CHOOSERS = {
    ("net", "sign", "least-loaded"): choose_net_sign_local,
    ("net", "sign", "coin"): choose_net_sign_coin,
    ("net", "linear", "least-loaded"): choose_net_linear_local,
    ("net", "linear", "coin"): choose_net_linear_coin,
    ("drawn", "sign", "least-loaded"): choose_drawn_sign_local,
    ("drawn", "sign", "coin"): choose_drawn_sign_coin,
    ("drawn", "linear", "least-loaded"): choose_drawn_linear_local,
    ("drawn", "linear", "coin"): choose_drawn_linear_coin,
}


def renew(state, seen):
    """Work out all differences from the loads seen."""
    difference, start, sets, step = state[0], state[3], state[4], state[5]
    difference[:] = 0.0
    for server in range(seen.size):
        for index in range(start[server], start[server + 1]):
            difference[sets[index]] += step[index] * seen[server]


def after(state, loads, weights, options, row, count, server, amount, fresh):
    """Keep the differences fresh: a task changes those of the sets around its server."""
    climb(
        borrowed(state[0]), borrowed(state[3]), borrowed(state[4]), borrowed(state[5]), server, amount,
        fresh & (state[8] > 0),
    )  # fmt: skip
