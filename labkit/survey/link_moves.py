"""Compiled moves of work for links that do not exist yet, all from the fair split of the present fleet.

A link joins a server of the bottleneck, its inner end, to one outside, its outer end. What it can do depends
on its two ends apart (see `labkit.survey.link_reach`): `drain` lets the inner end swallow all that reaches
it, `pour` loads the outer end with all that must leave the bottleneck. `reroute` moves the work for one link.
"""

import numpy as np

from labkit.compiled import compiled
from labkit.survey.flow import ROUNDING, measure_heights, settle


@compiled
def spill(members, level, servers, head, following, carried, capacity, load, block, met, line):
    """Put the members above the level, and all that their work can reach, first into `line`; count them.

    They confine their work, so that the ratio of the set bounds the level from below, once all has settled.
    `met` is False for all and stays so.
    """
    width = servers.shape[1]
    last = 0
    for server in members:
        if load[server] > level * capacity[server] * (1.0 + ROUNDING):
            met[server] = True
            line[last] = server
            last += 1
    first = 0
    while first < last:
        entry = head[line[first]]
        first += 1
        while entry >= 0:
            if carried[entry] > 0.0:
                choice = entry // width
                for position in range(width):
                    other = servers[choice, position]
                    if other < 0:
                        break
                    if block[other] == 0 and not met[other]:
                        met[other] = True
                        line[last] = other
                        last += 1
            entry = following[entry]
    for server in line[:last]:
        met[server] = False
    return last


@compiled
def tight_room(
    members, level, servers, head, following, carried, capacity, load, block, height, seen, stamp, line
):
    """Return the capacity of the members whose work can reach no room."""
    measure_heights(
        members, 0, level, ROUNDING, servers, head, following, carried, capacity, load, block, height, seen,
        stamp, line,
    )  # fmt: skip
    room = 0.0
    for server in members:
        if height[server] >= members.size:
            room += capacity[server]
    return room


def drain(sink, members, level, cutoff, only_tight, servers, head, following, carried, capacity, load):
    """Return the lowest level to which the members can be brought when the sink takes whatever reaches it.

    That is the highest ratio over server sets without the sink, found from below by Newton's method as
    Dinkelbach (1967) uses it: what cannot reach room at a level is a set of a higher ratio.

    Parameters
    ----------
    sink : int
        One of the members.
    members : int32 array
        Servers whose work moves only among themselves.
    level : float
        Where to start; a lower result is not looked for.
    cutoff : float
        A result above this need not be exact, only above it.
    only_tight : bool
        Return the capacity of the set that cannot be brought down to `level` instead.
    servers, head, following, carried, capacity, load
        See `flow.settle`. Any split of the demand will do to start from; `carried` and `load` are changed.
    """
    count = head.size
    block = np.full(count, -1, np.int32)
    height = np.empty(count, np.int32)
    current = np.empty(count, np.int32)
    waiting = np.empty(count, np.int32)
    line = np.empty(count, np.int32)
    seen = np.zeros(servers.shape[0], np.int64)
    met = np.zeros(count, np.bool_)
    stamp = 0
    for server in members:
        block[server] = 0
    own = capacity[sink]
    capacity[sink] = np.inf
    result = 0.0
    while True:
        _, stamp = settle(
            members, 0, level, servers, head, following, carried, capacity, load, block,
            height, current, waiting, line, seen, stamp,
        )  # fmt: skip
        if only_tight:
            stamp += 1
            result = tight_room(
                members, level, servers, head, following, carried, capacity, load, block, height, seen, stamp,
                line,
            )  # fmt: skip
            break
        result = level
        stuck = spill(members, level, servers, head, following, carried, capacity, load, block, met, line)
        work = 0.0
        room = 0.0
        for server in line[:stuck]:
            work += load[server]
            room += capacity[server]
        if stuck == 0 or work <= level * room * (1.0 + 1e-14) or level > cutoff:
            break
        level = work / room
    capacity[sink] = own
    return result


@compiled
def take_in(start, size, most, level, servers, head, following, level_of, block, region):
    """Let the region grow by breadth, from the member at place `start`, over servers up to `level`."""
    width = servers.shape[1]
    while start < size and size < most:
        entry = head[region[start]]
        start += 1
        while entry >= 0:
            choice = entry // width
            for position in range(width):
                other = servers[choice, position]
                if other < 0:
                    break
                if block[other] < 0 and level_of[other] <= level:
                    block[other] = 0
                    region[size] = other
                    size += 1
            entry = following[entry]
    return size


@compiled
def count_above(levels, level):
    """Return how many of the falling levels lie above `level`."""
    low, high = 0, levels.size
    while low < high:
        middle = (low + high) // 2
        if levels[middle] > level:
            low = middle + 1
        else:
            high = middle
    return low


def pour(
    ends, start, only_tight, alone, levels, work, room, servers, head, following, carried, capacity, load,
    level_of, found,
):  # fmt: skip
    """Find the level at which all that must leave the servers above it fits behind an outer end.

    At a level λ, work[i] − λ·room[i] has to leave, where i counts the `levels` above λ. It is poured into the
    outer end, whose own work moves on within a region that grows as far as it must. What gets stuck gives the
    next level, from below.

    Parameters
    ----------
    ends : int32 array
        Outer ends, one after the other; all is put back after each.
    start : float64 array, shape (ends,)
        Levels that are no higher than the result.
    only_tight : bool
        Find the capacity of the largest set stuck at `start` instead, with that of the levels above it.
    alone : bool
        Whether the levels are those of the servers to relieve only, and servers elsewhere above λ just stay
        there.
    levels, work, room : float64 arrays
        Falling levels, and the demand confined to the servers down to each, and their capacity.
    servers, head, following, carried, capacity, load
        See `flow.settle`: the fair split. The last row of `servers` is free, for the work poured in.
    level_of : float64 array, shape (servers,)
    found : float64 array, shape (ends,), filled
    """
    count = head.size
    width = servers.shape[1]
    extra = servers.shape[0] - 1
    poured = extra * width
    first_carried = carried.copy()
    first_load = load.copy()
    block = np.full(count, -1, np.int32)
    region = np.empty(count, np.int32)
    height = np.empty(count, np.int32)
    current = np.empty(count, np.int32)
    waiting = np.empty(count, np.int32)
    line = np.empty(count, np.int32)
    seen = np.zeros(servers.shape[0], np.int64)
    met = np.zeros(count, np.bool_)
    stamp = 0
    for number in range(ends.size):
        end = ends[number]
        level = start[number]
        servers[extra, 0] = end
        following[poured] = head[end]
        head[end] = poured
        region[0] = end
        block[end] = 0
        size = 1
        found[number] = 0.0
        while True:
            above = count_above(levels, level)
            if above == 0:
                break
            amount = work[above - 1] - level * room[above - 1]
            load[end] += amount - carried[poured]
            carried[poured] = amount
            members = region[:size]
            _, stamp = settle(
                members, 0, level, servers, head, following, carried, capacity, load, block,
                height, current, waiting, line, seen, stamp,
            )  # fmt: skip
            stuck = spill(members, level, servers, head, following, carried, capacity, load, block, met, line)
            stuck_work = work[above - 1] - amount
            stuck_room = room[above - 1]
            lowest = np.inf
            grown = size
            for server in line[:stuck]:
                stuck_work += load[server]
                stuck_room += capacity[server]
                entry = head[server]
                while entry >= 0:
                    if carried[entry] > 0.0:
                        choice = entry // width
                        for position in range(width):
                            other = servers[choice, position]
                            if other < 0:
                                break
                            if block[other] < 0:
                                if level_of[other] <= level:
                                    block[other] = 0
                                    region[grown] = other
                                    grown += 1
                                else:
                                    lowest = min(lowest, level_of[other])
                    entry = following[entry]
            if stuck == 0:
                break
            if grown > size:
                size = take_in(
                    size, grown, 2 * size, level, servers, head, following, level_of, block, region
                )
                continue
            if only_tight:
                stamp += 1
                found[number] = room[above - 1] + tight_room(
                    members, level, servers, head, following, carried, capacity, load, block, height, seen,
                    stamp, line,
                )  # fmt: skip
                break
            ratio = stuck_work / stuck_room
            if alone and lowest < ratio:
                # From there on the next server has room, too.
                level = lowest
                continue
            if ratio <= level * (1.0 + 1e-14):
                break
            level = ratio
        if not only_tight:
            found[number] = level
        head[end] = following[poured]
        carried[poured] = 0.0
        servers[extra, 0] = -1
        for place in range(size):
            server = region[place]
            block[server] = -1
            load[server] = first_load[server]
            entry = head[server]
            while entry >= 0:
                carried[entry] = first_carried[entry]
                entry = following[entry]


def reroute(inner, outer, members, level, servers, head, following, carried, capacity, load, taken):
    """Let the choices of the inner end also use the outer end, and move the members' excess there.

    Parameters
    ----------
    inner, outer : int
        The link; `inner` is one of the members, `outer` is not.
    members : int32 array
        Servers whose work moves only among themselves and to the outer end.
    level : float
    servers, head, following, carried, capacity, load
        See `flow.settle`: the fair split; all are changed.
    taken : float64 array, shape (choices,), filled
        What each choice sends to the outer end.
    """
    count = head.size
    width = servers.shape[1]
    taken[:] = 0.0
    added = np.full(servers.shape[0], -1, np.int64)
    entry = head[inner]
    while entry >= 0:
        choice = entry // width
        free = 0
        while servers[choice, free] >= 0 and servers[choice, free] != outer:
            free += 1
        if servers[choice, free] < 0:
            servers[choice, free] = outer
            added[choice] = choice * width + free
            following[added[choice]] = head[outer]
            head[outer] = added[choice]
        entry = following[entry]
    block = np.full(count, -1, np.int32)
    everyone = np.empty(members.size + 1, np.int32)
    everyone[:-1] = members
    everyone[-1] = outer
    for server in everyone:
        block[server] = 0
    capacity[outer] = np.inf
    settle(
        everyone, 0, level, servers, head, following, carried, capacity, load, block,
        np.empty(count, np.int32), np.empty(count, np.int32), np.empty(count, np.int32),
        np.empty(count, np.int32), np.zeros(servers.shape[0], np.int64), 0,
    )  # fmt: skip
    for choice in range(servers.shape[0]):
        if added[choice] >= 0:
            taken[choice] = carried[added[choice]]
