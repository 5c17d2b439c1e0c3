"""Compiled: the level that the work of lost servers cannot be spread below, and the servers that prove it."""

from labkit.compiled import compiled
from labkit.survey.flow import LAST_PLACES, ROUNDING, measure_heights, settle
from labkit.survey.outage_region import REACHED, add, expand, pull

# Rounds after which `settle` ends without a last look at the heights; each takes a stamp at least.
GIVES_UP = 20


@compiled
def settle_firmly(
    members, level, servers, head, following, carried, capacity, load, active, height, current, waiting, line,
    seen, stamp,
):  # fmt: skip
    """Settle the members (1 in `active`) and return the stamp; heights then tell truly who is stuck."""
    before = stamp
    _, stamp = settle(
        members, 1, level, servers, head, following, carried, capacity, load, active, height, current,
        waiting, line, seen, stamp,
    )  # fmt: skip
    if stamp - before >= GIVES_UP:
        # A trifle of room that rounding neither fills nor closes kept it busy, and now counts as none.
        stamp += 1
        measure_heights(
            members, 1, level, ROUNDING, servers, head, following, carried, capacity, load, active, height,
            seen, stamp, line,
        )  # fmt: skip
    return stamp


@compiled
def find_level(
    floor, count, one, other, servers, head, following, carried, capacity, load, of_block, known, region,
    inner, active, height, current, waiting, line, seen, stamp,
):  # fmt: skip
    """Raise the level from `floor` until no work in the region is stuck above it.

    Newton's method on ratios (W. Dinkelbach, "On nonlinear fractional programming", Management Science 13,
    1967): the servers that are stuck above a level are a closed set, whose ratio is the next level.

    Returns
    -------
    level : float
    before : float
        The level below: all but the last closed set have no more than that. `floor` when nothing was stuck.
    members : int
        The first of `inner` are the last closed set, marked 1 in `active`.
    sure : bool
        Whether rounding had no part in it.
    count : int
        Servers in the region.
    stamp : int
    """
    level = before = floor
    own = False  # whether the level is the ratio of just the members
    least = 0
    while True:
        count, open_ends = expand(
            count, least, floor, -1, one, other, servers, head, following, carried, capacity, load, of_block,
            known, region,
        )  # fmt: skip
        for place in range(count):
            inner[place] = region[place]
            active[region[place]] = 1
            height[region[place]] = count
        if open_ends == 0:
            # A closed set itself: its ratio is a bound that costs nothing.
            _, ratio, _ = stuck_part(inner[:count], height, load, capacity)
            if ratio > level:
                level = ratio
                own = True
                pull(region[:count], level, servers, head, following, carried, capacity, load, known, current)
        stamp = settle_firmly(
            inner[:count], level, servers, head, following, carried, capacity, load, active, height,
            current, waiting, line, seen, stamp,
        )  # fmt: skip
        open_ends = 0
        for place in range(count):
            server = region[place]
            if known[server] == REACHED and height[server] >= count:
                open_ends += 1
        if open_ends == 0:
            break
        least = 2 * count
    members = count
    sure = True
    while True:
        kept, ratio, highest = stuck_part(inner[:members], height, load, capacity)
        if kept == 0:
            break
        if ratio <= level * (1.0 + LAST_PLACES) or (own and kept == members):
            if highest <= level * (1.0 + ROUNDING):
                break
            # Rounding took what little room there was, and hides a smaller set with a higher ratio.
            sure = False
            for place in range(kept, members):
                active[inner[place]] = 0
            members = kept
            stamp += 1
            measure_heights(
                inner[:members], 1, level, -ROUNDING, servers, head, following, carried, capacity, load,
                active, height, seen, stamp, line,
            )  # fmt: skip
            kept, ratio, highest = stuck_part(inner[:members], height, load, capacity)
            if kept == 0 or kept == members or ratio <= level * (1.0 + LAST_PLACES):
                break
        before = level
        level = ratio
        own = True
        for place in range(kept, members):
            active[inner[place]] = 0
        members = kept
        stamp = settle_firmly(
            inner[:members], level, servers, head, following, carried, capacity, load, active, height,
            current, waiting, line, seen, stamp,
        )  # fmt: skip
    return level, before, members, sure, count, stamp


@compiled
def find_ties(
    level, sealed, count, one, other, servers, head, following, carried, capacity, load, of_block, known,
    region, inner, active, height, current, waiting, line, seen, stamp,
):  # fmt: skip
    """Find the largest closed set of the region above `level`, which lies a trifle below the optimum.

    Returns how many servers it has (the first of `inner`), how many the region has, and the stamp.
    """
    while True:
        count, _ = expand(
            count, 0, level, sealed, one, other, servers, head, following, carried, capacity, load, of_block,
            known, region,
        )  # fmt: skip
        members = 0
        candidates = 0
        for place in range(count):
            server = region[place]
            active[server] = 0
            if of_block[server] != sealed:
                active[server] = 1
                inner[members] = server
                members += 1
                if load[server] >= level * capacity[server]:
                    candidates += 1
        if candidates == 0:
            return 0, count, stamp
        stamp = settle_firmly(
            inner[:members], level, servers, head, following, carried, capacity, load, active, height,
            current, waiting, line, seen, stamp,
        )  # fmt: skip
        open_ends = 0
        for place in range(members):
            server = inner[place]
            if known[server] == REACHED and height[server] >= members:
                open_ends += 1
        if open_ends == 0:
            break
    kept, _, _ = stuck_part(inner[:members], height, load, capacity)
    return kept, count, stamp


@compiled
def stuck_part(members, height, load, capacity):
    """Bring the members that cannot reach room to the front.

    Returns how many they are, their ratio of work to capacity, and their highest utilisation.
    """
    limit = members.size
    kept = 0
    work, work_lost = 0.0, 0.0
    room, room_lost = 0.0, 0.0
    highest = 0.0
    for place in range(limit):
        server = members[place]
        if height[server] >= limit:
            members[place], members[kept] = members[kept], server
            kept += 1
            work, work_lost = add(work, work_lost, load[server])
            room, room_lost = add(room, room_lost, capacity[server])
            highest = max(highest, load[server] / capacity[server])
    return kept, (work + work_lost) / (room + room_lost) if kept > 0 else 0.0, highest


@compiled
def confined_ratio(
    members, sealed, one, other, servers, head, following, demand, capacity, of_block, active, seen, stamp
):
    """Return (demand confined to the members) / (their capacity), counted choice by choice.

    Members are marked 1 in `active`, and no others; options that are lost or of the block `sealed` do not
    count against a choice.
    """
    width = servers.shape[1]
    work, work_lost = 0.0, 0.0
    room, room_lost = 0.0, 0.0
    for server in members:
        room, room_lost = add(room, room_lost, capacity[server])
        entry = head[server]
        while entry >= 0:
            choice = entry // width
            if seen[choice] != stamp:
                seen[choice] = stamp
                inside = True
                for position in range(width):
                    option = servers[choice, position]
                    if option < 0:
                        break
                    if option != one and option != other:
                        inside = inside and (active[option] == 1 or of_block[option] == sealed)
                if inside:
                    work, work_lost = add(work, work_lost, demand[choice])
            entry = following[entry]
    return (work + work_lost) / (room + room_lost)
