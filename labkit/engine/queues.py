"""What servers hold when work leaves: a queue or a heap each in one common pool, and how tasks come and go.

Nothing happens on a server between arrivals but departures that are known beforehand, so a server is brought
up to date only when somebody looks at it: `settle` lets all tasks leave that are due. Whoever looks, and how
often, changes no bit, because a server's numbers change only at its own arrivals and departures.

Arrays, all changed in place
----------------------------
server : float64, shape (servers, 9)
    Columns `NEXT` and on, below.
place : int64, shape (servers, 4)
    Columns `START` and on: which part of the pool a server holds its tasks in.
pool : float64, shape (tasks that fit, 5)
    One row a task, columns `FINISH` and on. First-come-first-served: a ring; else a heap by `FINISH`.
loads : float64, shape (servers,)
    Total size of the tasks on a server.
tally : float64; counts : int64; hist : int64, shape (2, BINS); by_level : float64
    What is measured: `SOJOURN` and on, `USED` and on, counts of sojourn and waiting times in bins, time of
    each server with 0, 1, 2 ... tasks.
"""

import numpy as np

from labkit.compiled import bits_of, compiled, folded
from labkit.fleet.model import ABSENT

FCFS, SHARED, SESSIONS, STAYS = 0, 1, 2, 3
NOBODY = np.uint32(ABSENT)

# Columns of `server`. CLOCK: work that each task has got since the server was last empty (processor sharing),
# or when the last task will leave (first-come-first-served); SINCE: when CLOCK was worked out; PACE: time a
# unit of work; DOWN: since when the server is down, below 0 while it is up; PEAK: its highest load.
NEXT, COUNTED, CLOCK, SINCE, AREA, WORK, PACE, DOWN, PEAK = range(9)
# Columns of `place`: first row in the pool, how many rows, first task of a ring, number of tasks.
START, ROOM, HEAD, HELD = range(4)
# Columns of `pool`. FINISH: when it leaves, or with processor sharing at which CLOCK.
FINISH, ARRIVAL, NEED, ROW, AMOUNT = range(5)
# Places in `counts`: used rows of the pool, the largest part in it, arrivals so far; then what is counted.
USED, LARGEST, SEEN, RENEW = 0, 1, 2, 3
ARRIVED, COMPLETED, BLOCKED, LOST, REQUEUED, WAITED, DELAYED, LATE = range(4, 12)
FREE = 16  # and on: first free part of 2, 4, 8 ... rows, or -1
COUNTS = 64
# Places in `tally`.
SOJOURN, WAITING, OVERLAP, LONGEST, WINDOW, TARGET, REPORT, SCALE = range(8)
LEVELS = 16  # and on: time that servers spent with 0, 1, 2 ... tasks
TOP = 1023
TALLIES = LEVELS + TOP + 1
# Times are counted in bins of 1/512 of an octave, from 2⁻⁴⁰ to 2⁵⁶, after they were multiplied by `SCALE`.
BINS = 96 << 9
_LOWEST = (1023 - 40) << 9
# A wait below this share of the clock is rounding.
ROUNDING = 1e-13


@folded
def bin_of(time):
    """Return the bin that a time is counted in."""
    return np.uint64(min(max((bits_of(time) >> 43) - _LOWEST, 0), BINS - 1))


@folded
def account(server, place, loads, tally, by_level, v, now, discipline):
    """Add up how long the server was as it is, until now."""
    span = now - server[v, COUNTED]
    server[v, COUNTED] = now
    level = place[v, HELD]
    server[v, AREA] += level * span
    if discipline >= SESSIONS:
        server[v, WORK] += loads[v] * span
    elif level > 0 and server[v, DOWN] < 0.0:
        server[v, WORK] += span
    tally[np.uint64(LEVELS + min(level, TOP))] += span
    if by_level.shape[0] > 0:
        by_level[v, np.uint64(min(level, by_level.shape[1] - 1))] += span


@folded
def copy_item(pool, source, target):
    """Copy one task within the pool."""
    for column in range(5):
        pool[target, np.uint64(column)] = pool[source, np.uint64(column)]


@compiled
def enlarge(place, pool, counts, v):
    """Give a server twice the room; the pool has it free, since the loop looks before each arrival."""
    old = place[v, ROOM]
    room = 2 * old if old > 0 else 2
    kind = FREE
    while 1 << (kind - FREE + 1) < room:
        kind += 1
    start = counts[kind]
    if start >= 0:
        counts[kind] = np.int64(pool[start, FINISH])
    else:
        start = counts[USED]
        counts[USED] += room
    first = place[v, START]
    for index in range(place[v, HELD]):
        source = first + ((place[v, HEAD] + index) & (old - 1))
        copy_item(pool, np.uint64(source), np.uint64(start + index))
    if old > 0:
        pool[first, FINISH] = counts[kind - 1]
        counts[kind - 1] = first
    place[v, START], place[v, ROOM], place[v, HEAD] = start, room, 0
    counts[LARGEST] = max(counts[LARGEST], room)


@folded
def push(pool, start, held, finish):
    """Return where a new task goes in a heap of `held` tasks, after moving others down."""
    index = held
    while index > 0:
        parent = (index - 1) >> 1
        if pool[np.uint64(start + parent), FINISH] <= finish:
            break
        copy_item(pool, np.uint64(start + parent), np.uint64(start + index))
        index = parent
    return start + index


@folded
def pop(pool, start, held):
    """Take the first of `held` tasks out of a heap."""
    last = held - 1
    finish = pool[np.uint64(start + last), FINISH]
    index = 0
    while True:
        child = 2 * index + 1
        if child >= last:
            break
        if child + 1 < last and (
            pool[np.uint64(start + child + 1), FINISH] < pool[np.uint64(start + child), FINISH]
        ):
            child += 1
        if pool[np.uint64(start + child), FINISH] >= finish:
            break
        copy_item(pool, np.uint64(start + child), np.uint64(start + index))
        index = child
    copy_item(pool, np.uint64(start + last), np.uint64(start + index))


@folded
def foresee(server, place, pool, v, discipline):
    """Work out when the next task leaves the server, which has some."""
    first = pool[np.uint64(place[v, START] + place[v, HEAD]), FINISH]
    if discipline == SHARED:
        server[v, NEXT] = server[v, SINCE] + (first - server[v, CLOCK]) * place[v, HELD] * server[v, PACE]
    else:
        server[v, NEXT] = first


@folded
def join(server, place, pool, loads, tally, counts, by_level, v, now, arrival, need, row, amount, discipline):
    """Add a task to a server that is up to date, at time `now`."""
    account(server, place, loads, tally, by_level, v, now, discipline)
    held = place[v, HELD]
    if discipline != STAYS:
        if held == place[v, ROOM]:
            enlarge(place, pool, counts, v)
        down = server[v, DOWN]
        # The clock of a server that is down stands still.
        moment = now if down < 0.0 else down
        if discipline == FCFS:
            finish = max(moment, server[v, CLOCK]) + need * server[v, PACE]
            server[v, CLOCK] = finish
            item = place[v, START] + ((place[v, HEAD] + held) & (place[v, ROOM] - 1))
        else:
            if discipline == SESSIONS:
                finish = moment + need
            else:
                if held == 0:
                    server[v, CLOCK] = 0.0
                else:
                    server[v, CLOCK] += (moment - server[v, SINCE]) / (held * server[v, PACE])
                server[v, SINCE] = moment
                finish = server[v, CLOCK] + need
            item = push(pool, place[v, START], held, finish)
        here = np.uint64(item)
        pool[here, FINISH] = finish
        pool[here, ARRIVAL] = arrival
        pool[here, NEED] = need
        pool[here, ROW] = row
        pool[here, AMOUNT] = amount
    place[v, HELD] = held + 1
    if discipline != STAYS and server[v, DOWN] < 0.0:
        foresee(server, place, pool, v, discipline)
    load = loads[v] + amount
    loads[v] = load
    server[v, PEAK] = max(server[v, PEAK], load)


@folded
def leave(server, place, pool, loads, tally, counts, hist, by_level, v, discipline):
    """Let the next task of a server leave, when it is due, and count it."""
    now = server[v, NEXT]
    account(server, place, loads, tally, by_level, v, now, discipline)
    held = place[v, HELD] - 1
    start = place[v, START]
    item = np.uint64(start + place[v, HEAD])
    arrival, need, amount = pool[item, ARRIVAL], pool[item, NEED], pool[item, AMOUNT]
    place[v, HELD] = held
    if discipline == FCFS:
        place[v, HEAD] = (place[v, HEAD] + 1) & (place[v, ROOM] - 1)
    else:
        if discipline == SHARED:
            server[v, CLOCK] = pool[item, FINISH]
            server[v, SINCE] = now
        pop(pool, start, held + 1)
    if held > 0:
        loads[v] -= amount
        foresee(server, place, pool, v, discipline)
    else:
        # Sizes that were added and taken away leave no rounding behind.
        loads[v] = 0.0
        server[v, NEXT] = np.inf
    sojourn = now - arrival
    waiting = sojourn - (need if discipline == SESSIONS else need * server[v, PACE])
    waiting = waiting if waiting > ROUNDING * now else 0.0
    tally[SOJOURN] += sojourn
    tally[WAITING] += waiting
    tally[OVERLAP] += now - max(arrival, tally[WINDOW])
    tally[LONGEST] = max(tally[LONGEST], sojourn)
    counts[COMPLETED] += 1
    counts[DELAYED] += waiting > 0.0
    counts[LATE] += sojourn > tally[TARGET]
    hist[np.uint64(0), bin_of(sojourn * tally[SCALE])] += 1
    hist[np.uint64(1), bin_of(waiting * tally[SCALE])] += 1


@compiled
def settle_all(server, place, pool, loads, tally, counts, hist, by_level, now, discipline):
    """Let all tasks leave that are due by `now`."""
    for index in range(loads.size):
        v = np.uint64(index)
        while server[v, NEXT] <= now:
            leave(server, place, pool, loads, tally, counts, hist, by_level, v, discipline)


def close_interval(server, place, pool, loads, tally, counts, hist, by_level, now, discipline):
    """Bring all servers and their sums up to `now`."""
    settle_all(server, place, pool, loads, tally, counts, hist, by_level, now, discipline)
    for index in range(loads.size):
        account(server, place, loads, tally, by_level, np.uint64(index), now, discipline)


def present_overlap(place, pool, window, now):
    """Return how long, since the start of the window, the tasks that are there now have been there."""
    total = 0.0
    for v in range(place.shape[0]):
        for index in range(place[v, HELD]):
            item = place[v, START] + ((place[v, HEAD] + index) & (place[v, ROOM] - 1))
            total += now - max(pool[item, ARRIVAL], window)
    return total
