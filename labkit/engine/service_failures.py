"""Servers that go down and come back, and what becomes of the tasks on them."""

import numpy as np

from labkit.compiled import compiled, next_raw
from labkit.engine.arrivals import draw_from_all, options_in
from labkit.engine.queues import (
    AMOUNT,
    ARRIVAL,
    CLOCK,
    DOWN,
    FCFS,
    FINISH,
    HEAD,
    HELD,
    LOST,
    NEED,
    NEXT,
    OVERLAP,
    PACE,
    REQUEUED,
    ROOM,
    ROW,
    SHARED,
    SINCE,
    START,
    WAITED,
    WINDOW,
    account,
    foresee,
    join,
    leave,
    push,
)
from labkit.engine.service_loop import note_next


@compiled
def pick_open(
    options, line, count, row, coin, own, state, seen, weights, by_table, server, place, limits, divert,
    keeps_waiting,
):  # fmt: skip
    """Stand for `labkit.engine.service_loop.pick_open` until `specialise` puts the policy's own there."""
    return np.int64(0)


def take_down(server, place, pool, loads, tally, counts, hist, by_level, v, now, discipline):
    """Stop a server: its tasks stay, and its clock stands still."""
    while server[v, NEXT] <= now:
        leave(server, place, pool, loads, tally, counts, hist, by_level, v, discipline)
    account(server, place, loads, tally, by_level, v, now, discipline)
    held = place[v, HELD]
    if discipline == SHARED and held > 0:
        server[v, CLOCK] += (now - server[v, SINCE]) / (held * server[v, PACE])
        server[v, SINCE] = now
    server[v, DOWN] = now
    server[v, NEXT] = np.inf


def bring_up(server, place, pool, loads, tally, by_level, v, now, discipline):
    """Let a server go on where it stopped."""
    account(server, place, loads, tally, by_level, v, now, discipline)
    pause = now - server[v, DOWN]
    server[v, DOWN] = -1.0
    if discipline == SHARED:
        server[v, SINCE] = now
    else:
        for index in range(place[v, HELD]):
            item = place[v, START] + ((place[v, HEAD] + index) & (place[v, ROOM] - 1))
            pool[item, FINISH] += pause
        if discipline == FCFS:
            server[v, CLOCK] += pause
    if place[v, HELD] > 0:
        foresee(server, place, pool, v, discipline)


@compiled
def clear(server, place, loads, v):
    """Leave a server that is down without tasks."""
    place[v, HELD] = 0
    place[v, HEAD] = 0
    loads[v] = 0.0
    server[v, CLOCK] = 0.0


def lose_all(server, place, pool, loads, tally, counts, v, now):
    """Drop the tasks of a server that has just gone down."""
    for index in range(place[v, HELD]):
        item = place[v, START] + ((place[v, HEAD] + index) & (place[v, ROOM] - 1))
        tally[OVERLAP] += now - max(pool[item, ARRIVAL], tally[WINDOW])
    counts[LOST] += place[v, HELD]
    clear(server, place, loads, v)


def requeue_all(
    table, servers, distinct, moves, discipline, by_table, own, state, weights, limits, server, place, pool,
    loads, seen, calendar, tally, counts, hist, by_level, v, now,
):  # fmt: skip
    """Send the tasks of a server that has just gone down to other options, in order of arrival.

    A task none of whose options is open waits where it is, with what it has got so far. On a fleet without a
    table of choices a task draws its options anew.

    Parameters
    ----------
    table : uint32 array, shape (choices, options)
        The fleet's choices; without rows for a fleet that lists none.
    servers : uint64, distinct : bool
        The law of such a fleet.
    moves : uint64 array, shape (4,), changed in place
        The stream of coins, and of options drawn anew.
    seen : read-only float64 array, shape (servers,)
        What the policy sees.
    """
    held = place[v, HELD]
    tasks = np.empty((held, 5))
    left = np.empty(held)
    before = now
    for index in range(held):
        tasks[index] = pool[place[v, START] + ((place[v, HEAD] + index) & (place[v, ROOM] - 1))]
        left[index] = tasks[index, FINISH] - before
        before = tasks[index, FINISH]
    clock = server[v, CLOCK]
    clear(server, place, loads, v)
    stays = np.zeros(held, np.bool_)
    options = np.empty((2, table.shape[1]), np.uint32)
    coins = np.empty(1, np.uint64)
    for index in np.argsort(tasks[:, ARRIVAL], kind="mergesort"):
        row = np.uint64(tasks[index, ROW])
        count = 0
        if servers > np.uint64(0):
            draw_from_all(servers, distinct, moves, loads, options, coins, 1)
            count = options_in(options, np.uint64(0))
        elif row < np.uint64(table.shape[0]):
            options[0] = table[row]
            coins[0] = next_raw(moves)
            count = options_in(options, np.uint64(0))
        for position in range(count):
            other = np.uint64(options[0, position])
            while server[other, NEXT] <= now:
                leave(server, place, pool, loads, tally, counts, hist, by_level, other, discipline)
        target = np.int64(-1)
        if count > 0:
            target = pick_open(
                options, np.uint64(0), count, row, coins[0], own, state, seen, weights, by_table, server,
                place, limits, True, False,
            )  # fmt: skip
        if target == -3:
            return -1
        counts[REQUEUED] += target >= 0
        counts[WAITED] += target < 0
        if target < 0:
            stays[index] = True
            continue
        u = np.uint64(target)
        arrival, need, amount = tasks[index, ARRIVAL], tasks[index, NEED], tasks[index, AMOUNT]
        join(
            server, place, pool, loads, tally, counts, by_level, u, now, arrival, need, row, amount,
            discipline,
        )  # fmt: skip
        if calendar.size > 1:
            note_next(calendar, u, server[u, NEXT])
    put_back(server, place, pool, loads, tasks, left, stays, clock, v, now, discipline)
    return 0


@compiled
def put_back(server, place, pool, loads, tasks, left, stays, clock, v, now, discipline):
    """Give a server that is down those of its tasks that stay, with what they have got so far."""
    finish = now
    held = 0
    for index in range(stays.size):
        if not stays[index]:
            continue
        if discipline == FCFS:
            finish += left[index]
            item = place[v, START] + held
        else:
            finish = tasks[index, FINISH]
            item = push(pool, place[v, START], held, finish)
        pool[item] = tasks[index]
        pool[item, FINISH] = finish
        loads[v] += tasks[index, AMOUNT]
        held += 1
    place[v, HELD] = held
    if held > 0:
        server[v, CLOCK] = finish if discipline == FCFS else clock


def set_next(server, calendar, v):
    """Put a server's next departure into the calendar."""
    note_next(calendar, v, server[v, NEXT])
