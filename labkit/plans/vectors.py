"""Test vectors of a plan: loads and draws, and the server that the compiled policy picks."""

from typing import Any

import numpy as np
import pandas as pd

from labkit.compiled import compiled, inlined, specialise
from labkit.engine.arrivals import options_in
from labkit.engine.weights import comparison_weights
from labkit.fleet.model import ABSENT, Fleet
from labkit.policies.base import Policy
from labkit.randomness import ARRIVALS, COINS, SIZES, child, generator, kernel_state
from labkit.survey.fair import fair_profile

MOST = 2**64 - 1


@inlined
def choose(state, seen, weights, options, row, count, choice, coin, own):
    """Stand for the policy's chooser until it is put in place."""
    return np.uint64(0)


@inlined
def renew(state, seen):
    """Stand for what the policy works out now and then."""


@inlined
def after(state, loads, weights, options, row, count, server, amount, fresh):
    """Stand for what the policy does after a placement."""


def decide(state, seen, known, weights, options, reports, report, choices, coins, own, drawn, picked):
    """Make decisions as a dispatcher does: report and renew where told, pick, count the task as placed.

    Parameters
    ----------
    state : tuple
        The policy's own state, changed in place.
    seen, known : float64 arrays, shape (servers,)
        The same loads, `known` read-only; changed through `seen`.
    weights : array or None
    options : uint32 array, shape (choices, options)
    reports : float64 array, shape (reports, servers)
    report : int64 array, shape (decisions,)
        Row of the loads reported just before the decision, −1 for none.
    choices, coins : uint64 arrays, shape (decisions,)
    own : uint64 array, shape (4,), changed in place
    drawn, picked : int64 arrays, shape (decisions,), changed in place
        How many words of `own` were drawn, and the server picked.
    """
    for index in range(choices.size):
        if report[index] >= 0:
            seen[:] = reports[report[index]]
            renew(state, known)
        row = choices[index]
        count = options_in(options, row)
        before = own[3]
        position = choose(state, known, weights, options, row, count, row, coins[index], own)
        server = np.uint64(options[row, position])
        drawn[index] = np.int64(own[3] - before)
        picked[index] = np.int64(server)
        seen[server] += 1.0
        after(state, seen, weights, options, row, count, server, 1.0, True)


def vectors_of(
    fleet: Fleet, rule: Policy, state: tuple[Any, ...], seed: np.random.SeedSequence, decisions: int
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return the decisions, and the loads of their reports.

    Returns
    -------
    pandas.DataFrame
        decision, report (blank but where loads are reported), choice, coin, own (words, parted by blanks),
        server.
    pandas.DataFrame
        number of the server and its load in each report.
    """
    stream = generator(seed, 0, ARRIVALS)
    reports = _reports(fleet, generator(seed, 0, SIZES))
    count = min(len(reports), decisions)
    starts = np.arange(count) * decisions // count
    report = np.full(decisions, -1)
    report[starts] = np.arange(count)
    choices = _choices(fleet, stream, decisions)
    coins = stream.integers(0, MOST, decisions, np.uint64, endpoint=True)
    coins[starts] = 0
    inside = starts[starts + 1 < np.append(starts[1:], decisions)]
    coins[inside + 1] = MOST
    own = kernel_state(seed, 0, COINS)
    drawn, picked = np.empty(decisions, np.int64), np.empty(decisions, np.int64)
    seen = np.zeros(fleet.size)
    known = seen.view()
    known.setflags(write=False)
    pieces = {"choose": inlined(rule.choose), "after": inlined(rule.after), "renew": compiled(rule.renew)}
    loop = specialise(decide, rule.kernel_name, cache=rule.cached, **pieces)
    loop(
        rule.own_state(state), seen, known, comparison_weights(fleet.capacity), fleet.options,
        reports, report, choices, coins, own, drawn, picked,
    )  # fmt: skip
    words = iter(np.random.SFC64(child(seed, 0, COINS)).random_raw(int(drawn.sum())))
    table = pd.DataFrame(
        {
            "decision": np.arange(1, decisions + 1),
            "report": pd.Series(report + 1, dtype="Int64").mask(report < 0),
            "choice": choices.astype(np.int64),
            "coin": coins,
            "own": [" ".join(str(next(words)) for _ in range(number)) for number in drawn],
            "server": picked,
        }
    )
    loads = pd.DataFrame({f"report_{number + 1}": reports[number] for number in range(count)})
    loads.insert(0, "number", np.arange(fleet.size))
    return table.astype({"own": object}), loads


def _choices(fleet: Fleet, stream: np.random.Generator, decisions: int) -> np.ndarray:
    """Draw choices; every other one among those with the most options."""
    choices = stream.integers(0, len(fleet.options), decisions)
    there = (fleet.options != ABSENT).sum(axis=1)
    widest = np.flatnonzero(there == there.max())
    choices[1::2] = stream.choice(widest, choices[1::2].size)
    return choices.astype(np.uint64)


def _reports(fleet: Fleet, stream: np.random.Generator) -> np.ndarray:
    """Return loads that bring ties, exact and near, far differences, and slopes along the servers."""
    size = fleet.size
    capacity = np.ones(size) if fleet.capacity is None else fleet.capacity
    weight = comparison_weights(fleet.capacity)
    weight = np.ones(size) if weight is None else weight
    fair = fair_profile(fleet).of_unit_work * capacity
    slope = np.cumsum(stream.integers(-1, 2, size))
    slope -= slope.min()
    return np.array(
        [
            np.zeros(size),
            stream.integers(0, 3, size).astype(float),
            weight * stream.integers(0, 3, size),
            slope.astype(float),
            np.floor(fair * size * 100.0 + stream.integers(0, 3, size)),
            np.floor(fair * size * 100.0 + slope),
            stream.integers(0, 9, size) / 4.0,
            stream.random(size) * capacity,
            stream.integers(0, 10**6, size).astype(float),
        ]
    )
