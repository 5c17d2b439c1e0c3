"""Running a study: grid points side by side, those already recorded left out, failures kept as evidence."""

import contextlib
import os
import shutil
import time
from collections.abc import Callable
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from dataclasses import dataclass, field
from itertools import islice
from pathlib import Path
from threading import Event, Lock
from typing import Any

from labkit.checks import check_positive, check_whole
from labkit.errors import InputError, SchedulerLost, StoreUnwritable
from labkit.records.declared import EXECUTION_ONLY
from labkit.records.project import ANSWERS
from labkit.records.store import Store
from labkit.sharing import progress
from labkit.sharing.scheduler import VARIABLE as SCHEDULER
from labkit.sharing.scheduler import check_address, in_use
from labkit.sources import library_version
from labkit.studies.door import check_answer, check_points
from labkit.studies.grouping import groups_of
from labkit.studies.model import Point, Study
from labkit.studies.scratch import scratch_folder, sweep_folders
from labkit.studies.warmth import COLD, is_warm, set_warm

# Seconds between two looks at whether anybody works for the scheduler.
LOOK = 5.0
NO_WORKER = "scheduler {} has no worker now; the study goes on as soon as one joins"

# Nothing else of a study can be recorded either when a run fails with one of these.
ENDING = {error.__name__: error for error in (StoreUnwritable, SchedulerLost)}


@dataclass(frozen=True)
class Trouble:
    """A run that left no record: its own values in the grid, and where its partial notebook is, if kept."""

    run_id: str
    values: dict[str, Any]
    error: str
    refused: bool
    evidence: Path | None = None


@dataclass
class Report:
    """What running a study did: ids of runs recorded now and before, and runs without a record."""

    recorded: list[str] = field(default_factory=list)
    skipped: list[str] = field(default_factory=list)
    troubles: list[Trouble] = field(default_factory=list)

    @property
    def status(self) -> int:
        """The exit status: 1 when code failed, 2 when values were refused, else 0."""
        if not self.troubles:
            return 0
        return 2 if all(trouble.refused for trouble in self.troubles) else 1


def cores() -> int:
    """Return the number of cores that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def run_points(
    study: Study,
    store: Store,
    *,
    jobs: int | None = None,
    output: Path | None = None,
    scheduler: str | None = None,
    timeout: float | None = None,
    tick: Callable[[int, int], None] = lambda done, replicates: None,
    say: Callable[[str], None] = lambda sentence: None,
) -> Report:
    """Execute the points of a study that have no record yet.

    All that can be refused without a kernel is refused first, before `tick` is called or anything written.

    Parameters
    ----------
    study : Study
        The checked study.
    store : Store
        Where its records are and go.
    jobs : int, optional
        Kernels at the same time; default one a core, and two a core with a scheduler, since they wait for it.
        Results do not depend on it.
    output : Path, optional
        Folder for what run notebooks write besides their records, each in a folder of its run's id; default
        results/answers/<study>.
    scheduler : str, optional
        Address of the scheduler of a cluster whose workers compute the replicates. Kernels, and whatever is
        written, stay here.
    timeout : float, optional
        Seconds after which a run is ended and counts as failed.
    tick : callable
        Called with the number of points that are done and of replicates computed, at the start and often.
    say : callable
        Called with a sentence for the user, before the first `tick`.

    Raises
    ------
    InputError
        When a value is refused, or the store cannot be written or holds a damaged record of one of the
        points.
    SchedulerLost
        When the scheduler does not answer any more. What is recorded is kept.
    KeyboardInterrupt
        With a sentence that tells how much is recorded.
    """
    scheduler = in_use() if scheduler is None else check_address(scheduler)
    if timeout is not None:
        check_positive("timeout", timeout)
    if jobs is not None:
        check_whole("jobs", jobs)
    check_notebook(study)
    report = Report()
    pending = _without_record(study, store, report)
    if study.answer_notebook is not None:
        for group in groups_of(study):
            check_answer(study, group.points)
    environment: dict[str, str] = {}
    if pending:
        check_points(study, pending)
        if scheduler is not None:
            environment[SCHEDULER] = scheduler
            _join(scheduler, say)
        elif not is_warm():
            say(COLD)
    tick(len(report.skipped), 0)
    if not pending:
        return report
    jobs = min(jobs or cores() * (1 if scheduler is None else 2), len(pending))
    sweep_folders()
    with scratch_folder() as scratch:
        threads = max(1, cores() // jobs)
        place = output or ANSWERS / study.name
        work = _Work(study, store, scratch, threads, place, environment, timeout, say=say)
        try:
            _run_pending(work, pending, jobs, report, tick)
        except KeyboardInterrupt:
            raise KeyboardInterrupt(f"interrupted; {_left(study, store)}") from None
        except StoreUnwritable as error:
            raise StoreUnwritable(f"{error} {_left(study, store)}") from None
    return report


def _without_record(study: Study, store: Store, report: Report) -> list[Point]:
    """Return the points that have no record yet; check the records of the others.

    Where all are recorded nothing is written: the store may be one that can only be read.
    """
    present = store.runs(study.name)
    if any(point.run_id not in present for point in study.points):
        store.check_writable(study.name)
        store.settle(study.name)
        present = store.runs(study.name)
    for point in study.points:
        if point.run_id in present:
            store.verify(present[point.run_id])
            report.skipped.append(point.run_id)
    return [point for point in study.points if point.run_id not in present]


def _join(scheduler: str, say: Callable[[str], None]) -> None:
    """Refuse a scheduler that does not answer, and workers that have not what this process has."""
    from labkit.sharing.cluster import connected

    try:
        threads = connected(scheduler).check()
    except SchedulerLost as error:
        raise InputError(str(error)) from None
    if threads == 0:
        say(NO_WORKER.format(scheduler))


def _left(study: Study, store: Store) -> str:
    recorded = store.runs(study.name)
    done = sum(point.run_id in recorded for point in study.points)
    return f"{done} of {len(study.points)} runs are recorded; the same command goes on with the rest."


@dataclass
class _Work:
    study: Study
    store: Store
    scratch: Path
    threads: int
    output: Path
    environment: dict[str, str]
    timeout: float | None
    ended: Event = field(default_factory=Event)
    # Where the runs under way tell their replicates, and the number of those that are over.
    telling: dict[str, Path] = field(default_factory=dict)
    replicates: int = 0
    lock: Lock = field(default_factory=Lock)
    looked: float = field(default_factory=time.monotonic)
    alone: bool = False
    say: Callable[[str], None] = lambda sentence: None

    def run(self, point: Point) -> Trouble | None:
        """Execute a point in a kernel of its own; keep evidence when code fails."""
        executed, told = (self.scratch / f"{point.run_id}{end}" for end in (".ipynb", ".progress"))
        with self.lock:
            self.telling[point.run_id] = told
        try:
            return self._run(point, executed, told)
        finally:
            with self.lock:
                del self.telling[point.run_id]
                self.replicates += progress.told(told)
            for file in (executed, told):
                file.unlink(missing_ok=True)

    def _run(self, point: Point, executed: Path, told: Path) -> Trouble | None:
        from labkit.studies.execution import Execution, execute

        handed = {
            "study": self.study.name,
            "store": str(self.store.folder),
            "workers": self.threads,
            "output": str(self.output / point.run_id),
        }
        known = {name: value for name, value in handed.items() if name in self.study.notebook.parameters}
        values = {name: point.parameters[name] for name in self.study.grid}
        result = execute(
            self.study.notebook.path,
            point.parameters | known,
            executed,
            environment=self.environment | {progress.VARIABLE: str(told)},
            seconds=self.timeout,
        )
        kept = self.store.folder / self.study.name / "failed" / point.run_id
        if not result.error:
            if self.store.find(self.study.name, point.run_id) is not None:
                for suffix in (".ipynb", ".txt"):
                    kept.with_suffix(suffix).unlink(missing_ok=True)
                return None
            result = Execution(_why_no_record(point))
        if result.kind in ENDING:
            raise ENDING[result.kind](result.error)
        if result.refused or self.ended.is_set():
            return Trouble(point.run_id, values, result.error, result.refused)
        try:
            kept.parent.mkdir(parents=True, exist_ok=True)
            if executed.exists():
                shutil.copyfile(executed, kept.with_suffix(".ipynb"))
            kept.with_suffix(".txt").write_text(f"{result.error}\n\n{result.details}\n", encoding="utf-8")
        except OSError as error:
            return Trouble(point.run_id, values, f"{result.error} (no evidence kept: {error})", False)
        return Trouble(point.run_id, values, result.error, False, kept.with_suffix(".ipynb"))

    def look(self) -> None:
        """Say once that no worker is left to compute anything."""
        scheduler = self.environment.get(SCHEDULER)
        if scheduler is None or time.monotonic() - self.looked < LOOK:
            return
        from labkit.sharing.cluster import connected

        self.looked = time.monotonic()
        with contextlib.suppress(SchedulerLost):  # the runs tell it themselves
            alone = connected(scheduler).workers() == 0
            if alone and not self.alone:
                self.say(NO_WORKER.format(scheduler))
            self.alone = alone

    def computed(self) -> int:
        """Return the number of replicates computed so far."""
        with self.lock:
            return self.replicates + sum(map(progress.told, self.telling.values()))


def _run_pending(
    work: _Work, pending: list[Point], jobs: int, report: Report, tick: Callable[[int, int], None]
) -> None:
    troubles: dict[str, Trouble | None] = {}
    pool = ThreadPoolExecutor(jobs)
    futures: list[Future] = []

    def begin(point: Point) -> Future:
        future = pool.submit(work.run, point)
        futures[:] = [each for each in futures if not each.done()] + [future]
        return future

    def run(points: list[Point]) -> None:
        waiting = iter(points)
        under_way = {begin(point): point.run_id for point in islice(waiting, jobs)}
        while under_way:
            # A signal that comes just before a wait without end would be acted on only when a run is done.
            ended, _ = wait(under_way, timeout=0.2, return_when=FIRST_COMPLETED)
            for future in ended:
                troubles[under_way.pop(future)] = future.result()
                under_way |= {begin(point): point.run_id for point in islice(waiting, 1)}
            work.look()
            tick(len(report.skipped) + len(troubles), work.computed())

    try:
        lead = 0 if jobs == 1 or is_warm() or work.environment else 1
        run(pending[:lead])
        run(pending[lead:])
    except BaseException:
        from labkit.studies.kernels import end_all

        work.ended.set()
        pool.shutdown(wait=False, cancel_futures=True)
        while any(not future.done() for future in futures):
            end_all()  # again and again: a kernel may be about to start
            time.sleep(0.1)
        raise
    finally:
        pool.shutdown()
    for point in pending:
        trouble = troubles[point.run_id]
        if trouble is None:
            report.recorded.append(point.run_id)
        else:
            report.troubles.append(trouble)
    if report.recorded and not work.environment:
        set_warm()


def _why_no_record(point: Point) -> str:
    if library_version.__wrapped__() != point.identity.library:
        return "the sources of labkit changed while the study ran; run it again."
    return "the notebook ended without a record of its run; let it call begin_run and run.record(...)."


def check_notebook(study: Study) -> None:
    """Refuse a notebook that does not take what a runner hands to it."""
    missing = sorted({"study", "store"} - set(study.notebook.parameters))
    if missing:
        raise InputError(
            f"notebook {study.notebook.name} declares no parameter {missing[0]}; a run notebook declares "
            f"{', '.join(sorted(EXECUTION_ONLY - {'new_study'}))}."
        )
