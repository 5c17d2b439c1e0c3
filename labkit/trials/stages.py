"""The tiny fleets that a rule is tried on, and the tasks that it has to place there."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import pandas as pd

from labkit.fleet.families import complete, ring
from labkit.fleet.model import ABSENT, Fleet

# Tasks that are placed one after the other on each stage, and loads that are made up besides.
PLACED, MADE_UP = 200, 100

# The largest coin that there is; 0 is the smallest.
LAST_COIN = 1 - 2.0**-53


class Case(NamedTuple):
    """What a rule is given for one task."""

    options: np.ndarray
    loads: np.ndarray
    capacity: np.ndarray
    coin: np.float64


@dataclass(frozen=True)
class Stage:
    """A fleet to place tasks on; a rule sees the loads as they were up to `late` tasks ago."""

    words: str
    fleet: Fleet
    late: int = 0
    sizes: bool = False
    placed: int = PLACED
    made_up: int = MADE_UP


def stages() -> list[Stage]:
    """Return the tiny fleets: every shape of choice, capacities, demands, reports and sizes of tasks."""
    return [
        Stage("two options, ring of 8", ring(8)),
        Stage("two and three options mixed, 6 servers", _mixed()),
        Stage("any three of 7 servers", complete(7, options=3)),
        Stage("any two of 6 servers, also the same twice", complete(6, distinct=False)),
        Stage("unequal capacities and demands, 5 servers", _unequal()),
        Stage("loads up to 20 tasks old, ring of 8", ring(8), late=20),
        Stage("tasks of unequal sizes, unequal capacities", _unequal(), sizes=True),
    ]


def own_stage(fleet: Fleet) -> Stage:
    """Return a stage of the user's own fleet, with fewer tasks the larger it is: each keeps all loads."""
    fewer = min(1.0, 20_000 / fleet.size)
    placed, made_up = (max(10, round(each * fewer)) for each in (PLACED, MADE_UP))
    return Stage(f"the given fleet of {fleet.size:,} servers", fleet, placed=placed, made_up=made_up)


def _mixed() -> Fleet:
    columns = {"option_1": [0, 1, 2, 3, 4], "option_2": [1, 2, 3, 4, 5], "option_3": [3, None, 5, None, 0]}
    choices = pd.DataFrame(columns).astype("Int64")
    return Fleet(pd.DataFrame({"server": range(6)}), choices)


def _unequal() -> Fleet:
    servers = pd.DataFrame({"server": range(5), "capacity": [1.0, 2.5, 4.0, 0.5, 3.0]})
    choices = pd.DataFrame(
        {
            "option_1": [0, 1, 2, 3, 4, 0],
            "option_2": [1, 2, 3, 4, 0, 2],
            "demand": [5.0, 1.0, 0.5, 2.0, 3.0, 1.0],
        }
    )
    return Fleet(servers, choices)


def cases_of(stage: Stage, pick: Callable[[Case], int], rng: np.random.Generator) -> Iterator[Case]:
    """Yield the cases of a stage: tasks placed as `pick` says, then tasks at loads that are made up."""
    fleet = stage.fleet
    capacity = _read_only(np.ones(fleet.size) if fleet.capacity is None else fleet.capacity.copy())
    kind = np.float64 if stage.sizes else np.int64
    loads = np.zeros(fleet.size, kind)
    seen = loads.copy()
    for task in range(stage.placed):
        if not stage.late or task % stage.late == 0:
            seen = loads.copy()
        case = Case(_options(fleet, rng), _read_only(seen), capacity, np.float64(rng.random()))
        yield case
        position = pick(case)
        inside = 0 <= position < len(case.options)
        loads[case.options[position if inside else 0]] += rng.exponential() if stage.sizes else 1
    for number in range(stage.made_up):
        made = _read_only(_made_up(number, fleet.size, rng).astype(kind))
        coin = (0.0, LAST_COIN, rng.random())[number % 3]
        yield Case(_options(fleet, rng), made, capacity, np.float64(coin))


def _made_up(number: int, servers: int, rng: np.random.Generator) -> np.ndarray:
    """Return loads that placing few tasks does not lead to: equal, far apart, large."""
    kinds = (
        lambda: np.full(servers, rng.integers(0, 50)),
        lambda: rng.integers(0, 4, servers),
        lambda: rng.integers(0, 1_000, servers),
        lambda: np.where(np.arange(servers) == rng.integers(servers), 10_000, 10),
        lambda: rng.integers(10**9, 10**12, servers),
    )
    return np.asarray(kinds[number % len(kinds)]())


def _options(fleet: Fleet, rng: np.random.Generator) -> np.ndarray:
    """Return the options of a task that arrives by demand."""
    if fleet.implicit is not None:
        law = fleet.implicit
        drawn = rng.choice(law.servers, law.options, replace=not law.distinct)
        return _read_only(drawn.astype(np.uint32))
    share = None if fleet.demand is None else fleet.demand / fleet.demand.sum()
    row = fleet.options[rng.choice(len(fleet.options), p=share)]
    return _read_only(row[row != ABSENT].copy())


def _read_only(array: np.ndarray) -> np.ndarray:
    array.setflags(write=False)
    return array
