"""Replaying a recorded trace: the public door, where all that is given is checked."""

import math
from collections.abc import Iterable
from dataclasses import replace
from itertools import pairwise
from typing import Any

from labkit.checks import check_member, check_number, check_positive, check_whole
from labkit.engine import queues as q
from labkit.engine.failures import Failures, RandomFailures, checked_failures
from labkit.engine.information import Information, checked_information
from labkit.engine.placement import Outcome
from labkit.engine.service import DISCIPLINES, FAILURE_MODES, ServiceJob, ServiceRules, counting_scale
from labkit.engine.service_checks import (
    FULL,
    MOST_INTERVALS,
    checked_discipline,
    checked_levels,
    checked_limits,
)
from labkit.engine.service_measures import ServiceOutcome
from labkit.engine.trace_runs import AS_PLACED, AsPlaced, TraceRun, Window
from labkit.errors import InputError
from labkit.fleet.model import Fleet, check_fleet
from labkit.policies.base import Policy
from labkit.policies.naming import parse_policy
from labkit.randomness import FAILURES, check_replicates, generator, seed_sequence
from labkit.traces.reading import Trace, open_trace


def replay(
    fleet: Fleet,
    trace: Any,
    policy: Policy | str,
    *,
    rng: Any,
    replicates: int = 1,
    information: Information | None = None,
    discipline: str = "sessions",
    warmup: float = 0.0,
    block: float | None = None,
    checkpoints: Iterable[int] | None = None,
    limit: Any | None = None,
    on_full: str = "another",
    failures: Failures | RandomFailures | None = None,
    on_failure: str = "wait",
    target: float | None = None,
    levels: int = 0,
    workers: int = 1,
    first_replicate: int = 0,
) -> "Outcome | ServiceOutcome":
    """Place the tasks of a recorded trace anew, under any rule.

    Parameters
    ----------
    fleet : Fleet
        Servers and capacities; its demands are those that `excess` is measured against
        (`labkit.fleet_from_trace` makes a fleet of a trace).
    trace : pandas.DataFrame, str or pathlib.Path
        A table, or a CSV or parquet file of it, in order of time: `time` (numbers, or timestamps, which
        become seconds since the first row), `option_1`, `option_2` ... (servers; a blank is no option) and
        optionally `size` (work units, default 1), `duration` (in units of time) and `placed` (the server that
        really got the task). Files are read in pieces: memory does not grow with their length. Rows of one
        time are taken in their order, after what leaves at that time.
    policy : Policy or str
        The rule, its name, or "as-placed" for what really happened (whether or not that was an option).
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Source of the coins; the same int or SeedSequence gives every policy the same coins.
    replicates : int
        Repetitions with other coins. The trace is the same in each, so that they say nothing about another
        week: see `block`.
    information : Fresh, Snapshot or Dispatchers, optional
        What the policy sees. ``every`` is in units of time, from the first row, when the trace has durations,
        else in tasks.
    discipline : {"sessions", "fcfs", "ps"}
        What a duration means: the time that the task stays; or work that a server of capacity 1 does in that
        time, with queueing as in `labkit.serve`.
    warmup : float
        Time from the first row that is not measured (the fleet is empty at first).
    block : float, optional
        Length in time of the intervals of ``outcome.by_interval``, such as a day, for
        `labkit.block_bootstrap`; the first begins with the first row, or after the warm-up, and the last may
        be shorter. Default: one interval.
    checkpoints : sequence of int, optional
        Without durations: increasing numbers of tasks after which loads are measured. Default: the end only.
    limit, on_full, failures, on_failure, target, levels
        As in `labkit.serve`; only for traces with durations. A schedule of failures is in the times of the
        trace (for timestamps: seconds since the first row).
    workers : int
        Threads that share the replicates. The result does not depend on it.
    first_replicate : int
        The number of the first replicate; see `labkit.place`.

    Returns
    -------
    Outcome or ServiceOutcome
        Without durations tasks stay: what `labkit.place` returns. With durations: what `labkit.serve`
        returns, over the window from the first row (and the warm-up) to the last.

    Raises
    ------
    InputError
        For any argument, file or row that is refused; the sentence names the row.

    Notes
    -----
    Loads are sums of sizes. The coin of a task is one raw word of stream 0. A policy with tables by choice
    (static-split, tree-flow) needs options that are a choice of the fleet, and takes them in the fleet's
    order; so does ``on_failure="requeue"`` for the tasks that it moves. A task with a single option goes
    there, and an own rule sees that option twice.

    Times are counted from the first row, as floats: whether a task leaves at the very time at which another
    comes is exact for whole numbers of up to 2^53.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> trace = pd.DataFrame(
    ...     {
    ...         "time": [0.0, 1.0, 1.0, 4.0],
    ...         "option_1": ["north", "north", "east", "north"],
    ...         "option_2": ["east", "east", "south", "south"],
    ...         "duration": [3.0, 3.0, 1.0, 2.0],
    ...     }
    ... )
    >>> fleet = lk.fleet_from_trace(trace)
    >>> outcome = lk.replay(fleet, trace, "least-loaded", rng=1)
    >>> outcome.measures[["arrivals", "completed", "max_load"]].values.tolist()
    [[4.0, 3.0, 1.0]]
    """
    check_fleet(fleet)
    source = open_trace(trace, fleet)
    rule = _rule(policy, source)
    first_replicate, replicates = check_replicates(first_replicate, replicates)
    numbers = range(first_replicate, first_replicate + replicates)
    workers, seed = check_whole("workers", workers), seed_sequence(rng)
    discipline = checked_discipline(discipline)
    kind = DISCIPLINES[discipline]
    check_member("on_full", on_full, FULL)
    check_member("on_failure", on_failure, FAILURE_MODES)
    stays = not source.has_duration
    failures = checked_failures(failures)
    needless = {
        "discipline": discipline != "sessions", "warmup": warmup != 0, "block": block is not None,
        "limit": limit is not None, "on_full": on_full != "another", "failures": failures is not None,
        "on_failure": on_failure != "wait", "target": target is not None, "levels": levels != 0,
    }  # fmt: skip
    if stays and any(needless.values()):
        name = next(name for name, given in needless.items() if given)
        raise InputError(
            f"{name} has a meaning only where work leaves, but {source.label} has no column 'duration'; add "
            "it or leave this out."
        )
    rules = ServiceRules(
        discipline=q.STAYS if stays else kind,
        information=checked_information(information, in_tasks=stays),
        limits=checked_limits(limit, fleet),
        divert=on_full == "another",
        fails=failures is not None,
        on_failure=on_failure,
        target=math.inf if target is None else check_positive("target", target),
        levels=checked_levels(levels),
    )
    if stays:
        marks = _checked_marks(checkpoints)
        return TraceRun(ServiceJob(fleet, rule, rules, seed), source, numbers, workers).staying(marks)
    if checkpoints is not None:
        raise InputError(
            "checkpoints are for traces without durations; give block, a length of time, instead."
        )
    if rules.fails and on_failure == "requeue" and fleet.implicit is not None:
        raise InputError(
            'on_failure is "requeue", which needs a fleet with a table of choices; give "wait" or "lost".'
        )
    window = _window(source, warmup, block)
    rules = replace(rules, scale=counting_scale(window.span, 2.0**-8, 2.0**48))
    moments = [window.moments(fleet, failures, generator(seed, each, FAILURES)) for each in numbers]
    replaying = TraceRun(ServiceJob(fleet, rule, rules, seed), source, numbers, workers)
    return replaying.leaving(window, moments, discipline)


def _rule(policy: Policy | str, source: Trace) -> Policy:
    if not isinstance(policy, str) or policy.strip() != AS_PLACED:
        return parse_policy(policy)
    if not source.has_placed:
        raise InputError(
            f"policy is '{AS_PLACED}', but {source.label} has no column 'placed'; add it or give a rule."
        )
    return AsPlaced()


def _checked_marks(checkpoints: Iterable[int] | None) -> list[int]:
    if checkpoints is None:
        return []
    try:
        marks = [check_whole("checkpoints", mark) for mark in checkpoints]
    except TypeError:
        marks = []
    if not marks or any(one >= other for one, other in pairwise(marks)):
        raise InputError(f"checkpoints is {checkpoints!r}; give increasing whole numbers of tasks.")
    return marks


def _window(source: Trace, warmup: float, block: float | None) -> Window:
    warmup = check_number("warmup", warmup)
    if warmup < 0:
        raise InputError(f"warmup is {warmup:g}; give a length of time of at least 0.")
    length = None if block is None else check_positive("block", block)
    origin = float(next(source.blocks(1)).time[0])
    # A pass over the times alone: what is wrong with them is told before anything is computed.
    span = source.last_time() - origin
    if span == 0:
        raise InputError(
            f"{source.label} has all its tasks at one time, so that there is no time to measure over; add "
            "later tasks, or drop the column 'duration'."
        )
    if span <= warmup:
        raise InputError(
            f"warmup is {warmup:g}, but {source.label} spans {span:g} units of time; give less, so that "
            "something is measured."
        )
    if length is not None and (span - warmup) / length > MOST_INTERVALS:
        raise InputError(
            f"block is {length:g}, which cuts the {span - warmup:g} units of time that are measured into "
            f"more than {MOST_INTERVALS:,} intervals; give a longer one."
        )
    return Window(origin, warmup, span, length or span)
