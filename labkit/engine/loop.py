"""The placement loop: one for all policies, information models, arrival laws and task sizes."""

import numpy as np

from labkit.compiled import advance, copy_into, inlined, multiply_wide, next_raw
from labkit.engine.arrivals import AHEAD, draw_from_all, draw_from_table, options_in
from labkit.engine.measures import measure


@inlined
def choose(state, seen, weights, options, row, count, choice, coin, own):
    """Stand for the policy's chooser until `labkit.compiled.specialise` puts it in place."""
    return np.uint64(0)


@inlined
def renew(state, seen):
    """Stand for what the policy works out now and then, until `labkit.compiled.specialise` puts it there."""


@inlined
def after(state, loads, weights, options, row, count, server, amount, fresh):
    """Stand for what the policy does after a placement, until `labkit.compiled.specialise` puts it there."""


def place_near(
    options,
    several,
    arrival_state,
    own,
    state,
    weights,
    sizes,
    loads,
    seen,
    fresh,
    first,
    start,
    stop,
):
    """Place the tasks ``start + 1 .. stop``, each as it is drawn; see `place_tasks`.

    Demands are equal here. With unequal ones the coin takes a division, which the compiler would put behind a
    branch on ties, and that cannot be predicted.
    """
    choices = np.uint64(options.shape[0])
    a, b, c, counter = arrival_state[0], arrival_state[1], arrival_state[2], arrival_state[3]
    failed = 0
    for task in range(start, stop):
        word, a, b, c, counter = advance(a, b, c, counter)
        row, coin = multiply_wide(word, choices)
        count = 2 if several is None else options_in(options, row)
        position = choose(state, seen, weights, options, row, count, row, coin, own)
        if position >= np.uint64(count):
            failed = task + 1
            break
        server = np.uint64(options[row, position])
        amount = 1 if sizes is None else sizes[np.uint64(task - first)]
        loads[server] += amount
        after(state, loads, weights, options, row, count, server, amount, fresh)
    arrival_state[0], arrival_state[1], arrival_state[2], arrival_state[3] = a, b, c, counter
    return failed


def place_drawn(
    picked, coins, rows, batch, several, own, state, weights, sizes, loads, seen, fresh, first, start
):  # fmt: skip
    """Place the `batch` tasks after `start` that were drawn ahead; see `place_tasks`."""
    for index in range(batch):
        row = np.uint64(index)
        count = 2 if several is None else options_in(picked, row)
        position = choose(state, seen, weights, picked, row, count, rows[row], coins[row], own)
        if position >= np.uint64(count):
            return start + index + 1
        server = np.uint64(picked[row, position])
        amount = 1 if sizes is None else sizes[np.uint64(start + index - first)]
        loads[server] += amount
        after(state, loads, weights, picked, row, count, server, amount, fresh)
    return 0


def place_shared(
    picked, coins, rows, batch, several, own, state, weights, sizes, loads, pictures, turns, first, start
):  # fmt: skip
    """Place the `batch` tasks after `start` that were drawn ahead, each by one of several dispatchers.

    Dispatcher d sees `pictures[d]`: the last report with its own placements added.
    """
    dispatchers = np.uint64(pictures.shape[0])
    for index in range(batch):
        row = np.uint64(index)
        count = 2 if several is None else options_in(picked, row)
        picture = pictures[multiply_wide(next_raw(turns), dispatchers)[0]]
        position = choose(state, picture, weights, picked, row, count, rows[row], coins[row], own)
        if position >= np.uint64(count):
            return start + index + 1
        server = np.uint64(picked[row, position])
        amount = 1 if sizes is None else sizes[np.uint64(start + index - first)]
        loads[server] += amount
        picture[server] += amount
        after(state, loads, weights, picked, row, count, server, amount, False)
    return 0


def place_tasks(
    arrivals, several, arrival_state, own, state, capacity, weights, sizes, loads, seen, report, every,
    pictures, turns, renewal, ahead, first, last, checkpoints, demand, pairs_of, out,
):  # fmt: skip
    """Place the tasks ``first + 1 .. last`` of one replicate and measure at the checkpoints among them.

    Parameters
    ----------
    arrivals : Arrivals
    several : bool or None
        None when every choice has exactly two options: the loop is then compiled for pairs.
    arrival_state, own : uint64 arrays, shape (4,)
        The stream of arrivals and the policy's own stream, changed in place.
    state : tuple
        The policy's prepared state.
    capacity : float64 array, shape (servers,), or None when all are one
    weights : float64 array, shape (servers,), or None when all are equal
        The capacities as choosers compare them (`labkit.engine.weights`).
    sizes : float64 array, shape (last - first,), or None for unit tasks
    loads : int64 (unit tasks) or float64 array, shape (servers,), changed in place
    seen : read-only array like `loads`
        What the policy sees: a view of `loads` when information is fresh, else of `report`.
    report : array like `loads`
        The last snapshot, changed in place; `loads` itself when information is fresh.
    every : int
        A snapshot is taken just before the tasks 1, every + 1, 2 every + 1, ...; 0 when information is fresh.
    pictures : array, shape (dispatchers, servers), or None when all loads are seen alike
        What each dispatcher sees, changed in place.
    turns : uint64 array, shape (4,)
        The stream that says which dispatcher gets a task, changed in place.
    renewal : int
        The policy's `renew` is called just before the tasks 1, renewal + 1, ...; 0 for never; below 0 for
        just before the first task and with each report.
    ahead : bool or None
        Draw arrivals ahead of their placement: for fleets larger than cache, without a table of choices, or
        with unequal demands; else None, so that only the loop in use is compiled.
    first, last : int
    checkpoints : int64 array
        Increasing; those in (first, last] are measured, just after their placement.
    demand, pairs_of
        See `labkit.engine.measures.measure`.
    out : float64 array, shape (checkpoints, measures), changed in place

    Returns
    -------
    int
        0, or the number of the task whose chooser named a position outside its choice.
    """
    picked = np.empty((AHEAD, arrivals.options.shape[1]), np.uint32)
    coins = np.empty(AHEAD, np.uint64)
    rows = np.zeros(AHEAD, np.uint64)
    mark = 0
    while mark < checkpoints.size and checkpoints[mark] <= first:
        mark += 1
    done = first
    while done < last:
        stop = last
        if mark < checkpoints.size and checkpoints[mark] < stop:
            stop = checkpoints[mark]
        if every > 0:
            if done % every == 0:
                copy_into(report, loads)
                if pictures is not None:
                    for dispatcher in range(pictures.shape[0]):
                        copy_into(pictures[dispatcher], loads)
                if renewal < 0:
                    renew(state, seen)
            stop = min(stop, done - done % every + every)
        elif renewal < 0 and done == 0:
            renew(state, seen)
        if renewal > 0:
            if done % renewal == 0:
                renew(state, seen)
            stop = min(stop, done - done % renewal + renewal)
        failed = 0
        if ahead is None:
            failed = place_near(
                arrivals.options, several, arrival_state, own, state, weights, sizes, loads, seen,
                every == 0, first, done, stop,
            )  # fmt: skip
            done = stop
        else:
            while done < stop and failed == 0:
                batch = min(AHEAD, stop - done)
                if arrivals.servers == np.uint64(0):
                    draw_from_table(
                        arrivals.options, arrivals.threshold, arrivals.alias, arrival_state, seen,
                        picked, coins, rows, batch,
                    )  # fmt: skip
                else:
                    draw_from_all(
                        arrivals.servers, arrivals.distinct, arrival_state, seen, picked, coins, batch
                    )
                if pictures is None:
                    failed = place_drawn(
                        picked, coins, rows, batch, several, own, state, weights, sizes, loads, seen,
                        every == 0, first, done,
                    )  # fmt: skip
                else:
                    failed = place_shared(
                        picked, coins, rows, batch, several, own, state, weights, sizes, loads, pictures,
                        turns, first, done,
                    )  # fmt: skip
                done += batch
        if failed:
            return failed
        if mark < checkpoints.size and done == checkpoints[mark]:
            measure(loads, capacity, arrivals.options, demand, pairs_of, out[mark])
            mark += 1
    return 0
