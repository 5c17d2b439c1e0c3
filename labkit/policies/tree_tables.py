"""The tables that tree flow's choosers read: one part a choice, one a server."""

import numpy as np

from labkit.compiled import inlined, kept

WHOLE = 2**32


# Rows are filled up to one length where that makes the table at most so much longer: a processor foresees the
# end of a loop that is always as long.
MOST_FILLED = 1.6


def choice_tables(fleet, steering, frame, strength, number):
    """Return the heads and entries of the choices' tables, and what steered tasks take of each option."""
    idle = number.max(initial=-1) + 1
    pairs, flows = frame.pairs, frame.flows
    choices, width = fleet.options.shape
    demand = pairs.carried.sum(axis=1)
    choice = pairs.choice[flows.edge]
    draw = strength[flows.owner] * np.abs(flows.amount)
    count = np.rint(draw / demand[choice] * WHOLE).astype(np.int64)
    there = np.flatnonzero(count > 0)
    there = there[np.lexsort((flows.owner[there], flows.edge[there]))]
    edge, choice, count, draw = flows.edge[there], choice[there], count[there], draw[there]
    # The position when the first half is fuller is in the low 16 bits.
    onward = flows.amount[there] > 0
    plus = np.where(onward, pairs.other_place[edge], pairs.one_place[edge])
    minus = np.where(onward, pairs.one_place[edge], pairs.other_place[edge])
    way = (plus | (minus << 16)).astype(np.uint32)
    taken = np.zeros((choices, width))
    np.add.at(taken, (choice, plus), draw / 2.0)
    np.add.at(taken, (choice, minus), draw / 2.0)
    number = number[flows.owner[there]]
    if steering == "net":
        slot = choice * (width * (width - 1) // 2) + _slot(
            pairs.one_place[edge], pairs.other_place[edge], width
        )
        head = np.searchsorted(slot, np.arange(choices * (width * (width - 1) // 2) + 1)).astype(np.int64)
        head, number, value = level_lengths(head, number, np.where(onward, count, -count), idle)
        return head, np.append(number, 0).astype(np.uint32), np.append(value, 0), taken
    head = np.zeros((choices, 3), np.uint64)
    entries = np.zeros((there.size + 1, 5), np.uint32)
    start = np.searchsorted(choice, np.arange(choices + 1)).astype(np.int64)
    kept(fill_tables)(start, count, number, way, head, entries)
    return head, entries, np.zeros(0, np.int64), taken


def level_lengths(head, number, value, idle):
    """Fill the rows of a table up to one length with entries of value 0 for the set `idle`, where it pays."""
    length = np.diff(head)
    rows, most = length.size, length.max(initial=0)
    if not 0 < rows * most <= MOST_FILLED * number.size:
        return head, number, value
    wide_number, wide_value = np.full(rows * most, idle), np.zeros(rows * most, value.dtype)
    place = np.repeat(np.arange(rows) * most - head[:-1], length) + np.arange(number.size)
    wide_number[place], wide_value[place] = number, value
    return np.arange(rows + 1) * most, wide_number, wide_value


def _slot(first, second, width):
    """Return the number of a pair of positions among all, first < second, in the order of their names."""
    return first * width - first * (first + 1) // 2 + second - first - 1


def fill_tables(start, count, number, way, head, entries):
    """Fill each choice's alias table, in whole numbers: entries of equal chance, each of up to two parts."""
    for choice in range(start.size - 1):
        low, many = start[choice], start[choice + 1] - start[choice]
        total = count[low : low + many].sum()
        head[choice, 0] = low
        head[choice, 1] = many
        head[choice, 2] = min(total, 2**32)
        if many == 0:
            continue
        weight = count[low : low + many] * many
        order = np.empty(many, np.int64)
        small, large = 0, many
        for index in range(many):
            if weight[index] < total:
                order[small] = index
                small += 1
            else:
                large -= 1
                order[large] = index
        while small > 0:
            small -= 1
            little, great = order[small], order[large]
            fill(
                entries,
                low,
                little,
                (np.uint64(weight[little]) << np.uint64(32)) // np.uint64(total),
                great,
                number,
                way,
            )
            weight[great] -= total - weight[little]
            if weight[great] < total:
                order[small] = great
                small += 1
                large += 1
        for place in range(large, many):
            fill(entries, low, order[place], np.uint64(2**32 - 1), order[place], number, way)


@inlined
def fill(entries, low, one, bound, other, number, way):
    """Write an entry: where its first part ends, and set and way of both parts."""
    entries[low + one, 0] = bound
    entries[low + one, 1] = number[low + one]
    entries[low + one, 2] = way[low + one]
    entries[low + one, 3] = number[low + other]
    entries[low + one, 4] = way[low + other]


def server_tables(fleet, frame, used, number):
    """Return, server by server, the sets around it and what a unit of load changes their differences by."""
    tree = frame.tree
    sets = np.flatnonzero(used)
    size = tree.high[sets] - tree.low[sets]
    owner = np.repeat(sets, size)
    place = np.arange(owner.size) - np.repeat(np.cumsum(size) - size, size) + tree.low[owner]
    step = np.where(place < tree.middle[owner], frame.second[owner], -frame.first[owner])
    server = tree.order[place]
    order = np.argsort(server, kind="stable")
    start = np.searchsorted(server[order], np.arange(fleet.size + 1)).astype(np.int64)
    idle = number.max(initial=-1) + 1
    start, sets, step = level_lengths(start, number[owner[order]], step[order], idle)
    return start, sets.astype(np.uint32), step
