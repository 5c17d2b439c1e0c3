"""What `labkit.serve` and `labkit.replay` are given about limits, failures and times of day, checked."""

import math
from collections.abc import Sequence
from typing import Any

import numpy as np

from labkit.checks import LARGEST_WHOLE, check_member, check_positive, check_whole
from labkit.engine import queues as q
from labkit.engine.arrival_times import Rates
from labkit.engine.failures import Failures, RandomFailures
from labkit.engine.service import DISCIPLINES
from labkit.engine.sizes import as_numbers
from labkit.errors import InputError
from labkit.fleet.model import Fleet

FULL = ("another", "lost")
LONG_NAMES = {"first-come-first-served": "fcfs", "processor-sharing": "ps"}
# Tasks a unit of time: beyond these, times of arrival are no numbers any more.
LEAST_RATE, MOST_RATE = 1e-200, 1e200
# Parts of a profile that a run goes through, and intervals that are kept.
MOST_PIECES, MOST_INTERVALS = 1e8, 100_000


def checked_rates(
    mean: float, profile: Sequence[float] | None, period: float | None, horizon: float
) -> Rates:
    """Return arrival rates of this mean: constant, or following the profile of a period."""
    if not LEAST_RATE <= mean <= MOST_RATE:
        raise InputError(
            f"load_factor gives {mean:g} tasks a unit of time (× total capacity ÷ mean requirement); "
            f"choose units in which it lies between {LEAST_RATE:g} and {MOST_RATE:g}."
        )
    if profile is None:
        if period is not None:
            raise InputError(f"period is {period!r} but there is no profile; give both or neither.")
        return Rates(np.array([mean]), math.inf)
    given = as_numbers(profile)
    if given is None or given.ndim != 1 or not given.size or not np.all((given >= 0) & (given < math.inf)):
        raise InputError(
            f"profile is {profile!r}; give relative rates of at least 0, one a part of the period."
        )
    if not given.any():
        raise InputError("profile holds only zeros; give at least one rate above 0.")
    if period is None:
        raise InputError("profile needs a period; give its length in units of time, such as period=24.0.")
    relative = given.astype(np.float64) / float(given.max())
    length = check_positive("period", period) / relative.size
    if not length * MOST_PIECES >= horizon:
        raise InputError(
            f"period is {period:g}, which makes more than {MOST_PIECES:g} parts up to the horizon of "
            f"{horizon:g}; give a longer one."
        )
    return Rates(mean * relative / relative.mean(), length)


def checked_limits(limit: Any, fleet: Fleet) -> np.ndarray | None:
    """Return the most tasks of each server, int64 of shape (servers,), or None."""
    if limit is None:
        return None
    if isinstance(limit, str):
        check_member("limit", limit, ("capacity",))
        given = np.floor(np.ones(fleet.size) if fleet.capacity is None else fleet.capacity)
    else:
        found = as_numbers(limit)
        if found is None or found.shape not in ((), (fleet.size,)):
            raise InputError(
                f"limit is {limit!r}; give a whole number, one for each of the {fleet.size} servers, or "
                '"capacity".'
            )
        given = np.broadcast_to(found, fleet.size)
    wrong = np.flatnonzero(~((given >= 1) & (given <= LARGEST_WHOLE) & (given == np.floor(given))))
    if wrong.size:
        where = fleet.names.take(wrong[:1]).tolist()[0]
        raise InputError(
            f"limit is {given[wrong[0]]:g} for server {where!r}; give whole numbers from 1 to "
            f"{LARGEST_WHOLE} (a capacity below 1 holds no task)."
        )
    return given.astype(np.int64)


def lasting_availability(failures: Failures | RandomFailures | None) -> float:
    """Return the share of time that servers are up in the long run; a schedule passes, and counts as none."""
    if isinstance(failures, RandomFailures):
        return failures.up / (failures.up + failures.down)
    return 1.0


def queues_are_cut(failures: Failures | RandomFailures | None, on_failure: str) -> bool:
    """Tell whether failures go on losing all tasks of a server, so that no queue grows without end."""
    return isinstance(failures, RandomFailures) and on_failure == "lost"


def checked_levels(levels: Any) -> int:
    """Return for how many numbers of tasks the time at each is kept."""
    if check_whole("levels", levels, least=0) > q.TOP:
        raise InputError(f"levels is {levels}; give at most {q.TOP}.")
    return int(levels)


def checked_discipline(discipline: Any) -> str:
    """Return the short name of a discipline, which may also be given by its long one."""
    known = {**{name: name for name in DISCIPLINES}, **LONG_NAMES}
    return known[check_member("discipline", discipline, known)]
