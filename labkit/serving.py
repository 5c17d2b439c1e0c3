"""Serving work that leaves: the public door, where all that is given is checked."""

import heapq
import math
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np

from labkit.checks import check_member, check_number, check_positive, check_whole
from labkit.engine import queues as q
from labkit.engine.arrival_times import Rates, poisson_batches
from labkit.engine.failures import Failures, RandomFailures, checked_failures
from labkit.engine.information import Information, checked_information
from labkit.engine.service import (
    DISCIPLINES,
    FAILURE_MODES,
    INTERVAL,
    Moment,
    ServiceJob,
    ServiceRules,
    changes,
    counting_scale,
)
from labkit.engine.service_checks import (
    FULL,
    MOST_INTERVALS,
    checked_discipline,
    checked_levels,
    checked_limits,
    checked_rates,
    lasting_availability,
    queues_are_cut,
)
from labkit.engine.service_laws import ServiceLaw, parse_service
from labkit.engine.service_measures import Measured, ServiceOutcome, measured
from labkit.errors import InputError
from labkit.fleet.model import Fleet, check_fleet
from labkit.policies.base import Policy
from labkit.policies.naming import parse_policy
from labkit.policies.one_choice import OneChoice
from labkit.randomness import FAILURES, check_replicates, generator, seed_sequence
from labkit.sharing.replicates import run_replicates
from labkit.stationary.warm_up import LEAST_INTERVALS, first_kept
from labkit.survey.stability import refuse_unstable

INTERVALS = 60
# More would take days.
MOST_TASKS = 1e12
# Intervals of the series that the end of the warm-up is looked for in, and how many replicates it averages.
PILOT_INTERVALS, PILOT_REPLICATES = 400, 8


def serve(
    fleet: Fleet,
    policy: Policy | str,
    *,
    load_factor: float,
    horizon: float,
    warmup: float | None = None,
    service: ServiceLaw | str = "exponential",
    discipline: str = "fcfs",
    replicates: int = 1,
    rng: Any,
    information: Information | None = None,
    profile: Sequence[float] | None = None,
    period: float | None = None,
    limit: Any | None = None,
    on_full: str = "another",
    failures: Failures | RandomFailures | None = None,
    on_failure: str = "wait",
    target: float | None = None,
    levels: int = 0,
    intervals: int = INTERVALS,
    workers: int = 1,
    first_replicate: int = 0,
) -> ServiceOutcome:
    """Serve tasks that arrive as a Poisson process, on choices drawn by demand, and leave when they are done.

    The load of a server is the number of tasks on it, waiting and in service; rules compare load ÷ capacity.

    Parameters
    ----------
    fleet : Fleet
        Capacity is work a unit of time (sessions: how many a server is made for at a time).
    policy : Policy or str
        The rule, or its name.
    load_factor : float
        Work that arrives a unit of time ÷ total capacity, above 0. So tasks arrive at the rate load_factor ×
        total capacity ÷ mean requirement.
    horizon : float
        When the run ends, in units of time. The fleet is empty at time 0.
    warmup : float, optional
        When measuring begins, from 0 to below `horizon`. Default: found by MSER-5 on the number of tasks in a
        pilot of the replicates 0 to 7 (fewer where none has so high a number), and reported.
    service : ServiceLaw or str
        Law of the requirements, such as ``"exponential"``, ``"lognormal(cv=2)"`` or ``lk.Empirical(sample)``:
        work that a server of capacity 1 does in that time; for sessions the time itself.
    discipline : {"fcfs", "ps", "sessions"}
        First come, first served; processor sharing (the tasks on a server share its capacity equally); or
        sessions that begin at once and stay for their time. "first-come-first-served" and
        "processor-sharing" are understood, too.
    replicates : int
        Independent repetitions.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        The same int or SeedSequence gives every policy and every capacity the same arrivals.
    information : Fresh, Snapshot or Dispatchers, optional
        What the policy sees; ``every`` is in units of time here. Default: ``Fresh()``.
    profile : sequence of float, optional
        Relative arrival rates in equal parts of the `period`, at least 0, repeated for ever; their mean is
        the rate that `load_factor` gives. Default: a constant rate.
    period : float, optional
        Length of the profile, in units of time, such as a day.
    limit : int, array of int of shape (servers,), or "capacity", optional
        Most tasks on a server at a time; "capacity" is its capacity, rounded down. Default: no limit.
    on_full : {"another", "lost"}
        A task whose server is full goes to another of its options that is not (the rule picks among them;
        static-split and tree-flow, whose tables cannot, take the least loaded), or is lost. What finds no
        place is blocked, and counted.
    failures : Failures or RandomFailures, optional
        When servers go down and come back. Rules place on servers that are up, as with `on_full`.
    on_failure : {"wait", "requeue", "lost"}
        What becomes of the tasks on a server that goes down: they go on when it is back; each goes to another
        of its options at once and starts anew (it waits where none is open); or they are lost. Tasks that
        arrive while all their options are down wait at one of them, or ("lost") are lost. All are counted.
    target : float, optional
        Time beyond which a sojourn counts as late: adds `late_share`.
    levels : int
        Adds to `by_server` the share of time with at least 1 .. levels tasks on the server; at most 1,023.
    intervals : int
        Equal parts of the window for which sums are kept, for batch means.
    workers : int
        Threads that share the replicates. The result does not depend on it.
    first_replicate : int
        The number of the first replicate; see `labkit.place`. Give `warmup`, too, where a run is split: the
        pilot that finds it has as many replicates as the call, up to 8.

    Returns
    -------
    ServiceOutcome

    Raises
    ------
    InputError
        For any argument that is refused. Where work queues without limit, a load factor that no rule can
        serve is refused, with the limit and the bottleneck (`labkit.stability_limit`).
    NotStationary
        When the warm-up is to be found, and the horizon is too short for it.

    Notes
    -----
    Replicate r draws from the streams of `labkit.place`, and from stream 5 for the gaps between arrivals, 6
    for requirements, 7 for failures, 8 for the coins of requeued tasks.

    A server's capacity limits no sessions unless `limit` says so: `max_utilisation` tells how far beyond it
    they went.

    Examples
    --------
    >>> import labkit as lk
    >>> outcome = lk.serve(lk.ring(20), "least-loaded", load_factor=0.7, horizon=500.0, warmup=100.0, rng=1)
    >>> row = outcome.measures.iloc[0]
    >>> bool(1.5 < row["sojourn_mean"] < 2.5), bool(abs(row["little_error"]) < 1e-9)
    (True, True)
    """
    check_fleet(fleet)
    rule = parse_policy(policy)
    law = parse_service(service)
    load_factor = check_positive("load_factor", load_factor)
    horizon = check_positive("horizon", horizon)
    first_replicate, replicates = check_replicates(first_replicate, replicates)
    workers, intervals = check_whole("workers", workers), check_whole("intervals", intervals)
    if intervals > MOST_INTERVALS:
        raise InputError(f"intervals is {intervals}; give at most {MOST_INTERVALS:,}.")
    seed = seed_sequence(rng)
    discipline = checked_discipline(discipline)
    kind = DISCIPLINES[discipline]
    check_member("on_full", on_full, FULL)
    check_member("on_failure", on_failure, FAILURE_MODES)
    limits = checked_limits(limit, fleet)
    rates = checked_rates(load_factor * fleet.total_capacity / law.mean, profile, period, horizon)
    if rates.mean * horizon > MOST_TASKS:
        raise InputError(
            f"horizon is {horizon:g}, in which about {rates.mean * horizon:.3g} tasks arrive; give a shorter "
            f"one (at most {MOST_TASKS:g} tasks)."
        )
    failures = checked_failures(failures)
    levels = checked_levels(levels)
    if kind != q.SESSIONS and limits is None and not queues_are_cut(failures, on_failure):
        refuse_unstable(
            fleet, load_factor, even_split=isinstance(rule, OneChoice),
            availability=lasting_availability(failures), requeued=on_failure == "requeue",
        )  # fmt: skip
    # Tasks of mean size on a server of mean capacity.
    typical = law.mean if kind == q.SESSIONS else law.mean * fleet.size / fleet.total_capacity
    rules = ServiceRules(
        discipline=kind,
        information=checked_information(information),
        limits=limits,
        divert=on_full == "another",
        fails=failures is not None,
        on_failure=on_failure,
        target=math.inf if target is None else check_positive("target", target),
        levels=levels,
        scale=counting_scale(typical, 2.0**-16, 2.0**16),
    )
    if isinstance(failures, Failures):
        failures.check_servers(fleet)
    job = _Serving(ServiceJob(fleet, rule, rules, seed), rates, law, failures, horizon)
    after = first_replicate + replicates
    numbers = range(first_replicate, after)
    found_by = "given" if warmup is not None else "MSER-5"
    if warmup is None:
        warmup = job.found_warm_up(range(min(after, PILOT_REPLICATES)), workers)
    warmup = check_number("warmup", warmup)
    if not 0 <= warmup < horizon:
        raise InputError(
            f"warmup is {warmup:g} and horizon {horizon:g}; give a warm-up of at least 0 and a later horizon."
        )
    edges = np.linspace(warmup, horizon, intervals + 1)
    results = job.run_all(numbers, edges, workers)
    return ServiceOutcome(
        fleet=fleet, policy=rule.name, information=rules.information.name, discipline=discipline,
        service=law.name, load_factor=load_factor, warmup=warmup, horizon=horizon, warmup_found_by=found_by,
        target=rules.target, results=tuple(results),
    )  # fmt: skip


class _Serving:
    """One call of `serve`, prepared."""

    def __init__(
        self,
        job: ServiceJob,
        rates: Rates,
        law: ServiceLaw,
        failures: Failures | RandomFailures | None,
        horizon: float,
    ) -> None:
        self.job, self.rates, self.law, self.failures, self.horizon = job, rates, law, failures, horizon

    def run_all(self, replicates: range, edges: np.ndarray, workers: int) -> list[Measured]:
        """Run replicates and measure between the edges of intervals; the first edge ends the warm-up."""
        return run_replicates(_Window(self, edges), replicates, workers=workers)

    def run(self, replicate: int, edges: np.ndarray) -> Measured:
        """Run one replicate up to the last edge."""
        job = self.job
        progress = job.start(replicate)
        progress.expect(self._moments(replicate, edges))
        for batch in poisson_batches(job.fleet, self.rates, self.law, self.horizon, job.seed, replicate):
            if not progress.take(batch, beyond=False):
                return measured(progress, float(edges[-1]))
        raise AssertionError("arrivals never end")

    def found_warm_up(self, replicates: range, workers: int) -> float:
        """Return the end of the warm-up, from the mean number of tasks in a pilot run."""
        if len(self.rates.rate) == 1:
            edges = np.linspace(0.0, self.horizon, PILOT_INTERVALS + 1)
        else:
            # Over whole periods the mean does not follow the time of day.
            period = self.rates.length * len(self.rates.rate)
            count = int(self.horizon / period)
            if count < LEAST_INTERVALS:
                raise InputError(
                    f"warmup is not given, and the horizon holds {count} periods of the profile; it can be "
                    f"found from {LEAST_INTERVALS} on, so give a warmup, such as a few periods."
                )
            edges = np.linspace(0.0, count * period, count + 1)
        pilot = [each.intervals for each in self.run_all(replicates, edges, workers)]
        series = np.array([intervals[:, INTERVAL.index("area")] for intervals in pilot])
        return float(edges[first_kept(series, name="the number of tasks in the pilot run")])

    def _moments(self, replicate: int, edges: np.ndarray) -> Iterator[Moment]:
        """Yield when an interval ends (None) or a server (position, whether it comes back) changes."""
        ends: list[Moment] = [(float(edge), None) for edge in edges]
        if self.failures is None:
            return iter(ends)
        draws = generator(self.job.seed, replicate, FAILURES)
        happening = self.failures.events(self.job.fleet, self.horizon, draws)
        return heapq.merge(ends, changes(*happening), key=lambda moment: moment[0])


class _Window:
    """A call of `serve`, measured between the edges of intervals."""

    def __init__(self, serving: _Serving, edges: np.ndarray) -> None:
        self.serving, self.edges = serving, edges

    def compile(self) -> None:
        """Serve for no time at all, so that the loop is compiled before threads share it."""
        serving, job = self.serving, self.serving.job
        batches = poisson_batches(job.fleet, serving.rates, serving.law, serving.horizon, job.seed, 0)
        job.start(0).advance(next(batches), 0, 0, 0.0)

    def run(self, replicate: int, given: None) -> Measured:
        """Run one replicate."""
        return self.serving.run(replicate, self.edges)
