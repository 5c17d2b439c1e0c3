"""Replaying a recorded trace: the public door, where all that is given is checked."""

import heapq
import math
from collections.abc import Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from itertools import count
from typing import Any

import numpy as np

from labkit.checks import check_member, check_number, check_positive, check_whole
from labkit.compiled import kept, next_raw
from labkit.engine import queues as q
from labkit.engine.failures import Failures, RandomFailures, checked_failures
from labkit.engine.information import Information, checked_information
from labkit.engine.placement import Outcome, measured_loads
from labkit.engine.service import DISCIPLINES, FAILURE_MODES, Batch, Progress, ServiceJob, ServiceRules
from labkit.engine.service_checks import FULL, checked_limits
from labkit.engine.service_measures import ServiceOutcome, measured
from labkit.errors import InputError
from labkit.fleet.model import Fleet, check_fleet
from labkit.policies.base import Policy
from labkit.policies.naming import parse_policy
from labkit.randomness import ARRIVALS, FAILURES, check_replicates, generator, kernel_state, seed_sequence
from labkit.traces.choice_numbers import ChoiceNumbers
from labkit.traces.reading import Trace, open_trace

AS_PLACED = "as-placed"


def first_option(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    return np.uint64(0)


class _AsPlaced(Policy):
    """What really happened: each task goes where the trace says that it was placed."""

    choose = staticmethod(first_option)

    @property
    def name(self) -> str:
        """The word in tables."""
        return AS_PLACED


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
        A table, or a CSV or parquet file of it, in order of time: `time` (numbers, or timestamps, which become
        seconds since the first row), `option_1`, `option_2` ... (servers; a blank is no option) and optionally
        `size` (work units, default 1), `duration` (in units of time) and `placed` (the server that really got the
        task). Files are read in pieces: memory does not grow with their length. Rows of one time
        are taken in their order, after what leaves at that time.
    policy : Policy or str
        The rule, its name, or "as-placed" for what really happened.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Source of the coins; the same int or SeedSequence gives every policy the same coins.
    replicates : int
        Repetitions with other coins. The trace is the same in each, so that they say nothing about another
        week: see `block`.
    information : Fresh, Snapshot or Dispatchers, optional
        What the policy sees. ``every`` is in units of time when the trace has durations, else in tasks.
    discipline : {"sessions", "fcfs", "ps"}
        What a duration means: the time that the task stays; or work that a server of capacity 1 does in that
        time, with queueing as in `labkit.serve`.
    warmup : float
        Time from the first row that is not measured (the fleet is empty at first).
    block : float, optional
        Length in time of the intervals of ``outcome.by_interval``, such as a day, for `labkit.block_bootstrap`.
        Default: one interval.
    checkpoints : sequence of int, optional
        Without durations: numbers of tasks after which loads are measured. Default: the end only.
    limit, on_full, failures, on_failure, target, levels, workers, first_replicate
        As in `labkit.serve`; all but the last two only for traces with durations. A schedule of failures is in
        the times of the trace (for timestamps: seconds since the first row).

    Returns
    -------
    Outcome or ServiceOutcome
        Without durations tasks stay: what `labkit.place` returns. With durations: what `labkit.serve` returns,
        over the window from the first row (and the warm-up) to the last.

    Raises
    ------
    InputError
        For any argument, file or row that is refused; the sentence names the row.

    Notes
    -----
    Loads are sums of sizes. A policy with tables by choice (static-split, tree-flow) needs options that are a
    choice of the fleet, and takes them in the fleet's order. The coin of a task is one raw word of stream 0.

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
    as_placed = isinstance(policy, str) and policy.strip() == AS_PLACED
    rule = _AsPlaced() if as_placed else parse_policy(policy)
    if as_placed and not source.has_placed:
        raise InputError(
            f"policy is \"{AS_PLACED}\", but {source.label} has no column 'placed'; add it or give a rule."
        )
    first_replicate, replicates = check_replicates(first_replicate, replicates)
    workers = check_whole("workers", workers)
    kind = DISCIPLINES[check_member("discipline", discipline, DISCIPLINES)]
    check_member("on_full", on_full, FULL)
    check_member("on_failure", on_failure, FAILURE_MODES)
    stays = not source.has_duration
    limits, failures = checked_limits(limit, fleet), checked_failures(failures)
    rules = ServiceRules(
        discipline=q.STAYS if stays else kind,
        information=checked_information(information, in_tasks=stays),
        limits=limits,
        divert=on_full == "another",
        fails=failures is not None,
        on_failure=on_failure,
        target=math.inf if target is None else check_positive("target", target),
        levels=check_whole("levels", levels, least=0),
    )
    job = ServiceJob(fleet, rule, rules, seed_sequence(rng))
    replaying = _Replaying(
        job, source, as_placed, range(first_replicate, first_replicate + replicates), workers
    )
    if stays:
        given = {"limit": limit, "failures": failures, "target": target, "block": block}
        needless = [name for name, value in given.items() if value is not None]
        if needless or warmup or levels:
            raise InputError(
                f"{(needless or ['warmup' if warmup else 'levels'])[0]} has a meaning only where work leaves, but "
                f"{source.label} has no column 'duration'; add it or leave this out."
            )
        return replaying.staying(None if checkpoints is None else list(checkpoints))
    if checkpoints is not None:
        raise InputError(
            "checkpoints are for traces without durations; give block, a length of time, instead."
        )
    if failures is not None and on_failure == "requeue" and fleet.implicit is not None:
        raise InputError(
            'on_failure is "requeue", which needs a fleet with a table of choices; give "wait" or "lost".'
        )
    return replaying.leaving(check_number("warmup", warmup), block, failures, discipline)


def fill_words(state, words):
    """Fill an array with raw words of a stream."""
    for index in range(words.size):
        words[index] = next_raw(state)


class _Replaying:
    """One call of `replay`, prepared."""

    def __init__(
        self, job: ServiceJob, source: Trace, as_placed: bool, replicates: range, workers: int
    ) -> None:
        self.job, self.source, self.as_placed, self.workers = job, source, as_placed, workers
        self.replicates = replicates
        self.lanes = [_Lane(job, replicate) for replicate in replicates]
        self.tasks = 0
        # Only these need to know which of the fleet's choices a task came on.
        named = job.rule.by_table or (job.rules.fails and job.rules.on_failure == "requeue")
        self.numbers = ChoiceNumbers(job.fleet) if named and not as_placed else None

    def batches(self) -> Iterator[Batch]:
        """Yield the trace in pieces, without the coins."""
        for block in self.source.blocks():
            rows = len(block.time)
            self.tasks = block.first + rows
            placed = block.placed if self.as_placed else None
            options = np.full((rows + 1, max(2, block.options.shape[1])), q.NOBODY, np.uint32)
            numbers = np.zeros(rows, np.uint64)
            if placed is not None:
                options[:rows, :2] = placed[:, None]
            else:
                options[:rows, : block.options.shape[1]] = block.options
                # A task with a single option has it twice.
                single = options[:rows, 1] == q.NOBODY
                options[:rows, 1][single] = options[:rows, 0][single]
            if self.numbers is not None:
                self._number(block, options[:rows], single, numbers)
            needs = np.zeros(rows) if block.duration is None else block.duration
            sizes = np.ones(rows) if block.size is None else block.size
            yield Batch(block.time, options, np.empty(0, np.uint64), numbers, needs, sizes)

    def _number(self, block: Any, options: np.ndarray, single: np.ndarray, numbers: np.ndarray) -> None:
        """Write the number of each task's choice, and its options in the order of that choice."""
        assert self.numbers is not None
        found = self.numbers.find(block.options)
        table = self.job.fleet.options
        unknown = (found < 0) & ~single
        if unknown.any():
            row = int(np.argmax(unknown))
            names = [self.job.fleet.names[server] for server in options[row] if server != q.NOBODY]
            raise InputError(
                f"{self.source.at(block.first + row)}: the options {', '.join(map(repr, names))} are no choice of "
                f"the fleet, as {self._reason()} needs; make the fleet with lk.fleet_from_trace, or give another rule."
            )
        known = found >= 0
        options[known, : table.shape[1]] = table[found[known]]
        # Beyond the table: a task that can go nowhere else.
        numbers[:] = np.where(known, found, len(table) if self.job.rules.fails else 0)

    def _reason(self) -> str:
        return f"policy {self.job.rule.name}" if self.job.rule.by_table else 'on_failure="requeue"'

    def staying(self, checkpoints: list[int] | None) -> Outcome:
        """Place tasks that stay; return what `place` returns."""
        job, whole = self.job, not self.source.has_size
        marks = _checked_marks(checkpoints)
        rows: list[list[np.ndarray]] = [[] for _ in self.lanes]
        for batch in self.batches():
            first = self.tasks - len(batch.times)
            # Reports come after so many tasks: time counts tasks here.
            batch = batch._replace(times=np.arange(first, self.tasks, dtype=np.float64))
            stops = [mark - first for mark in marks if first < mark <= self.tasks]
            self._each(lambda lane, at, batch=batch, stops=stops: lane.stay(batch, stops, rows[at]))
        if marks and marks[-1] > self.tasks:
            raise InputError(
                f"checkpoints holds {marks[-1]}, but {self.source.label} has {self.tasks} tasks; give at most that."
            )
        if not marks:
            marks = [self.tasks]
            for lane, row in zip(self.lanes, rows, strict=True):
                row.append(measured_loads(job.fleet, lane.progress.loads))
        loads = np.array([lane.progress.loads for lane in self.lanes])
        return Outcome(
            job.fleet, job.rule.name, job.rules.information.name,
            loads.astype(np.int64) if whole else loads, np.array(marks, np.int64), np.array(rows), self.tasks,
            self.replicates[0],
        )  # fmt: skip

    def leaving(
        self,
        warmup: float,
        block: float | None,
        failures: Failures | RandomFailures | None,
        discipline: str,
    ) -> ServiceOutcome:
        """Serve tasks that leave; return what `serve` returns."""
        if warmup < 0:
            raise InputError(f"warmup is {warmup:g}; give a length of time of at least 0.")
        length = None if block is None else check_positive("block", block)
        origin = last = None
        for batch in self.batches():
            if origin is None:
                origin = float(batch.times[0])
                self._start(origin, warmup, length, failures)
            last = float(batch.times[-1])
            batch = batch._replace(times=batch.times - origin)
            self._each(lambda lane, at, batch=batch: lane.leave(batch))
        assert origin is not None and last is not None
        span = last - origin
        if span <= warmup:
            raise InputError(
                f"warmup is {warmup:g}, but {self.source.label} spans {span:g} units of time; give less, so that "
                "something is measured."
            )
        job = self.job
        return ServiceOutcome(
            fleet=job.fleet, policy=job.rule.name, information=job.rules.information.name,
            discipline=discipline, service="trace", load_factor=math.nan, warmup=warmup, horizon=span,
            warmup_found_by="given", target=job.rules.target, origin=origin,
            results=tuple(lane.finish(span) for lane in self.lanes),
        )  # fmt: skip

    def _start(
        self, origin: float, warmup: float, length: float | None, failures: Failures | RandomFailures | None
    ) -> None:
        horizon = math.inf
        if failures is not None:
            # Random failures are drawn up to the end, which only a pass through the trace tells.
            horizon = [float(each.time[-1]) for each in self.source.blocks()][-1] - origin
        for lane in self.lanes:
            ends = iter([warmup]) if length is None else (warmup + step * length for step in count())
            moments: Iterator[tuple[float, Any]] = ((end, None) for end in ends)
            if failures is not None:
                draws = generator(self.job.seed, lane.progress.replicate, FAILURES)
                shift = origin if isinstance(failures, Failures) else 0.0
                times, servers, ups = failures.events(self.job.fleet, shift + horizon, draws)
                changes = zip(
                    np.maximum(times - shift, 0.0).tolist(),
                    zip(servers.tolist(), ups.tolist(), strict=True),
                    strict=True,
                )
                moments = heapq.merge(moments, changes, key=lambda moment: moment[0])
            lane.expect(moments, warmup)

    def _each(self, work: Any) -> None:
        """Call ``work(lane, number)`` for each replicate."""
        if self.workers == 1 or len(self.lanes) == 1:
            for at, lane in enumerate(self.lanes):
                work(lane, at)
        else:
            work(self.lanes[0], 0)  # compiles before threads share the loop
            with ThreadPoolExecutor(self.workers) as pool:
                list(pool.map(work, self.lanes[1:], count(1)))


class _Lane:
    """One replicate of a replay."""

    def __init__(self, job: ServiceJob, replicate: int) -> None:
        self.job, self.progress = job, job.start(replicate)
        self.words = kernel_state(job.seed, replicate, ARRIVALS)
        self.moments: Iterator[tuple[float, Any]] = iter(())
        self.at, self.what, self.warmup = math.inf, None, 0.0

    def expect(self, moments: Iterator[tuple[float, Any]], warmup: float) -> None:
        """Take the moments at which an interval ends or a server fails or comes back."""
        self.moments, self.warmup = moments, warmup
        self._next_moment()

    def _next_moment(self) -> None:
        self.at, self.what = next(self.moments, (math.inf, None))

    def _own(self, batch: Batch) -> Batch:
        """Return the batch with the replicate's coins, and room of its own for open options."""
        coins = np.empty(len(batch.times), np.uint64)
        kept(fill_words)(self.words, coins)
        options = batch.options.copy() if self.job.guarded else batch.options
        return batch._replace(coins=coins, options=options)

    def stay(self, batch: Batch, stops: list[int], rows: list[np.ndarray]) -> None:
        """Place the tasks of a batch, and measure after some of them."""
        batch = self._own(batch)
        begin = 0
        for stop in stops:
            begin = self.progress.advance(batch, begin, stop, math.inf)
            rows.append(measured_loads(self.job.fleet, self.progress.loads))
        self.progress.advance(batch, begin, len(batch.times), math.inf)

    def leave(self, batch: Batch) -> None:
        """Serve the tasks of a batch, and what happens between them."""
        batch = self._own(batch)
        begin, stop = 0, len(batch.times)
        while True:
            begin = self.progress.advance(batch, begin, stop, self.at)
            if begin == stop:
                return
            if self.what is None:
                self.progress.close(self.at)
                if not self.progress.measuring:
                    self.progress.reset(self.at)
            elif self.what[1]:
                self.progress.back(self.what[0], self.at)
            else:
                self.progress.fail(self.what[0], self.at)
            self._next_moment()

    def finish(self, now: float) -> Any:
        """End the last interval at the time of the last row."""
        self.progress.close(now)
        return measured(self.progress, now)


def _checked_marks(checkpoints: list[int] | None) -> list[int]:
    marks = [] if checkpoints is None else [check_whole("checkpoints", mark) for mark in checkpoints]
    if any(one >= other for one, other in zip(marks, marks[1:], strict=False)) or checkpoints == []:
        raise InputError(f"checkpoints is {checkpoints!r}; give increasing whole numbers.")
    return marks
