"""A pilot of a study: each grid point with few replicates, in a store that is thrown away."""

import math
import time
from collections.abc import Callable
from concurrent.futures import FIRST_COMPLETED, ThreadPoolExecutor, wait
from dataclasses import dataclass, field
from itertools import count
from pathlib import Path
from threading import Lock
from typing import Any

import numpy as np
import pandas as pd

from labkit.analysis.sizing import replicates_for
from labkit.analysis.tables import moments_of, prepare
from labkit.checks import check_whole, nearest
from labkit.errors import InputError
from labkit.records.identity import canonical, identify
from labkit.records.schema import measured_part, row_of_origin
from labkit.records.store import Store
from labkit.studies.grouping import in_words
from labkit.studies.model import Point, Study
from labkit.studies.scratch import scratch_folder
from labkit.studies.warmth import COLD, compiled_files, is_warm, set_warm

LEAST_PILOT = 5
# Seconds a pilot may always take, and its share of the time that is asked for.
LEAST_BUDGET, SHARE = 20.0, 0.1
# Seconds that a point's second run may always take.
LEAST_SHARE = 6.0
# Runs of a point whose times differ by so many seconds tell the time of a replicate in spite of jitter.
CLEAR = 1.0
MOST_RUNS = 3
# Times are taken with at least this many times the pilot's replicates, where there is time.
WELL = 5
# Of the shortest run seen, the part that does not come from its replicates: loading code, reading tables.
_SURELY_FIXED = 0.8


class PilotFailed(RuntimeError):
    """A notebook that broke in the pilot."""


@dataclass(frozen=True)
class _Run:
    """One execution: how long it computed, how long it took in all, and the groups that it measured."""

    replicates: int
    elapsed: float
    wall: float
    groups: list[dict[str, Any]]


@dataclass
class _Cost:
    """What a point was found to take."""

    a_replicate: float
    fixed: float
    run: _Run
    clear: bool = True


def pilot_study(
    study: Study,
    *,
    precision: float,
    seconds: float,
    replicates: int = 20,
    measure: str = "gap",
    jobs: int = 1,
    threads: int = 1,
    x: str | None = None,
    say: Callable[[str], None] = lambda sentence: None,
) -> pd.DataFrame:
    """Run a study's points with few replicates, and return the table that `labkit.size_study` takes.

    Parameters
    ----------
    study : Study
        Its notebook declares `replicates`, `study` and `store`.
    precision : float
        That will be asked for; the pilot is not taken farther than it.
    seconds : float
        Time that the whole study may take. The pilot takes about a tenth of it, at least 20 s, and longer
        only where two sizes of each kind, or a point without any size, need it, or code is compiled.
    replicates : int
        Of each point's first run, at least 5.
    measure : str
        The column of the record whose mean is to be known.
    jobs, threads : int
        Kernels at the same time, and threads in each, as in the run that is planned.
    x : str, optional
        A grid parameter that is the size of a point. Sizes that would take too long are extrapolated from
        the smaller ones: times by a power law, the spread relative to the mean as at the largest one piloted.
    say : callable
        Called with a sentence for the user.

    Returns
    -------
    pandas.DataFrame
        One row a point and group, points in the order of the grid; also `source`, in words, and `x`.

    Raises
    ------
    InputError
        When a value is refused, by labkit or by the notebook.
    PilotFailed
        When the notebook breaks.
    """
    check_whole("pilot", replicates, least=LEAST_PILOT)
    if "replicates" not in study.notebook.parameters:
        raise InputError(
            f"notebook {study.notebook.name} declares no parameter replicates, so there is nothing to size."
        )
    with scratch_folder() as scratch:
        work = _Pilot(study, scratch, precision, replicates, measure, threads, x, jobs)
        families = _families(study, x)
        if not is_warm():
            say(COLD)
            work.run(families[0][0], LEAST_PILOT)
            set_warm()
        work.deadline = time.monotonic() + max(LEAST_BUDGET, SHARE * seconds)
        tables = _side_by_side(work.family, families, min(jobs, len(families)))
    order = {point.run_id: at for at, point in enumerate(study.points)}
    rows = sorted((row for table in tables for row in table), key=lambda row: order[row["run"]])
    return pd.DataFrame(rows).drop(columns="run")


def _families(study: Study, x: str | None) -> list[list[Point]]:
    """Return the points that differ only in their size, ascending."""
    found: dict[str, list[Point]] = {}
    for point in study.points:
        others = [point.parameters[name] for name in study.grid if name != x]
        found.setdefault(canonical(others), []).append(point)
    if x is None:
        return [[point] for points in found.values() for point in points]
    return [sorted(points, key=lambda point: point.parameters[x]) for points in found.values()]


def _side_by_side(function: Callable, items: list[Any], jobs: int) -> list[Any]:
    pool = ThreadPoolExecutor(jobs)
    try:
        left = futures = [pool.submit(function, item) for item in items]
        while left:
            # waiting without end would delay a signal until a run is done
            ended, waiting = wait(left, timeout=0.2, return_when=FIRST_COMPLETED)
            for future in ended:
                future.result()
            left = list(waiting)
        return [future.result() for future in futures]
    except BaseException:
        from labkit.studies.kernels import end_all

        pool.shutdown(wait=False, cancel_futures=True)
        end_all()
        raise
    finally:
        pool.shutdown()


@dataclass
class _Pilot:
    """A pilot under way; `begun` counts the points, `floor` is the shortest time that one computed."""

    study: Study
    scratch: Path
    precision: float
    replicates: int
    measure: str
    threads: int
    x: str | None
    jobs: int
    deadline: float = math.inf
    begun: int = 0
    floor: float = math.inf
    lock: Lock = field(default_factory=Lock)
    numbers: Any = field(default_factory=count)

    def family(self, points: list[Point]) -> list[dict[str, Any]]:
        """Measure points of ascending size while there is time; extrapolate the others."""
        costs: list[_Cost] = []
        rows: list[dict[str, Any]] = []
        for at, point in enumerate(points):
            if len(costs) == at and (at < 2 or self._in_time(points[:at], costs, point)):
                cost = self.measure_point(point)
                costs.append(cost)
                source = f"{cost.run.replicates:,} replicates"
            else:
                with self.lock:
                    self.begun += 1
                cost = self._extrapolated(points, costs, point)
                last = points[len(costs) - 1].parameters
                source = (
                    f"extrapolated from {in_words({name: last[name] for name in last if name == self.x})}"
                )
            rows += self._rows(point, cost, source, piloted=len(costs) > at)
        return rows

    def _in_time(self, points: list[Point], costs: list[_Cost], point: Point) -> bool:
        cost = self._extrapolated(points, costs, point)
        return time.monotonic() + cost.fixed + self.replicates * cost.a_replicate <= self.deadline

    def _extrapolated(self, points: list[Point], costs: list[_Cost], point: Point) -> _Cost:
        assert self.x is not None
        sizes = [float(each.parameters[self.x]) for each in points[: len(costs)]]
        ahead = math.log(float(point.parameters[self.x]) / sizes[-1])
        if len(costs) > 1 and costs[-1].clear:
            between = math.log(sizes[-1] / sizes[-2])
            slope = _slope(costs[-2].a_replicate, costs[-1].a_replicate, between)
            fixed = _slope(costs[-2].fixed, costs[-1].fixed, between)
        else:
            slope, fixed = 1.0, 0.0
        last = costs[-1]
        a_replicate = last.a_replicate * math.exp(slope * ahead)
        return _Cost(a_replicate, last.fixed * math.exp(min(fixed, slope) * ahead), last.run)

    def _rows(self, point: Point, cost: _Cost, source: str, piloted: bool) -> list[dict[str, Any]]:
        values = {name: point.parameters[name] for name in self.study.grid}
        about = {
            "run": point.run_id,
            "point": in_words(values) or "the only point",
            **{name: values[name] for name in values if name == self.x},
        }
        times = {"seconds_a_replicate": cost.a_replicate, "seconds_fixed": cost.fixed}
        return [
            {
                **about,
                **group,
                "replicates": cost.run.replicates,
                **times,
                "piloted": piloted,
                "source": source,
            }
            for group in cost.run.groups
        ]

    def measure_point(self, point: Point) -> _Cost:
        """Return what a point takes; it may use its share of the time that is left."""
        before, begun = compiled_files(), time.monotonic()
        first = self.run(point, self.replicates)
        if compiled_files() > before:  # its time was that of compiling
            with self.lock:
                self.deadline += time.monotonic() - begun
            first = self.run(point, self.replicates)
        self.floor = min(self.floor, first.elapsed)
        wanted = max(WELL * self.replicates, *(self._needed(group) for group in first.groups))
        runs, share = [first], self._share_of_time()
        until = time.monotonic() + share
        more = self._next(runs, wanted, max(share, LEAST_SHARE))
        while more is not None:
            runs.append(self.run(point, more))
            more = self._next(runs, wanted, until - time.monotonic())
        short, long = min(runs, key=_replicates), max(runs, key=_replicates)
        between = long.elapsed - short.elapsed
        slope = between / (long.replicates - short.replicates)
        at_most = self._placing(long) / long.replicates
        clear = between >= CLEAR or long.replicates >= wanted
        slope = min(max(slope, 0.0), at_most) if clear else at_most
        return _Cost(slope, max(long.wall - slope * long.replicates, 0.0), long, clear)

    def _placing(self, run: _Run) -> float:
        """Return at most how long the replicates of a run took."""
        return max(run.elapsed - _SURELY_FIXED * self.floor, 1e-6)

    def _next(self, runs: list[_Run], wanted: int, left: float) -> int | None:
        """Return the replicates of a point's next run, or None when its times are known well enough."""
        long = max(runs, key=_replicates)
        if len(runs) > 1 and (
            len(runs) > MOST_RUNS
            or long.replicates >= wanted
            or long.elapsed - min(runs, key=_replicates).elapsed >= CLEAR
        ):
            return None
        placing = self._placing(long)
        more = min(wanted, int(long.replicates * max(left - (long.wall - placing), 0.0) / placing))
        if more >= 2 * long.replicates:
            return more
        return max(2, self.replicates // 5) if len(runs) == 1 else None

    def _share_of_time(self) -> float:
        with self.lock:
            to_do = len(self.study.points) - self.begun
            self.begun += 1
        return (self.deadline - time.monotonic()) * min(self.jobs, to_do) / to_do

    def _needed(self, group: dict[str, Any]) -> int:
        spread = group["deviation"] / abs(group["mean"])
        return replicates_for(
            spread, self.replicates, self.precision, 0.95, group["skewness"], least=self.replicates
        )

    def run(self, point: Point, replicates: int) -> _Run:
        """Execute the notebook at a point with so many replicates."""
        from labkit.studies.execution import execute

        place = self.scratch / str(next(self.numbers))
        store = Store(place / "runs")
        values = point.parameters | {"replicates": replicates}
        notebook = self.study.notebook
        handed = {
            "study": self.study.name,
            "store": str(store.folder),
            "workers": self.threads,
            "output": str(place / "output"),
            "precision": None,
        }
        place.mkdir()
        values |= {name: value for name, value in handed.items() if name in notebook.parameters}
        clock = time.monotonic()
        result = execute(notebook.path, values, place / "executed.ipynb")
        wall = time.monotonic() - clock
        about = f" at {in_words({name: point.parameters[name] for name in self.study.grid})}"
        about = about if self.study.grid else ""
        if result.error:
            sentence = (result.error.splitlines() or ["no message"])[0]
            kind, word = (InputError, "was refused") if result.refused else (PilotFailed, "failed")
            raise kind(f"the pilot of study {self.study.name}{about} {word}: {sentence}")
        found = store.find(self.study.name, identify(notebook, notebook.checked(values)).run_id)
        if found is None:
            raise PilotFailed(f"the pilot of study {self.study.name}{about} left no record of its run.")
        table = store.read(found)
        groups = groups_of_means(measured_part(table).to_pandas(), self.measure)
        return _Run(replicates, max(row_of_origin(table)["elapsed"], 1e-6), wall, groups)


def groups_of_means(measures: pd.DataFrame, measure: str) -> list[dict[str, Any]]:
    """Return label values, mean, deviation and skewness of each group at its last checkpoint."""
    numbers = [str(name) for name in measures.columns if measures[name].dtype == np.float64]
    if measure not in numbers:
        raise InputError(f"measure is {measure!r}; {nearest(measure, numbers)}.")
    table, labels = prepare(measures, measure)
    found = []
    for _, rows in table.groupby(labels, sort=False, observed=True) if labels else [((), table)]:
        values = _at_the_end(rows)[measure].to_numpy(dtype=np.float64)
        labelled = {name: rows[name].iloc[0] for name in labels}
        mean, deviation = float(values.mean()), float(values.std(ddof=1)) if np.ptp(values) else 0.0
        cubes = np.mean(((values - mean) / deviation) ** 3) if deviation else 0.0
        if mean == 0:
            group = ", ".join(map(str, labelled.values()))
            raise InputError(
                f"the mean {measure} of {group or 'the pilot'} is 0, which has no relative precision; choose "
                "another measure."
            )
        found.append({**labelled, "mean": mean, "deviation": deviation, "skewness": float(cubes)})
    return found


def _at_the_end(rows: pd.DataFrame) -> pd.DataFrame:
    """Return the rows of the last checkpoint, or of the highest load where work leaves."""
    for name in moments_of(rows):
        rows = rows[rows[name] == rows[name].max()]
    return rows


def _slope(smaller: float, larger: float, between: float) -> float:
    """Return the exponent of growth between two sizes, from 0 to 4."""
    if smaller <= 0 or larger <= 0:
        return 1.0
    return min(max(math.log(larger / smaller) / between, 0.0), 4.0)


def _replicates(run: _Run) -> int:
    return run.replicates
