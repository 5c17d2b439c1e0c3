"""Compiled moves of work between servers: how demand is split, evened out, and proved to be stuck.

The state of a split is one number for each entry (choice, option): the work of that choice which that option
carries. All demand is placed at all times; what a level λ leaves open is only which servers hold more than
λ × capacity (they have an excess) and which hold less (they have room). Work moves from one server to another
through a choice that holds both. When nothing more can move, the servers that cannot reach room are a closed
set: every choice that they carry lies inside it, so that (their load) / (their capacity) is the ratio
(demand confined to the set) / (capacity of the set), the certificate of the optimum.
"""

import numpy as np

from labkit.compiled import compiled

# Two levels count as equal within this share.
ROUNDING = 1e-12
# A server has an excess, or room, from this share of what it may hold: a few units in the last place, since
# what many servers have too much may all be missing on one.
LAST_PLACES = 4e-15


@compiled
def add(total, lost, amount):
    """Return a sum and what its rounding has lost, one term later (Neumaier 1974)."""
    after = total + amount
    gone = (total - after) + amount if abs(total) >= abs(amount) else (amount - after) + total
    return after, lost + gone


@compiled
def ratio_of(members, mark, block, load, capacity):
    """Return (load) / (capacity) of the members marked, right to the last places: all they hold counts on it.

    A plain sum over many servers would be wrong by as much as a whole server may lack.
    """
    work = 0.0
    room = 0.0
    work_lost = 0.0
    room_lost = 0.0
    for server in members:
        if block[server] == mark:
            work, work_lost = add(work, work_lost, load[server])
            room, room_lost = add(room, room_lost, capacity[server])
    return (work + work_lost) / (room + room_lost)


@compiled
def recount(members, head, following, carried, load):
    """Set the load of each member to the sum of what it carries."""
    for server in members:
        total = 0.0
        entry = head[server]
        while entry >= 0:
            total += carried[entry]
            entry = following[entry]
        load[server] = total


@compiled
def measure_heights(
    members, mark, level, spare, servers, head, following, carried, capacity, load, block, height, seen,
    stamp, line,
):  # fmt: skip
    """Set each member's height to its distance, in moves, to a member with room; the count where none is.

    A member has room when it lacks more than the share `spare` of what it may hold.

    Returns how many members reach room; these are the first in `line`, nearest first.
    """
    width = servers.shape[1]
    limit = members.size
    last = 0
    for server in members:
        height[server] = limit
        if load[server] < level * capacity[server] * (1.0 - spare):
            height[server] = 0
            line[last] = server
            last += 1
    first = 0
    while first < last:
        server = line[first]
        first += 1
        entry = head[server]
        while entry >= 0:
            choice = entry // width
            if seen[choice] != stamp:
                seen[choice] = stamp
                # Whoever carries work of this choice can move it to `server`.
                for position in range(width):
                    other = servers[choice, position]
                    if other < 0:
                        break
                    if (
                        block[other] == mark
                        and height[other] == limit
                        and carried[choice * width + position] > 0.0
                    ):
                        height[other] = height[server] + 1
                        line[last] = other
                        last += 1
            entry = following[entry]
    return last


@compiled
def line_up(members, level, head, capacity, load, current, waiting, line, reach):
    """Turn `line`, the members that reach room, nearest first, into those with an excess, farthest first.

    In this order one pass carries all the excess of a long chain of servers along. Returns how many they are.
    """
    for server in members:
        current[server] = head[server]
        waiting[server] = 0
    for place in range(reach // 2):
        line[place], line[reach - 1 - place] = line[reach - 1 - place], line[place]
    active = 0
    for place in range(reach):
        server = line[place]
        full = level * capacity[server]
        if load[server] - full > LAST_PLACES * full:
            waiting[server] = 1
            line[active] = server
            active += 1
    return active


@compiled
def room_of(members, level, capacity, load):
    """Return what the members lack together."""
    room = 0.0
    for server in members:
        room += max(level * capacity[server] - load[server], 0.0)
    return room


@compiled
def settle(
    members, mark, level, servers, head, following, carried, capacity, load, block,
    height, current, waiting, line, seen, stamp,
):  # fmt: skip
    """Move the members' excess over `level` to members with room, as far as it goes.

    The push–relabel method (Goldberg & Tarjan 1988) with first-in first-out order and heights measured afresh
    now and then; only its first phase, since it does not matter where stuck work stays.

    Parameters
    ----------
    members : int32 array
        The servers among which work may move; their `block` is `mark`, that of no other server.
    mark : int
    level : float
        Utilisation up to which a server has room.
    servers : int32 array, shape (choices, width)
    head, following : int32 arrays
        See `thread_entries`.
    carried, load : float64 arrays, changed in place
    capacity : float64 array
    block : int32 array, shape (servers,)
    height, current, waiting, line : int32 arrays, shape (servers,)
        Work space; afterwards a member's `height` is below ``members.size`` just where it can reach room.
    seen : int64 array, shape (choices,)
        Work space; no element is above `stamp`.
    stamp : int

    Returns
    -------
    reach : int
        Number of members that can still reach room; the others' work is stuck.
    stamp : int
        To be handed on to the next call.
    """
    width = servers.shape[1]
    limit = members.size
    done = False
    for _ in range(20):
        stamp += 1
        reach = measure_heights(
            members, mark, level, LAST_PLACES, servers, head, following, carried, capacity, load, block,
            height, seen, stamp, line,
        )  # fmt: skip
        active = line_up(members, level, head, capacity, load, current, waiting, line, reach)
        first = 0
        done = active == 0
        if done:
            break
        effort = 0
        most = 12 * limit + 1000
        spare = LAST_PLACES
        missing = room_of(members, level, capacity, load)
        while active > 0:
            server = line[first]
            first = first + 1 if first + 1 < limit else 0
            active -= 1
            waiting[server] = 0
            full = level * capacity[server]
            while load[server] - full > LAST_PLACES * full and height[server] < limit:
                entry = current[server]
                while entry >= 0:
                    effort += 1
                    if carried[entry] > 0.0:
                        choice = entry // width
                        for position in range(width):
                            other = servers[choice, position]
                            if other < 0:
                                break
                            if block[other] == mark and height[other] == height[server] - 1:
                                amount = min(load[server] - full, carried[entry])
                                carried[entry] -= amount
                                carried[choice * width + position] += amount
                                load[server] -= amount
                                load[other] += amount
                                room = level * capacity[other]
                                if waiting[other] == 0 and load[other] - room > LAST_PLACES * room:
                                    waiting[other] = 1
                                    place = first + active
                                    line[place if place < limit else place - limit] = other
                                    active += 1
                                if carried[entry] <= 0.0 or load[server] - full <= LAST_PLACES * full:
                                    break
                    if load[server] - full <= LAST_PLACES * full:
                        break
                    entry = following[entry]
                current[server] = entry
                if entry < 0:
                    lowest = limit
                    entry = head[server]
                    current[server] = entry
                    while entry >= 0:
                        effort += 1
                        if carried[entry] > 0.0:
                            choice = entry // width
                            for position in range(width):
                                other = servers[choice, position]
                                if other < 0:
                                    break
                                if block[other] == mark and other != server:
                                    lowest = min(lowest, height[other])
                        entry = following[entry]
                    height[server] = min(lowest + 1, limit)
            if effort > most and active > 0:
                effort = 0
                # Large amounts that pass through a small server and return leave their rounding there, which
                # looks like room for ever; what nothing fills counts as room only from twice as much on.
                before = missing
                missing = room_of(members, level, capacity, load)
                if missing >= before * (1.0 - ROUNDING):
                    spare *= 2.0
                stamp += 1
                reach = measure_heights(
                    members, mark, level, spare, servers, head, following, carried, capacity, load,
                    block, height, seen, stamp, line,
                )  # fmt: skip
                active = line_up(members, level, head, capacity, load, current, waiting, line, reach)
                first = 0
        # Differences of large numbers have left their rounding in the loads.
        recount(members, head, following, carried, load)
    if not done:
        # Trifles of room, filled and lost by rounding again, kept it busy to the end; they now count as none.
        stamp += 1
        reach = measure_heights(
            members, mark, level, ROUNDING, servers, head, following, carried, capacity, load, block, height,
            seen, stamp, line,
        )  # fmt: skip
    return reach, stamp


def decompose(servers, head, following, carried, capacity, load, block, order, only_top):
    """Find the fair split: divide the servers into blocks of one level each, the fullest block first.

    The decomposition algorithm of Fujishige (1980) and Groenevelt (1991): a block whose work can be spread to
    its mean level has that level; else its servers divide into those that stay above the mean and the rest,
    and no work moves between the two any more.

    Parameters
    ----------
    servers, head, following, carried, capacity, load
        See `settle`; `carried` and `load` start from any split of the demand and end as the fair one.
    block : int32 array, shape (servers,), filled
        Number of each server's block, from 0, fullest block first.
    order : int32 array, shape (servers,), filled
        Servers by block.
    only_top : bool
        Stop at the fullest block; other servers get the block −1.

    Returns
    -------
    int
        Number of blocks found.
    """
    count = head.size
    height = np.empty(count, np.int32)
    current = np.empty(count, np.int32)
    waiting = np.empty(count, np.int32)
    line = np.empty(count, np.int32)
    seen = np.zeros(servers.shape[0], np.int64)
    stamp = 0
    block[:] = -1
    for server in range(count):
        order[server] = server
    stops = np.empty(count + 1, np.int64)  # ends of the blocks that are still to do, the fullest last
    stops[0] = count
    pending = 1
    start = 0
    found = 0
    # Marks of blocks at work lie below −1, so as not to meet the final numbers.
    mark = -2
    while pending > 0:
        stop = stops[pending - 1]
        members = order[start:stop]
        recount(members, head, following, carried, load)
        for server in members:
            block[server] = mark
        level = ratio_of(members, mark, block, load, capacity)
        cut = 0
        if level > 0.0 and stop - start > 1:
            reach, stamp = settle(
                members, mark, level, servers, head, following, carried, capacity, load, block,
                height, current, waiting, line, seen, stamp,
            )  # fmt: skip
            if reach == 0 or reach == stop - start:
                # Rounding may have left a little room everywhere, or none, and hide a set that has much.
                stamp += 1
                reach = measure_heights(
                    members, mark, level, ROUNDING if reach > 0 else -ROUNDING, servers, head, following,
                    carried, capacity, load, block, height, seen, stamp, line,
                )  # fmt: skip
            if 0 < reach < stop - start:
                for server in members:
                    if height[server] >= stop - start:
                        cut += 1
                        block[server] = mark - 1
                # Ratios of closed sets: exact to rounding, whatever the members' own loads have lost.
                above = ratio_of(members, mark - 1, block, load, capacity)
                below = ratio_of(members, mark, block, load, capacity)
                if above <= level * (1.0 + ROUNDING) and below >= level * (1.0 - ROUNDING):
                    cut = 0
        if cut > 0:
            # Keep the order within both parts.
            place = start
            rest = 0
            for server in members:
                if height[server] >= stop - start:
                    order[place] = server
                    place += 1
                else:
                    line[rest] = server
                    rest += 1
            for number in range(rest):
                order[place + number] = line[number]
            stops[pending] = place
            pending += 1
        else:
            for server in members:
                block[server] = found
            found += 1
            start = stop
            pending -= 1
            if only_top:
                pending = 0
        mark -= 2
    for place in range(start, count):
        block[order[place]] = -1
    return found
