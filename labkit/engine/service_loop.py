"""The loop for work that leaves: one for all rules, disciplines, information models, limits and failures."""

import numpy as np

from labkit.compiled import borrowed, compiled, folded, multiply_wide, next_raw
from labkit.engine.arrivals import options_in

# Stand-ins, until `labkit.compiled.specialise` puts the policy's own in their place.
from labkit.engine.loop import after, choose, renew
from labkit.engine.queues import (
    AMOUNT,
    ARRIVED,
    BLOCKED,
    DOWN,
    HEAD,
    HELD,
    LARGEST,
    LOST,
    NEXT,
    RENEW,
    REPORT,
    SEEN,
    START,
    USED,
    WAITED,
    join,
    leave,
    settle_all,
)
from labkit.policies.least_loaded import least_fair


@folded
def note_next(calendar, v, time):
    """Put a server's next departure into the calendar, a tree whose root is the earliest of all."""
    node = (np.uint64(calendar.size) >> np.uint64(1)) + v
    calendar[node] = time
    while node > np.uint64(1):
        node >>= np.uint64(1)
        one, other = calendar[node << np.uint64(1)], calendar[(node << np.uint64(1)) + np.uint64(1)]
        calendar[node] = min(one, other)


@folded
def earliest(calendar):
    """Return the server whose departure is the next of all."""
    node = np.uint64(1)
    half = np.uint64(calendar.size) >> np.uint64(1)
    while node < half:
        node <<= np.uint64(1)
        node += np.uint64(calendar[node] > calendar[node + np.uint64(1)])
    return node - half


@folded
def is_open(server, place, limits, v):
    """Tell whether a server is up and has a place."""
    return server[v, DOWN] < 0.0 and place[v, HELD] < limits[v]


@compiled
def gather_open(options, line, count, server, place, limits):
    """Write the open options of a line into the last line; return how many there are."""
    extra = np.uint64(options.shape[0] - 1)
    found = 0
    for position in range(count):
        v = options[line, np.uint64(position)]
        if is_open(server, place, limits, np.uint64(v)):
            options[extra, np.uint64(found)] = v
            found += 1
    return found


@compiled
def where_to_wait(options, line, count, server, place, limits, picked):
    """Return where a task waits whose options are all down: the picked one if it has a place, else the first.

    Returns
    -------
    int
        A position; -1 when an option is up, -2 when none has a place.
    """
    found = -2
    for position in range(count):
        v = np.uint64(options[line, np.uint64(position)])
        if server[v, DOWN] < 0.0:
            return -1
        if place[v, HELD] < limits[v] and (found < 0 or np.uint64(position) == picked):
            found = position
    return found


@compiled
def publish(loads, report, pictures, shared):
    """Report the loads, to every dispatcher when there are several."""
    for server in range(loads.size):
        report[server] = loads[server]
    if shared:
        for dispatcher in range(pictures.shape[0]):
            for server in range(loads.size):
                pictures[dispatcher, server] = loads[server]


def pick_open(
    options, line, count, row, coin, own, state, seen, weights, by_table, server, place, limits, divert,
    keeps_waiting,
):  # fmt: skip
    """Return the server for a task, or what becomes of it when there is none.

    Returns
    -------
    int
        The server's position in the fleet; -1: no option has a place; -2: all are down; -3: the policy named
        a position outside the choice.
    """
    position = choose(state, seen, weights, options, line, count, row, coin, own)
    if position >= np.uint64(count):
        return np.int64(-3)
    v = np.uint64(options[line, position])
    if is_open(server, place, limits, v):
        return np.int64(v)
    if not divert and server[v, DOWN] < 0.0:
        return np.int64(-1)
    found = gather_open(options, line, count, server, place, limits)
    extra = np.uint64(options.shape[0] - 1)
    if found == 1:
        return np.int64(options[extra, np.uint64(0)])
    if found > 1:
        # What the coin has not decided yet: the same coin again would favour some of the open ones.
        rest = multiply_wide(coin, np.uint64(count))[1]
        if by_table:
            position = least_fair(seen, weights, options, extra, found, rest)
        else:
            position = choose(state, seen, weights, options, extra, found, row, rest, own)
        return np.int64(options[extra, position]) if position < np.uint64(found) else np.int64(-3)
    waits = where_to_wait(options, line, count, server, place, limits, position)
    if waits == -1 or not keeps_waiting:
        return np.int64(-1 if waits == -1 else -2)
    return np.int64(options[line, np.uint64(waits)]) if waits >= 0 else np.int64(-1)


def serve_tasks(
    times, options, coins, rows, needs, amounts, begin, stop, until, discipline, far, every, shared, renewal,
    guarded, by_table, divert, keeps_waiting, own, turns, state, weights, limits, server, place, pool, loads,
    report, pictures, seen, calendar, tally, counts, hist, by_level,
):  # fmt: skip
    """Serve the arrivals ``begin .. stop - 1`` of a batch, as far as they come before `until`.

    Parameters
    ----------
    times : float64 array, shape (tasks,)
        When they arrive, not falling.
    options : uint32 array, shape (tasks + 1, options)
        Where each may go; the last line is room for the open ones among them.
    coins, rows : uint64 arrays, shape (tasks,)
        The coin of each, and the number of its choice in the fleet's table.
    needs, amounts : float64 arrays, shape (tasks,)
        Service requirement and size of each.
    begin, stop : int
    until : float
        Tasks that arrive at this time or later are left.
    discipline : int
        `FCFS`, `SHARED`, `SESSIONS` or `STAYS`.
    far : bool
        The policy looks at servers beyond the options, with fresh information: departures are then followed
        one by one over the whole fleet.
    every : float
        Time from one report of the loads to the next; 0 when information is fresh.
    shared : bool
        Several dispatchers, each with a picture of its own.
    renewal : int
        As in `labkit.engine.loop.place_tasks`, in arrivals.
    guarded : bool
        There are limits or failures.
    by_table : bool
        The policy's tables go by position, so that it cannot pick among the open options only.
    divert, keeps_waiting : bool
        A task whose server is full goes to another option; one whose options are all down waits.
    own, turns : uint64 arrays, shape (4,), changed in place
    state, weights
        As in `labkit.engine.loop.place_tasks`.
    limits : int64 array, shape (servers,), or (0,) when not guarded
    server, place, pool, loads, tally, counts, hist, by_level
        See `labkit.engine.queues`; changed in place.
    report : float64 array, shape (servers,), changed in place
        The last report; `loads` itself when information is fresh.
    pictures : float64 array, shape (dispatchers, servers), changed in place
        What each dispatcher sees; one row that shares the memory of `report` when all see the same.
    seen : read-only view of `pictures`
    calendar : float64 array, shape (2 × power of two,), changed in place
        The next departure of each server, for `far`.

    Returns
    -------
    int
        How many arrivals of the batch are done: fewer than `stop` when the next one comes at `until` or
        later, or when the pool may not hold it. Below 0: minus the number, from 1, of the arrival whose
        chooser named a position outside its choice.
    """
    # Nobody lets go of these arrays meanwhile, and counting shares in them would take most of the time.
    times, options, coins, rows = borrowed(times), borrowed(options), borrowed(coins), borrowed(rows)
    needs, amounts, limits, calendar = (
        borrowed(needs),
        borrowed(amounts),
        borrowed(limits),
        borrowed(calendar),
    )
    server, place, pool, loads = borrowed(server), borrowed(place), borrowed(pool), borrowed(loads)
    tally, counts, hist, by_level = borrowed(tally), borrowed(counts), borrowed(hist), borrowed(by_level)
    report, pictures, seen = borrowed(report), borrowed(pictures), borrowed(seen)
    dispatchers = np.uint64(pictures.shape[0])
    if counts[RENEW] > 0:
        counts[RENEW] = 0
        renew(state, seen[0])
    done, failed = stop, 0
    before = counts[SEEN] - begin
    for index in range(begin, stop):
        k = np.uint64(index)
        now = times[k]
        if now >= until or counts[USED] + 2 * counts[LARGEST] + 2 > pool.shape[0]:
            done = index
            break
        count = options_in(options, k)
        if far:
            while calendar[np.uint64(1)] <= now:
                v = earliest(calendar)
                amount = pool[np.uint64(place[v, START] + place[v, HEAD]), AMOUNT]
                leave(server, place, pool, loads, tally, counts, hist, by_level, v, discipline)
                note_next(calendar, v, server[v, NEXT])
                after(state, loads, weights, options, k, count, v, -amount, True)
        elif every == 0.0:
            for position in range(count):
                v = np.uint64(options[k, np.uint64(position)])
                while server[v, NEXT] <= now:
                    leave(server, place, pool, loads, tally, counts, hist, by_level, v, discipline)
        elif now >= tally[REPORT]:
            tally[REPORT] = min(np.floor(now / every) * every, now)
            settle_all(server, place, pool, loads, tally, counts, hist, by_level, tally[REPORT], discipline)
            publish(loads, report, pictures, shared)
            if renewal < 0:
                renew(state, seen[0])
            tally[REPORT] += every
        if renewal < 0:
            if before + index == 0 and every == 0.0:
                renew(state, seen[0])
        elif renewal > 0 and (before + index) % renewal == 0:
            if every == 0.0:
                settle_all(server, place, pool, loads, tally, counts, hist, by_level, now, discipline)
            renew(state, seen[0])
        turn = multiply_wide(next_raw(turns), dispatchers)[0] if shared else np.uint64(0)
        picture = seen[turn]
        if guarded:
            for position in range(count if every > 0.0 else 0):
                v = np.uint64(options[k, np.uint64(position)])
                while server[v, NEXT] <= now:
                    leave(server, place, pool, loads, tally, counts, hist, by_level, v, discipline)
            target = pick_open(
                options, k, count, rows[k], coins[k], own, state, picture, weights, by_table, server, place,
                limits, divert, keeps_waiting,
            )  # fmt: skip
            if target == -3:
                done, failed = index, index + 1
                break
            if target < 0:
                counts[BLOCKED] += target == -1
                counts[LOST] += target == -2
                continue
            v = np.uint64(target)
            counts[WAITED] += server[v, DOWN] >= 0.0
        else:
            position = choose(state, picture, weights, options, k, count, rows[k], coins[k], own)
            if position >= np.uint64(count):
                done, failed = index, index + 1
                break
            v = np.uint64(options[k, position])
        if every > 0.0:
            while server[v, NEXT] <= now:
                leave(server, place, pool, loads, tally, counts, hist, by_level, v, discipline)
        join(
            server, place, pool, loads, tally, counts, by_level, v, now, now, needs[k], rows[k], amounts[k],
            discipline,
        )  # fmt: skip
        if shared:
            pictures[turn, v] += amounts[k]
        if far:
            note_next(calendar, v, server[v, NEXT])
        after(state, loads, weights, options, k, count, v, amounts[k], every == 0.0)
    counts[SEEN] += done - begin
    counts[ARRIVED] += done - begin
    if failed:
        return -failed
    if done == stop or times[np.uint64(done)] < until:
        return done
    # What happens at `until` must not show in a report of before.
    if every > 0.0 and tally[REPORT] < until:
        tally[REPORT] = max(tally[REPORT], min((np.ceil(until / every) - 1.0) * every, until))
        settle_all(server, place, pool, loads, tally, counts, hist, by_level, tally[REPORT], discipline)
        publish(loads, report, pictures, shared)
        if renewal < 0:
            renew(state, seen[0])
        tally[REPORT] += every
    if far:
        while calendar[np.uint64(1)] <= until:
            v = earliest(calendar)
            amount = pool[np.uint64(place[v, START] + place[v, HEAD]), AMOUNT]
            leave(server, place, pool, loads, tally, counts, hist, by_level, v, discipline)
            note_next(calendar, v, server[v, NEXT])
            after(state, loads, weights, options, np.uint64(0), 2, v, -amount, True)
    return done
