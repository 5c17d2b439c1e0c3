"""A log for a fleet that has none: busy days and quiet nights, bursts, and what a plausible clerk did."""

import heapq
from typing import Any

import numpy as np
import pandas as pd

from labkit.checks import check_fraction, check_number, check_positive, check_whole
from labkit.errors import InputError
from labkit.fleet.model import Fleet, check_fleet
from labkit.fleet.names import ABSENT
from labkit.randomness import ARRIVALS, generator, seed_sequence

# Relative arrivals in each hour of a day.
BY_HOUR = (3, 2, 2, 2, 3, 5, 9, 14, 20, 24, 25, 23, 20, 22, 24, 23, 20, 16, 12, 9, 7, 6, 5, 4)
BURST_HOURS = 0.25
BURST_SHARE = 0.03  # tasks of one burst ÷ tasks of a day
SPREAD = 1.0  # standard deviation of the logarithm of a duration
KEPT = 2  # decimals of an hour: 36 seconds, so that some tasks share an instant


def invented_trace(
    fleet: Fleet,
    *,
    days: int,
    tasks_per_day: float,
    rng: Any,
    mean_size: float = 6.0,
    mean_duration: float = 30.0,
    bursts_per_day: float = 0.5,
    habit: float = 0.75,
) -> pd.DataFrame:
    """Invent a log of arrivals at a fleet.

    Parameters
    ----------
    fleet : Fleet
        Its demands say how often each choice comes.
    days : int
        Length of the log.
    tasks_per_day : float
        Mean number of tasks in a day, without bursts.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Source of randomness.
    mean_size : float
        Mean size of a task, at least 1; sizes are whole numbers from 1, geometric.
    mean_duration : float
        Mean duration in hours; durations are lognormal, and the standard deviation of their logarithm is 1.
    bursts_per_day : float
        Mean number of bursts in a day: a quarter of an hour in which 3 % of a day's tasks come, all
        to choices that hold one server.
    habit : float
        Share of tasks that went to the first option whatever its load, from 0 to 1; the others went to the
        option of lowest utilisation.

    Returns
    -------
    pandas.DataFrame
        A row a task in order of time: `time` in hours from 0, `option_1` ... (those of a choice in random
        order: the option nearest to the customer first), `size`, `duration` in hours and `placed`.

    Raises
    ------
    InputError
        When an argument is out of its range, or the choices of the fleet are not listed.

    Examples
    --------
    >>> import labkit as lk
    >>> from labkit.traces.invented import invented_trace
    >>> log = invented_trace(lk.ring(6), days=2, tasks_per_day=50, rng=1)
    >>> list(log.columns)
    ['time', 'option_1', 'option_2', 'size', 'duration', 'placed']
    """
    fleet = check_fleet(fleet)
    if fleet.implicit is not None:
        raise InputError("fleet is complete, and its choices are not listed; give a fleet with choices.")
    days, tasks_per_day = check_whole("days", days), check_positive("tasks_per_day", tasks_per_day)
    mean_duration = check_positive("mean_duration", mean_duration)
    habit = check_fraction("habit", habit, closed=True)
    for name, value, least in (("mean_size", mean_size, 1), ("bursts_per_day", bursts_per_day, 0)):
        if check_number(name, value) < least:
            raise InputError(f"{name} is {value!r}; give a number of at least {least}.")
    draw = generator(seed_sequence(rng), 0, ARRIVALS)
    time, choice = _arrivals(fleet, days, tasks_per_day, bursts_per_day, draw)
    if len(time) == 0:
        raise InputError(f"tasks_per_day is {tasks_per_day:g}, and no task came; give more, or more days.")
    options = _near_first(fleet.options[choice], draw)
    size = draw.geometric(1 / mean_size, len(time)).astype(np.int64)
    law = draw.lognormal(np.log(mean_duration) - SPREAD**2 / 2, SPREAD, len(time))
    duration = np.maximum(np.round(law, KEPT), 10.0**-KEPT)
    by_habit = draw.random(len(time)) < habit
    placed = _placed(fleet, time, options, size, duration, by_habit)
    columns = {"time": time, **_named(fleet, options), "size": size, "duration": duration}
    return pd.DataFrame({**columns, "placed": fleet.names.take(placed)})


def _arrivals(
    fleet: Fleet, days: int, tasks_per_day: float, bursts_per_day: float, draw: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Return the times in hours, rounded and in order, and the choice of each task."""
    demand = np.ones(len(fleet.options)) if fleet.demand is None else fleet.demand
    reached = np.cumsum(BY_HOUR) / sum(BY_HOUR)
    times, choices = [], []
    for day in range(days):
        calm = draw.poisson(tasks_per_day)
        hour = np.interp(draw.random(calm), [0.0, *reached], np.arange(25.0))
        times.append(24 * day + hour)
        choices.append(_pick(demand, calm, draw))
        for _ in range(draw.poisson(bursts_per_day)):
            extra = draw.poisson(BURST_SHARE * tasks_per_day)
            centre = fleet.options[_pick(demand, 1, draw)[0], 0]
            start = draw.random() * (24 - BURST_HOURS)
            times.append(24 * day + start + BURST_HOURS * draw.random(extra))
            choices.append(_pick(demand * (fleet.options == centre).any(axis=1), extra, draw))
    # Rounded down, so that no task leaves its day.
    time = np.floor(np.concatenate(times) * 10**KEPT) / 10**KEPT
    order = np.argsort(time, kind="stable")
    return time[order], np.concatenate(choices)[order]


def _pick(weights: np.ndarray, count: int, draw: np.random.Generator) -> np.ndarray:
    total = np.cumsum(weights)
    return np.searchsorted(total, draw.random(count) * total[-1], side="right")


def _near_first(options: np.ndarray, draw: np.random.Generator) -> np.ndarray:
    """Shuffle the options of each row; absent ones stay last."""
    keys = np.where(options == ABSENT, 2.0, draw.random(options.shape))
    return np.take_along_axis(options, np.argsort(keys, axis=1, kind="stable"), axis=1)


def _placed(
    fleet: Fleet,
    time: np.ndarray,
    options: np.ndarray,
    size: np.ndarray,
    duration: np.ndarray,
    by_habit: np.ndarray,
) -> np.ndarray:
    """Return the server that took each task, int64; what ends at an instant leaves before what comes then."""
    capacity = np.ones(len(fleet)) if fleet.capacity is None else fleet.capacity
    load = np.zeros(len(fleet))
    leaving: list[tuple[float, int, int]] = []
    placed = np.empty(len(time), dtype=np.int64)
    for task in range(len(time)):
        while leaving and leaving[0][0] <= time[task]:
            _, server, amount = heapq.heappop(leaving)
            load[server] -= amount
        near = options[task][options[task] != ABSENT].astype(np.int64)
        server = int(near[0] if by_habit[task] else near[np.argmin(load[near] / capacity[near])])
        load[server] += size[task]
        heapq.heappush(leaving, (float(time[task] + duration[task]), server, int(size[task])))
        placed[task] = server
    return placed


def _named(fleet: Fleet, options: np.ndarray) -> dict[str, Any]:
    columns = {}
    for place in range(options.shape[1]):
        absent = options[:, place] == ABSENT
        named = pd.Series(fleet.names.take(np.where(absent, 0, options[:, place]).astype(np.int64)))
        if absent.any():
            whole = pd.api.types.is_integer_dtype(named.dtype)
            named = (named.astype("Int64") if whole else named).mask(absent)
        columns[f"option_{place + 1}"] = named
    return columns
