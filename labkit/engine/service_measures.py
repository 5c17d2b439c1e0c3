"""What is measured where work leaves: tables from the sums that the loop keeps."""

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd

from labkit.cards.shown import Shown
from labkit.engine import queues as q
from labkit.engine.service import INTERVAL, Progress
from labkit.fleet.model import Fleet

PROBABILITIES = {"p50": 0.5, "p90": 0.9, "p99": 0.99}


@dataclass(frozen=True)
class Measured:
    """What one replicate leaves when it is over."""

    replicate: int
    intervals: np.ndarray  # float64 (intervals, len(INTERVAL))
    quantiles: np.ndarray  # float64 (2, len(PROBABILITIES)): of sojourn and of waiting time
    longest: float
    level_time: np.ndarray  # float64 (TOP + 1,): server-time with 0, 1, 2 ... tasks
    by_level: np.ndarray  # float64 (servers or 0, levels + 1)
    area: np.ndarray  # float64 (servers,): integral of the number of tasks
    work: np.ndarray  # float64 (servers,): time busy, or integral of the load
    peak: np.ndarray  # float64 (servers,): highest load
    loads: np.ndarray  # float64 (servers,): loads at the end
    overlap: float  # time spent on servers, summed task by task


def measured(progress: Progress, now: float) -> Measured:
    """Return what a replicate has measured up to `now`, the end of its last interval."""
    shares = np.array(list(PROBABILITIES.values()))
    longest, scale = float(progress.tally[q.LONGEST]), progress.job.rules.scale
    last = int(np.flatnonzero(progress.tally[q.LEVELS :]).max(initial=0)) + 1
    return Measured(
        replicate=progress.replicate,
        intervals=np.array(progress.intervals),
        quantiles=np.array([quantiles(counts, shares, longest * scale) for counts in progress.hist]) / scale,
        longest=longest,
        level_time=progress.tally[q.LEVELS : q.LEVELS + last].copy(),
        by_level=progress.by_level,
        area=progress.area,
        work=progress.work,
        peak=progress.peak,
        loads=progress.loads,
        overlap=progress.overlap(now),
    )


def quantiles(counts: np.ndarray, shares: np.ndarray, longest: float) -> np.ndarray:
    """Return quantiles of times that were counted in bins, exact to one bin: 0.2 %.

    Parameters
    ----------
    counts : int64 array, shape (BINS,)
    shares : float64 array
        Probabilities.
    longest : float
        The highest of the times.

    Returns
    -------
    float64 array
        NaN when nothing was counted, and in the highest bin, which has no end; 0 in the lowest bin.
    """
    total = int(counts.sum())
    if total == 0:
        return np.full(len(shares), np.nan)
    passed = np.cumsum(counts)
    ranks = np.clip(np.ceil(shares * total), 1, total)
    bins = np.searchsorted(passed, ranks)
    inside = (ranks - (passed[bins] - counts[bins]) - 0.5) / counts[bins]
    low, high = _edges(bins), _edges(bins + 1)
    found = np.where(bins == 0, 0.0, low + inside * (high - low))
    found = np.where(bins == q.BINS - 1, np.nan, found)
    return np.minimum(found, longest)


def _edges(bins: np.ndarray) -> np.ndarray:
    """Return the lower edge of each bin, as a time."""
    return ((bins.astype(np.int64) + ((1023 - 40) << 9)) << 43).view(np.float64)


@dataclass(frozen=True)
class ServiceOutcome(Shown):
    """What `labkit.serve`, or `labkit.replay` of a trace with durations, measured.

    Attributes
    ----------
    measures : pandas.DataFrame
        One row a replicate, over the window from `warmup` to `horizon`:

        - policy, information, replicate, load_factor, warmup, horizon
        - arrivals, completed: tasks that arrived and that left within the window
        - sojourn_mean, sojourn_p50, sojourn_p90, sojourn_p99, sojourn_max: time from arrival to departure,
          of the tasks that left within the window, those that were lost left out; quantiles to 0.2 %
        - waiting_mean, waiting_p50, waiting_p90, waiting_p99: sojourn less the time that the task alone on
          its server would have taken; waiting_share: share of tasks that waited
        - queue_mean: mean number of tasks on a server, waiting and in service
        - utilisation: share of the capacity in use; for sessions mean load ÷ capacity
        - max_load, max_utilisation: highest load, and load ÷ capacity, of any server within the window
        - blocked_share: share of arrivals that found no place; lost, requeued, waited: tasks that failures
          of servers cost, moved, or held up
        - late_share: share of the tasks that took longer than `target` (where there is one)
        - little_error: relative difference between the integral of the numbers of tasks and the time that
          the tasks spent on servers, summed one by one (Little's law; rounding only)
    by_interval : pandas.DataFrame
        The sums of which they are made, one row a replicate and part of the window.
    by_server : pandas.DataFrame
        One row a replicate and server: queue_mean, utilisation, max_load, and (with ``levels``)
        share_at_least_1 and on, the share of time with that many tasks.
    tails : pandas.DataFrame
        All servers pooled, one row a replicate and number of tasks `at_least`: `share`, the share of
        server time with at least that many.
    policy, information, discipline, service : str
        What was run, in words.
    warmup_found_by : str
        "given", or the method that found it.

    Examples
    --------
    Three servers with work for half of their capacity:

    >>> import labkit as lk
    >>> outcome = lk.serve(
    ...     lk.ring(3), "least-loaded", load_factor=0.5, horizon=2000.0, warmup=100.0, replicates=2, rng=1,
    ...     levels=1, intervals=10,
    ... )
    >>> outcome.policy, outcome.service, outcome.warmup_found_by
    ('least-loaded', 'exponential', 'given')
    >>> outcome.measures[["replicate", "utilisation", "queue_mean"]].round(2).values.tolist()
    [[0.0, 0.52, 0.72], [1.0, 0.52, 0.69]]
    >>> outcome.by_server[["server", "queue_mean", "share_at_least_1"]].head(3).round(2).values.tolist()
    [[0.0, 0.75, 0.53], [1.0, 0.69, 0.51], [2.0, 0.71, 0.51]]
    >>> outcome.tails[["at_least", "share"]].head(3).round(2).values.tolist()
    [[0.0, 1.0], [1.0, 0.52], [2.0, 0.17]]
    >>> len(outcome.by_interval)
    20
    """

    fleet: Fleet
    policy: str
    information: str
    discipline: str
    service: str
    load_factor: float
    warmup: float
    horizon: float
    warmup_found_by: str
    target: float
    results: tuple[Measured, ...]
    origin: float = 0.0

    @cached_property
    def by_interval(self) -> pd.DataFrame:
        """The sums of which the measures are made, one row a replicate and interval."""
        counts = [len(each.intervals) for each in self.results]
        values = np.concatenate([each.intervals for each in self.results])
        table = pd.DataFrame(values, columns=list(INTERVAL))
        whole = [name for name in INTERVAL[2:10]]
        table[whole] = table[whole].astype(np.int64)
        table[["start", "end"]] += self.origin
        about: dict[str, Any] = dict(self._about)
        about["replicate"] = np.repeat([each.replicate for each in self.results], counts)
        about["interval"] = np.concatenate([np.arange(count) for count in counts])
        return pd.concat([pd.DataFrame(about), table], axis=1)

    @property
    def _about(self) -> dict[str, Any]:
        """What tells the rows of this outcome from those of another."""
        about: dict[str, Any] = {"policy": self.policy, "information": self.information}
        return about if np.isnan(self.load_factor) else about | {"load_factor": self.load_factor}

    @cached_property
    def measures(self) -> pd.DataFrame:
        """The table of measures, one row a replicate."""
        return pd.DataFrame([self._row(each) for each in self.results])

    def _row(self, each: Measured) -> dict[str, Any]:
        sums = dict(zip(INTERVAL, each.intervals.sum(axis=0), strict=True))
        highest = dict(zip(INTERVAL, each.intervals.max(axis=0), strict=True))
        span = self.horizon - self.warmup
        completed, arrived = sums["completed"], sums["arrivals"]
        row: dict[str, Any] = self._about | {"replicate": each.replicate}
        row |= {"warmup": self.origin + self.warmup, "horizon": self.origin + self.horizon}
        row |= {"arrivals": int(arrived), "completed": int(completed)}
        for which, name in enumerate(("sojourn", "waiting")):
            row[f"{name}_mean"] = _ratio(sums[f"{name}_sum"], completed)
            for place, label in enumerate(PROBABILITIES):
                row[f"{name}_{label}"] = each.quantiles[which, place]
            if name == "sojourn":
                row["sojourn_max"] = each.longest if completed else np.nan
        row["waiting_share"] = _ratio(sums["delayed"], completed)
        row["queue_mean"] = sums["area"] / (span * self.fleet.size)
        row["utilisation"] = sums["work"] / (span * self.fleet.total_capacity)
        row |= {name: highest[name] for name in ("max_load", "max_utilisation")}
        row["blocked_share"] = _ratio(sums["blocked"], arrived)
        row |= {name: int(sums[name]) for name in ("lost", "requeued", "waited")}
        if np.isfinite(self.target):
            row["late_share"] = _ratio(sums["late"], completed)
        row["little_error"] = _ratio(each.overlap - sums["area"], sums["area"]) if sums["area"] else 0.0
        return row

    def _row_of(self, replicate: int) -> dict[str, Any]:
        return self._about | {"replicate": replicate, "horizon": self.origin + self.horizon}

    @cached_property
    def by_server(self) -> pd.DataFrame:
        """What each server had over the window, one row a replicate and server."""
        span, servers = self.horizon - self.warmup, self.fleet.size
        capacity = (
            1.0 if self.fleet.capacity is None or self.discipline != "sessions" else self.fleet.capacity
        )
        tables = []
        for each in self.results:
            columns: dict[str, Any] = {"server": pd.Series(self.fleet.names)}
            columns["queue_mean"] = each.area / span
            columns["utilisation"] = each.work / (span * capacity)
            columns["max_load"] = each.peak
            if len(each.by_level) == servers:
                passed = np.cumsum(each.by_level[:, ::-1], axis=1)[:, ::-1]
                for level in range(1, each.by_level.shape[1]):
                    columns[f"share_at_least_{level}"] = passed[:, level] / span
            tables.append(pd.DataFrame({**self._row_of(each.replicate), **columns}))
        return pd.concat(tables, ignore_index=True)

    @cached_property
    def tails(self) -> pd.DataFrame:
        """How often a server has at least so many tasks, one row a replicate and number."""
        span = (self.horizon - self.warmup) * self.fleet.size
        tables = [
            pd.DataFrame(
                {
                    **self._row_of(each.replicate),
                    "at_least": np.arange(len(each.level_time)),
                    "share": np.cumsum(each.level_time[::-1])[::-1] / span,
                }
            )
            for each in self.results
        ]
        return pd.concat(tables, ignore_index=True)

    def __repr__(self) -> str:
        return (
            f"<service of {self.policy}, {self.discipline}, information {self.information}: "
            f"{len(self.results)} replicates, {self.fleet.size} servers, from {self.warmup:g} to "
            f"{self.horizon:g}>"
        )


def _ratio(part: float, whole: float) -> float:
    return float(part / whole) if whole else float("nan")
