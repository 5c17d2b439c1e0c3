"""Compiled: the region that the work of lost servers moves in.

What a lost server carried goes to the other options of its choices. Where that makes servers too full, work
moves on within a region, which grows around them only as far as it must: no work needs to go past a server
with room. Afterwards only what the region touched is put back: a loss costs what it moves, not the fleet.
"""

from labkit.compiled import compiled
from labkit.survey.flow import LAST_PLACES

OUTSIDE, REACHED, SCANNED = 0, 1, 2


@compiled
def displace(
    one, other, servers, head, following, carried, load, demand, capacity, known, region, seen, stamp
):
    """Hand the work of the lost servers `one` and `other` (−1: none) to the emptiest options left.

    Returns
    -------
    float, float
        Demand of the choices that have no option left, in two parts: a sum and what rounding took from it.
    int
        How many choices with a demand these are.
    int
        How many servers received work: the start of `region`.
    """
    width = servers.shape[1]
    unplaced, unplaced_lost = 0.0, 0.0
    without = 0
    count = 0
    for lost in (one, other):
        entry = head[lost] if lost >= 0 else -1
        while entry >= 0:
            choice = entry // width
            if seen[choice] != stamp:
                seen[choice] = stamp
                amount = 0.0
                best = -1
                taker = -1
                for position in range(width):
                    server = servers[choice, position]
                    if server < 0:
                        break
                    if server in (one, other):
                        amount += carried[choice * width + position]
                        carried[choice * width + position] = 0.0
                    elif best < 0 or load[server] * capacity[taker] < load[taker] * capacity[server]:
                        best = choice * width + position
                        taker = server
                if best < 0:
                    unplaced, unplaced_lost = add(unplaced, unplaced_lost, demand[choice])
                    if demand[choice] > 0.0:
                        without += 1
                elif amount > 0.0:
                    carried[best] += amount
                    load[taker] += amount
                    if known[taker] == OUTSIDE:
                        known[taker] = REACHED
                        region[count] = taker
                        count += 1
            entry = following[entry]
    return unplaced, unplaced_lost, without, count


@compiled
def expand(
    count, least, level, sealed, one, other, servers, head, following, carried, capacity, load, of_block,
    known, region,
):  # fmt: skip
    """Let the region grow past its full servers, and on until it has twice the room that it needs.

    Once every member is scanned, work in the region cannot leave it: all options of every choice that it
    carries are members, lost, or of the block `sealed`, which is full itself and is not looked into.

    Parameters
    ----------
    count : int
        Servers in the region now.
    least : int
        Servers up to which it grows in any case.
    level : float
        Utilisation up to which a server has room.
    known : int8 array, shape (servers,), changed in place
        OUTSIDE, REACHED (in the region) or SCANNED (and so are those that its work can move to).

    Returns
    -------
    count : int
    open_ends : int
        Members that are not scanned.
    """
    width = servers.shape[1]
    room = 0.0
    excess = 0.0
    for place in range(count):
        gap = level * capacity[region[place]] - load[region[place]]
        room += max(gap, 0.0)
        excess += max(-gap, 0.0)
    open_ends = 0
    place = 0
    while place < count:
        server = region[place]
        place += 1
        if known[server] == SCANNED or of_block[server] == sealed:
            continue
        full = load[server] >= level * capacity[server] * (1.0 - LAST_PLACES)
        if not full and count >= least and room >= 2.0 * excess:
            open_ends += 1
            continue
        known[server] = SCANNED
        entry = head[server]
        while entry >= 0:
            choice = entry // width
            held = carried[entry] > 0.0
            if not held:
                # An earlier move may have taken the choice off this server, onto another member.
                for position in range(width):
                    option = servers[choice, position]
                    if option < 0:
                        break
                    held = held or (known[option] != OUTSIDE and carried[choice * width + position] > 0.0)
            if held:
                for position in range(width):
                    option = servers[choice, position]
                    if option < 0:
                        break
                    if known[option] == OUTSIDE and option != one and option != other:
                        known[option] = REACHED
                        region[count] = option
                        count += 1
                        gap = level * capacity[option] - load[option]
                        room += max(gap, 0.0)
                        excess += max(-gap, 0.0)
            entry = following[entry]
    return count, open_ends


@compiled
def pull(members, level, servers, head, following, carried, capacity, load, known, rank):
    """Let members fill up to `level` from those before them, the last first, each from the fullest it can.

    The members are a closed region in the order in which it grew: those that received work stand first. This
    spreads most of what they have too much before `settle` does the rest.
    """
    width = servers.shape[1]
    for place in range(members.size):
        rank[members[place]] = place
    for place in range(members.size - 1, -1, -1):
        taker = members[place]
        need = level * capacity[taker] - load[taker]
        while need > LAST_PLACES * level * capacity[taker]:
            source = -1
            goal = -1
            fullest = -1.0
            entry = head[taker]
            while entry >= 0:
                choice = entry // width
                for position in range(width):
                    giver = servers[choice, position]
                    if giver < 0:
                        break
                    if (
                        carried[choice * width + position] > 0.0
                        and known[giver] != OUTSIDE
                        and rank[giver] < place
                        and load[giver] > fullest * capacity[giver]
                    ):
                        fullest = load[giver] / capacity[giver]
                        source = choice * width + position
                        goal = entry
                entry = following[entry]
            if source < 0:
                break
            amount = min(need, carried[source])
            giver = servers[source // width, source % width]
            carried[source] -= amount
            carried[goal] += amount
            load[giver] -= amount
            load[taker] += amount
            need -= amount


@compiled
def put_back(members, servers, head, following, carried, load, base_carried, base_load):
    """Restore all that these servers' choices carry, and their loads."""
    width = servers.shape[1]
    for server in members:
        load[server] = base_load[server]
        entry = head[server]
        while entry >= 0:
            start = entry // width * width
            for place in range(start, start + width):
                carried[place] = base_carried[place]
            entry = following[entry]


@compiled
def add(total, lost, amount):
    """Add with Neumaier's compensation (1974): the sum is `total` + `lost`."""
    after = total + amount
    if abs(total) >= abs(amount):
        return after, lost + ((total - after) + amount)
    return after, lost + ((amount - after) + total)
