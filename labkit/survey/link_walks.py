"""Compiled walks over the choices for links: who is near, and whose work reaches whom."""

import numpy as np

from labkit.compiled import compiled

# Work that a server carries for a choice counts as movable from this share of its load.
DUST = 1e-11
# Servers in the largest ball around an inner end that is looked at before work is moved.
BALL = 500


def pairs_near(starts, distance, inside, most, servers, head, following, first, second):
    """List pairs of servers that share no choice and are at most `distance` choices apart.

    Parameters
    ----------
    starts : int32 array
        First servers of the pairs.
    distance : int
    inside : bool array, shape (servers,)
        Servers that are no second server. Servers in `starts` become so in turn.
    most : int
        Stop counting above this number.
    servers, head, following
        See `flow.settle`.
    first, second : int32 arrays, filled; of length 0 when the pairs are only to be counted

    Returns
    -------
    int
        Number of pairs.
    """
    width = servers.shape[1]
    reached = np.full(head.size, -1, np.int64)
    line = np.empty(head.size, np.int32)
    pairs = 0
    for number in range(starts.size):
        inside[starts[number]] = True
        reached[starts[number]] = number
        line[0] = starts[number]
        begin, last = 0, 1
        for step in range(distance):
            end = last
            while begin < end:
                entry = head[line[begin]]
                begin += 1
                while entry >= 0:
                    choice = entry // width
                    for position in range(width):
                        other = servers[choice, position]
                        if other < 0:
                            break
                        if reached[other] != number:
                            reached[other] = number
                            line[last] = other
                            last += 1
                            if step > 0 and not inside[other]:
                                if first.size > 0:
                                    first[pairs] = starts[number]
                                    second[pairs] = other
                                pairs += 1
                    entry = following[entry]
            if pairs > most:
                return pairs
    return pairs


@compiled
def spread_back(ends, inside, servers, head, following, carried, load, line):
    """Clear `inside` for all servers whose work can reach an end within; return how many, first in `line`."""
    width = servers.shape[1]
    last = 0
    for end in ends:
        inside[end] = False
        line[last] = end
        last += 1
    first = 0
    while first < last:
        entry = head[line[first]]
        first += 1
        while entry >= 0:
            choice = entry // width
            for position in range(width):
                other = servers[choice, position]
                if other < 0:
                    break
                if inside[other] and carried[choice * width + position] > DUST * load[other]:
                    inside[other] = False
                    line[last] = other
                    last += 1
            entry = following[entry]
    return last


def relieved(ends, members, servers, head, following, carried, capacity, load, count, room):
    """Count the members whose work can reach each end within the members, and sum their capacity."""
    inside = np.zeros(head.size, np.bool_)
    line = np.empty(head.size, np.int32)
    width = servers.shape[1]
    count[:] = 0
    for number in range(ends.size):
        if count[number] > 0:
            continue
        for server in members:
            inside[server] = True
        reach = spread_back(ends[number : number + 1], inside, servers, head, following, carried, load, line)
        count[number] = reach
        room[number] = 0.0
        for server in line[:reach]:
            room[number] += capacity[server]
        if reach < members.size:
            continue
        # All reach this end; so they reach every end that this one reaches.
        line[0] = ends[number]
        inside[ends[number]] = True
        first, last = 0, 1
        while first < last:
            server = line[first]
            entry = head[server]
            first += 1
            while entry >= 0:
                if carried[entry] > DUST * load[server]:
                    choice = entry // width
                    for position in range(width):
                        other = servers[choice, position]
                        if other < 0:
                            break
                        if not inside[other]:
                            inside[other] = True
                            line[last] = other
                            last += 1
                entry = following[entry]
        for later in range(number + 1, ends.size):
            if inside[ends[later]]:
                count[later] = reach
                room[later] = room[number]


def reachers(ends, among, servers, head, following, carried, load):
    """Return the servers among the given ones whose work can reach one of the ends, the ends first."""
    inside = np.zeros(head.size, np.bool_)
    inside[among] = True
    line = np.empty(head.size, np.int32)
    reach = spread_back(ends, inside, servers, head, following, carried, load, line)
    return line[:reach].copy()


def bound_inside(ends, inside, work, room, servers, head, following, demand, capacity, bound):
    """Bound from below what `drain` would find for each end, without moving work.

    All that leaves the bottleneck over a link passes its inner end, and every ring of servers around that:
    the ratio of the bottleneck without the servers inside a ring is a bound. Balls grow to `BALL` servers.

    Parameters
    ----------
    ends : int32 array
    inside : bool array, shape (servers,)
        The bottleneck.
    work, room : float
        Demand confined to it, and its capacity.
    servers, head, following, demand, capacity
        See `labkit.survey.split.Split`.
    bound : float64 array, shape (ends,), filled
    """
    width = servers.shape[1]
    reached = np.full(head.size, -1, np.int64)
    seen = np.full(servers.shape[0], -1, np.int64)
    line = np.empty(head.size, np.int32)
    for number in range(ends.size):
        reached[ends[number]] = number
        line[0] = ends[number]
        first, last = 0, 1
        left, space = work, room
        bound[number] = 0.0
        while first < last < BALL:
            stop = last
            while first < stop:
                space -= capacity[line[first]]
                entry = head[line[first]]
                first += 1
                while entry >= 0:
                    choice = entry // width
                    if seen[choice] != number:
                        seen[choice] = number
                        confined = True
                        for other in servers[choice]:
                            confined = confined and (other < 0 or inside[other])
                        if confined:
                            left -= demand[choice]
                            for other in servers[choice]:
                                if other >= 0 and reached[other] != number:
                                    reached[other] = number
                                    line[last] = other
                                    last += 1
                    entry = following[entry]
            # Where little is left, differences would be all rounding.
            if space > room / 2.0:
                bound[number] = max(bound[number], left / space)
