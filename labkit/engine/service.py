"""Running the loop for work that leaves: what one call prepares, and how one replicate goes on in time."""

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np

from labkit.compiled import CONFIG, compiled, folded, inlined, kept, specialise
from labkit.engine import queues as q
from labkit.engine.arrivals import arrivals_of, read_only
from labkit.engine.information import Information
from labkit.engine.service_failures import bring_up, lose_all, requeue_all, set_next, take_down
from labkit.engine.service_loop import pick_open, serve_tasks
from labkit.engine.weights import comparison_weights
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.policies.base import WITH_REPORTS, Policy
from labkit.randomness import COINS, MOVES, TURNS, kernel_state

DISCIPLINES = {"fcfs": q.FCFS, "ps": q.SHARED, "sessions": q.SESSIONS}
FAILURE_MODES = ("wait", "requeue", "lost")
NO_LIMIT = np.iinfo(np.int64).max

# When something happens, and what: None for the end of an interval, else a server and whether it comes back.
Moment = tuple[float, tuple[int, bool] | None]
NEVER: Moment = (math.inf, None)
# Failures and returns that are Python objects at a time.
SLICE = 4_096

# What is kept of each interval, in order; after the first two, sums and counts.
INTERVAL = (
    *("start", "end", "arrivals", "completed", "blocked", "lost", "requeued", "waited", "delayed", "late"),
    *("sojourn_sum", "waiting_sum", "area", "work", "max_load", "max_utilisation"),
)
_COUNTED = (q.ARRIVED, q.COMPLETED, q.BLOCKED, q.LOST, q.REQUEUED, q.WAITED, q.DELAYED, q.LATE)


def changes(times: np.ndarray, servers: np.ndarray, ups: np.ndarray) -> Iterator[Moment]:
    """Yield when servers (positions) go down or come back, as `Failures.events` returns them."""
    for first in range(0, len(times), SLICE):
        part = slice(first, first + SLICE)
        what = zip(servers[part].tolist(), ups[part].tolist(), strict=True)
        yield from zip(times[part].tolist(), what, strict=True)


class Batch(NamedTuple):
    """Tasks in order of arrival; see `labkit.engine.service_loop.serve_tasks`."""

    times: np.ndarray
    options: np.ndarray
    coins: np.ndarray
    rows: np.ndarray
    needs: np.ndarray
    amounts: np.ndarray


@dataclass(frozen=True)
class ServiceRules:
    """How work is served, as checked at the door.

    Attributes
    ----------
    discipline : int
        `FCFS`, `SHARED`, `SESSIONS` or `STAYS` of `labkit.engine.queues`.
    information : Information
    limits : int64 array, shape (servers,), or None
        Most tasks on a server.
    divert : bool
        A task whose server is full goes to another option.
    fails : bool
        Servers go down.
    on_failure : str
        One of `FAILURE_MODES`.
    target : float
        Sojourns beyond it are counted as late.
    levels : int
        For how many numbers of tasks the time at each is kept for each server; 0 for none.
    scale : float
        What times are multiplied by before they are counted, a power of two; see `counting_scale`.
    """

    discipline: int
    information: Information
    limits: np.ndarray | None = None
    divert: bool = True
    fails: bool = False
    on_failure: str = "wait"
    target: float = np.inf
    levels: int = 0
    scale: float = 1.0


def counting_scale(typical: float, low: float, high: float) -> float:
    """Return the power of two that brings a typical time into the middle of what is counted.

    Parameters
    ----------
    typical : float
        Such as a mean service time, above 0.
    low, high : float
        Typical times between these are counted as they are.
    """
    return 1.0 if low <= typical <= high else 2.0 ** -math.frexp(typical)[1]


class ServiceJob:
    """One call, prepared: what all its replicates share."""

    def __init__(
        self,
        fleet: Fleet,
        rule: Policy,
        rules: ServiceRules,
        seed: np.random.SeedSequence,
        state: tuple[Any, ...] | None = None,
    ) -> None:
        if rule.moves_work:
            raise InputError(
                f"policy {rule.name} moves work already placed, which has no meaning where work leaves; "
                "give a placement rule."
            )
        self.fleet, self.rule, self.rules, self.seed = fleet, rule, rules, seed
        self.weights = comparison_weights(fleet.capacity)
        self.state = rule.prepare(fleet) if state is None else state
        self.renewal = rule.renewal(fleet)
        self.guarded = rules.limits is not None or rules.fails
        limits = np.full(fleet.size, NO_LIMIT) if rules.limits is None else rules.limits
        self.limits = limits if self.guarded else np.empty(0, np.int64)
        # With late reports a rule's picture changes with the reports only.
        self.far = rule.looks_far and rules.information.every == 0 and rules.discipline != q.STAYS
        rule.check(np.float64)
        self.loops = loops_of(rule)

    def __reduce__(self) -> tuple:
        """Send what was given, and the rule's tables, which another processor could work out differently."""
        return ServiceJob, (self.fleet, self.rule, self.rules, self.seed, self.state)

    def start(self, replicate: int) -> "Progress":
        """Return an empty fleet at time 0."""
        return Progress(self, replicate)

    def refuse(self, error: Exception) -> None:
        """Raise the refusal for an error inside the rule, or the error itself."""
        refusal = self.rule.explain(error)
        if refusal is None:
            raise error
        raise refusal from error


class Progress:
    """One replicate on its way.

    Attributes
    ----------
    intervals : list of float64 arrays, shape (len(INTERVAL),)
        What was measured in each interval that is over.
    area, work, peak : float64 arrays, shape (servers,)
        Of each server since the last `reset`: integrals over time of its number of tasks and of its work
        (time busy, or load for sessions), and its highest load.
    """

    def __init__(self, job: ServiceJob, replicate: int) -> None:
        servers, rules = job.fleet.size, job.rules
        self.job, self.replicate = job, replicate
        self.server = np.zeros((servers, 9))
        self.server[:, q.NEXT], self.server[:, q.DOWN] = np.inf, -1.0
        self.server[:, q.PACE] = 1.0 if job.fleet.capacity is None else 1.0 / job.fleet.capacity
        self.place = np.zeros((servers, 4), np.int64)
        self.pool = np.empty((1024, 5))
        self.loads = np.zeros(servers)
        self.counts = np.zeros(q.COUNTS, np.int64)
        self.counts[q.FREE :] = -1
        self.tally = np.zeros(q.TALLIES)
        self.tally[q.TARGET], self.tally[q.SCALE] = rules.target, rules.scale
        self.hist = np.zeros((2, q.BINS), np.int64)
        self.by_level = np.zeros((servers if rules.levels else 0, rules.levels + 1))
        every, dispatchers = rules.information.every, rules.information.dispatchers
        self.report = self.loads if every == 0 else np.zeros(servers)
        if dispatchers:
            self.pictures = np.zeros((dispatchers, servers))
        else:
            self.pictures = self.report.reshape(1, servers)
        self.calendar = np.full(2 << (servers - 1).bit_length() if job.far else 1, np.inf)
        self.own = kernel_state(job.seed, replicate, COINS)
        self.turns = kernel_state(job.seed, replicate, TURNS)
        self.moves = kernel_state(job.seed, replicate, MOVES)
        self.state = job.rule.own_state(job.state)
        self.area, self.work, self.peak = np.zeros(servers), np.zeros(servers), np.zeros(servers)
        self.intervals: list[np.ndarray] = []
        self.since = 0.0
        self.measuring = False  # the warm-up is over
        self.moments: Iterator[Moment] = iter(())
        self.next = NEVER

    def _queues(self) -> tuple[np.ndarray, ...]:
        return (
            self.server, self.place, self.pool, self.loads, self.tally, self.counts, self.hist, self.by_level,
        )  # fmt: skip

    def advance(self, batch: Batch, begin: int, stop: int, until: float) -> int:
        """Serve arrivals `begin` to `stop` of a batch that come before `until`; return how many are done."""
        job, rules = self.job, self.job.rules
        every, dispatchers = float(rules.information.every), rules.information.dispatchers
        while True:
            try:
                # Without the compiler unsigned words are NumPy scalars, which warn when they wrap around.
                with np.errstate(over="ignore" if CONFIG.DISABLE_JIT else "warn"):
                    done = job.loops.serve(
                        *batch, begin, stop, until, rules.discipline, job.far, every, dispatchers > 0,
                        job.renewal, job.guarded, job.rule.by_table, rules.divert, rules.on_failure != "lost",
                        self.own, self.turns, self.state, job.weights, job.limits, self.server, self.place,
                        self.pool, self.loads, self.report, self.pictures, read_only(self.pictures.view()),
                        self.calendar, self.tally, self.counts, self.hist, self.by_level,
                    )  # fmt: skip
            except Exception as error:
                job.refuse(error)
            if done < 0:
                raise InputError(
                    f"policy {job.rule.name} picked a position outside the options of task "
                    f"{self.counts[q.SEEN] + 1}; it must return a whole number from 0 to the number of "
                    "options less 1."
                )
            begin = done
            if done == stop or batch.times[done] >= until:
                return done
            self._make_room(len(self.pool))

    def expect(self, moments: Iterator[Moment]) -> None:
        """Take the moments, in order, at which something other than an arrival happens."""
        self.moments = moments
        self.next = next(moments, NEVER)

    def take(self, batch: Batch, *, beyond: bool) -> bool:
        """Serve the tasks of a batch, and what happens between them.

        The first end of an interval ends the warm-up. Returns whether there is something left to happen;
        where nothing is, the rest of the batch is served only if `beyond`.
        """
        begin, stop = 0, len(batch.times)
        while self.next is not NEVER or beyond:
            at, what = self.next
            begin = self.advance(batch, begin, stop, at)
            if begin == stop:
                return True
            if what is None:
                self.close(at)
                if not self.measuring:
                    self.reset(at)
            elif what[1]:
                self.back(what[0], at)
            else:
                self.fail(what[0], at)
            self.next = next(self.moments, NEVER)
        return False

    def _make_room(self, rows: int) -> None:
        self.pool = np.concatenate([self.pool, np.empty((rows, 5))])

    def close(self, now: float) -> None:
        """End an interval at time `now`: all that arrives before it has been served."""
        kept(q.close_interval)(*self._queues(), now, self.job.rules.discipline)
        server, fleet = self.server, self.job.fleet
        peak = server[:, q.PEAK]
        self.area += server[:, q.AREA]
        self.work += server[:, q.WORK]
        np.maximum(self.peak, peak, out=self.peak)
        capacity = 1.0 if fleet.capacity is None else fleet.capacity
        work = server[:, q.WORK]
        if self.job.rules.discipline in (q.FCFS, q.SHARED):
            work = work * capacity
        self.intervals.append(
            np.array(
                [
                    *(self.since, now, *self.counts[list(_COUNTED)]),
                    *(self.tally[q.SOJOURN], self.tally[q.WAITING], server[:, q.AREA].sum(), work.sum()),
                    *(peak.max(), (peak / capacity).max()),
                ]
            )
        )
        self.counts[list(_COUNTED)] = 0
        self.tally[[q.SOJOURN, q.WAITING]] = 0.0
        server[:, [q.AREA, q.WORK]] = 0.0
        server[:, q.PEAK] = self.loads
        self.since = now

    def reset(self, now: float) -> None:
        """Forget what was measured before `now`, at which an interval has just been closed."""
        self.intervals.clear()
        self.measuring = True
        self.tally[[q.OVERLAP, q.LONGEST]] = 0.0
        self.tally[q.WINDOW] = now
        self.tally[q.LEVELS :] = 0.0
        self.hist[:] = 0
        self.by_level[:] = 0.0
        self.area[:], self.work[:], self.peak[:] = 0.0, 0.0, self.loads

    def overlap(self, now: float) -> float:
        """Return the time that tasks spent on servers since the last `reset`, summed task by task."""
        present = kept(q.present_overlap)(self.place, self.pool, self.tally[q.WINDOW], now)
        return float(self.tally[q.OVERLAP]) + present

    def fail(self, server: int, now: float) -> None:
        """Take a server down, after all that arrives before `now` has been served."""
        job, v = self.job, np.uint64(server)
        kept(take_down)(*self._queues(), v, now, job.rules.discipline)
        if job.rules.on_failure == "wait":
            self.counts[q.WAITED] += self.place[server, q.HELD]
        elif job.rules.on_failure == "lost":
            kept(lose_all)(self.server, self.place, self.pool, self.loads, self.tally, self.counts, v, now)
        else:
            self._requeue(v, now)
        self._loads_jumped(v)

    def back(self, server: int, now: float) -> None:
        """Bring a server back up."""
        v = np.uint64(server)
        kept(bring_up)(
            self.server, self.place, self.pool, self.loads, self.tally, self.by_level, v, now,
            self.job.rules.discipline,
        )  # fmt: skip
        self._loads_jumped(v)

    def _requeue(self, v: np.uint64, now: float) -> None:
        job = self.job
        held = int(self.place[:, q.HELD].sum())
        spare = len(self.pool) - int(self.counts[q.USED])
        # Each part that is outgrown leaves half of its successor behind.
        if spare < 8 * held + 16:
            self._make_room(8 * held + 16)
        law = arrivals_of(job.fleet)
        try:
            failed = job.loops.requeue(
                law.options, law.servers, law.distinct, self.moves, job.rules.discipline, job.rule.by_table,
                self.own, self.state, job.weights, job.limits, self.server, self.place, self.pool, self.loads,
                read_only(self.report.view()), self.calendar, self.tally, self.counts, self.hist,
                self.by_level, v, now,
            )  # fmt: skip
        except Exception as error:
            job.refuse(error)
        if failed:
            raise InputError(f"policy {job.rule.name} picked a position outside the options of a task.")

    def _loads_jumped(self, v: np.uint64) -> None:
        if self.job.far:
            kept(set_next)(self.server, self.calendar, v)
            self.counts[q.RENEW] = self.job.renewal == WITH_REPORTS


class Loops(NamedTuple):
    """The compiled loops of one rule."""

    serve: Callable
    requeue: Callable


@lru_cache(maxsize=64)
def _loops(kernel_name: str, choose: Callable, renew: Callable, after: Callable, cache: bool) -> Loops:
    pick = specialise(pick_open, kernel_name, cache=False, choose=folded(choose))
    serve = specialise(
        serve_tasks, kernel_name, cache=cache, choose=inlined(choose), after=inlined(after),
        renew=compiled(renew), pick_open=pick,
    )  # fmt: skip
    return Loops(serve, specialise(requeue_all, kernel_name, cache=cache, pick_open=pick))


def loops_of(rule: Policy) -> Loops:
    """Return the loops compiled for a policy's chooser."""
    return _loops(rule.kernel_name, rule.choose, rule.renew, rule.after, rule.cached)
