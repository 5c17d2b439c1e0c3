"""Running the loop on a recorded trace: its rows as batches, and each replicate through all of them."""

import heapq
import math
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from itertools import repeat
from typing import Any, NamedTuple

import numpy as np

from labkit.engine import queues as q
from labkit.engine.failures import Failures, RandomFailures
from labkit.engine.placement import Outcome, measured_loads
from labkit.engine.service import Batch, Moment, ServiceJob, changes
from labkit.engine.service_measures import ServiceOutcome, measured
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.policies.one_choice import OneChoice
from labkit.randomness import ARRIVALS, generator
from labkit.sharing.waiting import Waiting
from labkit.traces.choice_numbers import ChoiceNumbers
from labkit.traces.reading import Block, Trace

AS_PLACED = "as-placed"
ROWS = 65_536  # read and placed at a time


class AsPlaced(OneChoice):
    """What really happened: each task has one option, the server that got it, whatever the coin."""

    @property
    def name(self) -> str:
        """The word in tables."""
        return AS_PLACED

    @property
    def kernel_name(self) -> str:
        """The compiled code is that of one-choice."""
        return OneChoice.__name__


class Window(NamedTuple):
    """When is measured, in the time of the trace (origin) and in time since its first row (all else)."""

    origin: float
    warmup: float
    span: float
    length: float  # of an interval

    def moments(
        self, fleet: Fleet, failures: Failures | RandomFailures | None, draws: np.random.Generator
    ) -> Iterator[Moment]:
        """Return what happens up to the last row, in order; the first end of an interval ends the warm-up."""
        # An end that misses the last row by rounding only is none; the last interval ends there anyway.
        count = math.ceil((self.span - self.warmup) / self.length - 1e-9)
        ends: Iterator[Moment] = ((self.warmup + step * self.length, None) for step in range(max(count, 1)))
        if failures is None:
            return ends
        # A schedule is in the time of the trace, and random failures begin with it.
        shift = self.origin if isinstance(failures, Failures) else 0.0
        # What fails at the time of the last row, fails before it.
        times, servers, ups = failures.events(fleet, math.nextafter(shift + self.span, math.inf), draws)
        happening = changes(np.maximum(times - shift, 0.0), servers, ups)
        return heapq.merge(ends, happening, key=lambda moment: moment[0])


class TraceRun:
    """One call of `replay`, prepared."""

    def __init__(self, job: ServiceJob, source: Trace, replicates: range, workers: int) -> None:
        self.job, self.source, self.workers = job, source, workers
        self.lanes = [Lane(job, replicate) for replicate in replicates]
        self.tasks = 0
        self.as_placed = isinstance(job.rule, AsPlaced)
        self.requeues = job.rules.fails and job.rules.on_failure == "requeue"
        # Only these need to know which of the fleet's choices a task came on.
        named = (job.rule.by_table or self.requeues) and not self.as_placed and job.fleet.implicit is None
        self.numbers = ChoiceNumbers(job.fleet) if named else None
        self.ones, self.nothing = np.ones(ROWS), np.zeros(ROWS)
        # Beyond the table of choices: a task that can go nowhere else.
        self.nowhere = np.full(ROWS, len(job.fleet.options) if self.requeues else 0, np.uint64)

    def batches(self) -> Iterator[Batch]:
        """Yield the trace in pieces, without the coins."""
        no_coins = np.empty(0, np.uint64)
        for block in self.source.blocks(ROWS):
            rows = len(block.time)
            self.tasks = block.first + rows
            options, numbers = block.options, self.nowhere[:rows]
            if self.as_placed:
                assert block.placed is not None
                options = np.repeat(block.placed[:, None], 2, axis=1)
            else:
                if self.numbers is not None:
                    options, numbers = self._numbered(block)
                # A task with a single option has it twice.
                single = options[:, 1] == q.NOBODY
                options[single, 1] = options[single, 0]
            needs = self.nothing[:rows] if block.duration is None else block.duration
            sizes = self.ones[:rows] if block.size is None else block.size
            yield Batch(block.time, options, no_coins, numbers, needs, sizes)

    def _numbered(self, block: Block) -> tuple[np.ndarray, np.ndarray]:
        """Return the options and the number of the choice of each task."""
        assert self.numbers is not None
        by_table, table = self.job.rule.by_table, self.job.fleet.options
        single = block.options[:, 1] == q.NOBODY
        found = np.where(single, -1, self.numbers.find(block.options))
        refused = (found < 0) & ~(single & ~(by_table and self.requeues))
        if refused.any():
            self._refuse_choice(block, int(np.argmax(refused)))
        known = found >= 0
        options = block.options
        if by_table:
            options = np.full((len(found), max(table.shape[1], options.shape[1])), q.NOBODY, np.uint32)
            options[:, : block.options.shape[1]] = block.options
            options[known, : table.shape[1]] = table[found[known]]
        return options, np.where(known, found.astype(np.uint64), self.nowhere[: len(found)])

    def _refuse_choice(self, block: Block, row: int) -> None:
        servers = block.options[row]
        names = ", ".join(repr(self.job.fleet.names[server]) for server in servers[servers != q.NOBODY])
        place, name = self.source.at(block.first + row), self.job.rule.name
        if servers[1] == q.NOBODY:
            raise InputError(
                f"{place}: {names} is the only option, and policy {name} has no table for what failures "
                'requeue there; give on_failure "wait" or "lost", or another rule.'
            )
        needs = f"policy {name}" if self.job.rule.by_table else 'on_failure="requeue"'
        raise InputError(
            f"{place}: the options {names} are no choice of the fleet, as {needs} needs; make the fleet with "
            "lk.fleet_from_trace, or give another rule."
        )

    def staying(self, marks: list[int]) -> Outcome:
        """Place tasks that stay; return what `place` returns."""
        job, whole = self.job, not self.source.has_size

        def place(lane: Lane, batch: Batch) -> None:
            first = self.tasks - len(batch.times)
            lane.stay(batch, [mark - first for mark in marks if first < mark <= self.tasks])

        # Reports come after so many tasks: time counts tasks here.
        counted = (
            batch._replace(times=np.arange(self.tasks - len(batch.times), self.tasks, dtype=np.float64))
            for batch in self.batches()
        )
        self._run(place, counted)
        if marks and marks[-1] > self.tasks:
            raise InputError(
                f"checkpoints holds {marks[-1]}, but {self.source.label} has {self.tasks} tasks; give at "
                "most that."
            )
        if not marks:
            marks = [self.tasks]
            for lane in self.lanes:
                lane.measure()
        loads = np.array([lane.progress.loads for lane in self.lanes])
        return Outcome(
            job.fleet, job.rule.name, job.rules.information.name,
            loads.astype(np.int64) if whole else loads, np.array(marks, np.int64),
            np.array([lane.measured for lane in self.lanes]), self.tasks, self.lanes[0].progress.replicate,
        )  # fmt: skip

    def leaving(self, window: Window, moments: list[Iterator[Moment]], discipline: str) -> ServiceOutcome:
        """Serve tasks that leave; return what `serve` returns."""
        job = self.job
        for lane, its in zip(self.lanes, moments, strict=True):
            lane.progress.expect(its)
        self._run(Lane.leave, (batch._replace(times=batch.times - window.origin) for batch in self.batches()))
        return ServiceOutcome(
            fleet=job.fleet, policy=job.rule.name, information=job.rules.information.name,
            discipline=discipline, service="trace", load_factor=math.nan, warmup=window.warmup,
            horizon=window.span, warmup_found_by="given", target=job.rules.target, origin=window.origin,
            results=tuple(lane.finish(window.span) for lane in self.lanes),
        )  # fmt: skip

    def _run(self, step: "Callable[[Lane, Batch], None]", batches: Iterator[Batch]) -> None:
        """Call ``step(lane, batch)`` for each batch and replicate."""
        told = Waiting("arrivals replayed", None, "arrival")
        with told as waiting, ThreadPoolExecutor(self.workers) as pool:
            # The first call compiles, before threads share the loop.
            first = next(batches)
            step(self.lanes[0], first)
            spread: Callable[..., Iterator[None]] = map if self.workers == 1 else pool.map
            list(spread(step, self.lanes[1:], repeat(first)))
            waiting.add(len(first.times))
            for batch in batches:
                list(spread(step, self.lanes, repeat(batch)))
                waiting.add(len(batch.times))


class Lane:
    """One replicate of a replay."""

    def __init__(self, job: ServiceJob, replicate: int) -> None:
        self.job, self.progress = job, job.start(replicate)
        self.words = generator(job.seed, replicate, ARRIVALS).bit_generator
        self.measured: list[np.ndarray] = []

    def _own(self, batch: Batch) -> Batch:
        """Return the batch with the replicate's coins, and a line of its own for open options."""
        coins = self.words.random_raw(len(batch.times))
        options = batch.options
        if self.job.guarded:
            options = np.concatenate([options, options[:1]])
        return batch._replace(coins=coins, options=options)

    def stay(self, batch: Batch, stops: list[int]) -> None:
        """Place the tasks of a batch, and measure after some of them."""
        batch = self._own(batch)
        begin = 0
        for stop in stops:
            begin = self.progress.advance(batch, begin, stop, math.inf)
            self.measure()
        self.progress.advance(batch, begin, len(batch.times), math.inf)

    def measure(self) -> None:
        """Measure the loads of now."""
        self.measured.append(measured_loads(self.job.fleet, self.progress.loads))

    def leave(self, batch: Batch) -> None:
        """Serve the tasks of a batch, and what happens between them."""
        self.progress.take(self._own(batch), beyond=True)

    def finish(self, now: float) -> Any:
        """End the last interval at the time of the last row."""
        self.progress.close(now)
        return measured(self.progress, now)
