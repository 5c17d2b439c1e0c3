"""Compiled: one row after another of servers lost, each from the same fair split."""

import numpy as np

from labkit.compiled import compiled
from labkit.survey.flow import ROUNDING, settle
from labkit.survey.optimum import AGREEMENT
from labkit.survey.outage_moves import confined_ratio, find_level, find_ties
from labkit.survey.outage_region import OUTSIDE, displace, put_back

# Servers that one call looks into before it returns: some seconds of work, so that it can be interrupted.
ENOUGH = 3_000_000
# How a row tells its bottleneck: by name, as the top block of the whole fleet, or not at all (not proved).
LISTED, TOP_BLOCK, FAILED = 0, 1, 2


def lose_rows(
    first, second, row, servers, head, following, base_carried, base_load, demand, capacity, of_block, level,
    by_block, block_start, optimum, unplaced, unplaced_lost, size, kind, stop, listed, listing,
):  # fmt: skip
    """Fill rows from `row` on, as far as `listed` and some seconds reach; return the next row.

    Parameters
    ----------
    first, second : int32 arrays, shape (rows,)
        The servers lost; −1 in `second` for none.
    row : int
        The row to start with.
    servers, head, following, base_carried, base_load, demand, capacity
        The fair split of the whole fleet, see `split.Split`. In the first call what it carries is smoothed.
    of_block, level
        Its profile: each server's block, each block's level, from the fullest.
    by_block : int32 array, shape (servers,)
        Servers by block, in table order within each.
    block_start : int64 array, shape (blocks + 1,)
        Where each block starts there.
    optimum, unplaced, unplaced_lost : float64 arrays, shape (rows,), filled
        Unplaced demand is a sum and what rounding took from it.
    size : int64 array, shape (rows,), filled
        Servers in the bottleneck.
    kind : int8 array, shape (rows,), filled
        LISTED, TOP_BLOCK or FAILED.
    stop : int64 array, shape (rows,), filled
        Where the row's bottleneck ends in `listed`; it starts where the row before ends, the first at 0.
    listed : int32 array
        Bottlenecks in table order; at least one place a server.
    listing : bool
        Whether bottlenecks are written there at all.
    """
    count = head.size
    known = np.zeros(count, np.int8)
    region = np.empty(count, np.int32)
    inner = np.empty(count, np.int32)
    active = np.zeros(count, np.int32)
    height = np.empty(count, np.int32)
    current = np.empty(count, np.int32)
    waiting = np.empty(count, np.int32)
    line = np.empty(count, np.int32)
    seen = np.zeros(servers.shape[0], np.int64)
    stamp = 0
    if row == 0:
        fullest = by_block[: block_start[1]]
        for server in fullest:
            active[server] = 1
        stamp = smooth(
            fullest, level[0], servers, head, following, base_carried, capacity, base_load, active, height,
            current, waiting, line, seen, stamp,
        )  # fmt: skip
        active[:] = 0
    carried = base_carried.copy()
    load = base_load.copy()
    positive = np.count_nonzero(demand)
    used = 0
    spent = 0
    while row < first.size and spent < ENOUGH and (not listing or used + count <= listed.size):
        one, other = first[row], second[row]
        top, hits = remaining_top(one, other, of_block, block_start)
        stamp += 1
        unplaced[row], unplaced_lost[row], without, reached = displace(
            one, other, servers, head, following, carried, load, demand, capacity, known, region, seen, stamp
        )
        optimum[row] = 0.0
        size[row] = 0
        kind[row] = LISTED
        if without < positive:
            optimum[row], kind[row], members, with_top, reached, stamp = solve(
                level[top], top, reached, one, other, servers, head, following, carried, capacity, load,
                demand, of_block, known, region, inner, active, height, current, waiting, line, seen, stamp,
            )  # fmt: skip
            if with_top:
                size[row] = block_start[top + 1] - block_start[top] - hits
                if kind[row] == LISTED and members == 0 and top == 0 and hits == 0:
                    kind[row] = TOP_BLOCK
            size[row] += members
            if listing and kind[row] == LISTED:
                start = used
                if with_top:
                    for server in by_block[block_start[top] : block_start[top + 1]]:
                        if server != one and server != other:
                            listed[used] = server
                            used += 1
                for server in inner[:members]:
                    listed[used] = server
                    used += 1
                listed[start:used].sort()
        stop[row] = used
        spent += reached + 10
        put_back(region[:reached], servers, head, following, carried, load, base_carried, base_load)
        for server in region[:reached]:
            known[server] = OUTSIDE
            active[server] = 0
        for lost in (one, other):
            if lost >= 0:
                region[0] = lost
                put_back(region[:1], servers, head, following, carried, load, base_carried, base_load)
        row += 1
    return row


@compiled
def remaining_top(one, other, of_block, block_start):
    """Return the first block that is not lost as a whole, and how many of its servers are lost."""
    top = 0
    while True:
        hits = int(of_block[one] == top) + int(other >= 0 and of_block[other] == top)
        if top + 1 == block_start.size or hits < block_start[top + 1] - block_start[top]:
            return top, hits
        top += 1


@compiled
def smooth(
    members, level, servers, head, following, carried, capacity, load, active, height, current, waiting, line,
    seen, stamp,
):  # fmt: skip
    """Spread what rounding has left on single members above `level`; return the stamp.

    Among many members each may lack a few units in the last place, and one have all of that too much.
    """
    for server in members:
        if load[server] > level * (1.0 + AGREEMENT / 2.0) * capacity[server]:
            _, stamp = settle(
                members, 1, level * (1.0 + AGREEMENT / 10.0), servers, head, following, carried, capacity,
                load, active, height, current, waiting, line, seen, stamp,
            )  # fmt: skip
            break
    return stamp


@compiled
def solve(
    floor, top, count, one, other, servers, head, following, carried, capacity, load, demand, of_block,
    known, region, inner, active, height, current, waiting, line, seen, stamp,
):  # fmt: skip
    """Find the optimum after the work has been handed on, and the largest set of servers that attains it.

    The level `floor` of the block `top` is a bound from below: the block lost no more work than its lost
    servers carried.

    Returns
    -------
    optimum : float
    kind : int
        LISTED, or FAILED when the two proofs disagree.
    members : int
        The first of `inner` are in the bottleneck ...
    with_top : bool
        ... and so is what is left of the block `top`.
    count : int
        Servers in the region.
    stamp : int
    """
    level, before, members, sure, count, stamp = find_level(
        floor, count, one, other, servers, head, following, carried, capacity, load, of_block, known, region,
        inner, active, height, current, waiting, line, seen, stamp,
    )  # fmt: skip
    with_top = False
    if not sure or before >= level * (1.0 - 2.0 * ROUNDING):
        # What was left behind may attain the optimum as well.
        near = level * (1.0 - ROUNDING)
        with_top = floor >= near
        members, count, stamp = find_ties(
            near, top if with_top else -1, count, one, other, servers, head, following, carried, capacity,
            load, of_block, known, region, inner, active, height, current, waiting, line, seen, stamp,
        )  # fmt: skip
        for server in region[:count]:
            active[server] = 0
        for server in inner[:members]:
            active[server] = 1
    proved = True
    optimum = floor if with_top else level
    if members > 0:
        stamp += 1
        ratio = confined_ratio(
            inner[:members], top if with_top else -1, one, other, servers, head, following, demand, capacity,
            of_block, active, seen, stamp,
        )  # fmt: skip
        proved = abs(ratio - level) <= AGREEMENT * level
        if not with_top:
            optimum = ratio
    elif not with_top:
        proved = False
    for server in region[:count]:
        active[server] = 1
    stamp = smooth(
        region[:count], optimum, servers, head, following, carried, capacity, load, active, height, current,
        waiting, line, seen, stamp,
    )  # fmt: skip
    for server in region[:count]:
        if load[server] > optimum * (1.0 + AGREEMENT) * capacity[server]:
            proved = False
    return optimum, LISTED if proved else FAILED, members, with_top, count, stamp
