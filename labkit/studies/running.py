"""Running a study: grid points side by side, those already recorded left out, failures kept as evidence."""

import os
import shutil
import tempfile
from collections.abc import Callable
from concurrent.futures import FIRST_COMPLETED, ThreadPoolExecutor, wait
from dataclasses import dataclass, field
from pathlib import Path
from threading import Event
from typing import Any

from labkit.checks import check_whole
from labkit.errors import InputError
from labkit.records.declared import EXECUTION_ONLY
from labkit.records.identity import library_version
from labkit.records.project import ANSWERS
from labkit.records.store import Store
from labkit.studies.door import check_answer, check_points
from labkit.studies.grouping import groups_of
from labkit.studies.model import Point, Study
from labkit.studies.warmth import COLD, is_warm, set_warm


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
    tick: Callable[[int], None] = lambda done: None,
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
        Kernels at the same time; default one a core. Results do not depend on it.
    output : Path, optional
        Folder for what run notebooks write besides their records, each in a folder of its run's id; default
        results/answers/<study>.
    tick : callable
        Called with the number of points that are done, at the start and after each.
    say : callable
        Called with a sentence for the user, before the first `tick`.

    Raises
    ------
    InputError
        When a value is refused, or the store cannot be written or holds a damaged record of one of the
        points.
    """
    jobs = cores() if jobs is None else check_whole("jobs", jobs)
    check_notebook(study)
    store.check_writable(study.name)
    report = Report()
    pending = []
    for point in study.points:
        present = store.find(study.name, point.run_id)
        if present is None:
            pending.append(point)
        else:
            store.read(present)
            report.skipped.append(point.run_id)
    if study.answer_notebook is not None:
        for group in groups_of(study):
            check_answer(study, group.points)
    if pending:
        check_points(study, pending)
        if not is_warm():
            say(COLD)
    tick(len(report.skipped))
    if pending:
        jobs = min(jobs, len(pending))
        with tempfile.TemporaryDirectory(prefix="labkit-") as scratch:
            threads = max(1, cores() // jobs)
            work = _Work(study, store, Path(scratch), threads, output or ANSWERS / study.name)
            _run_pending(work, pending, jobs, report, tick)
    return report


@dataclass(frozen=True)
class _Work:
    study: Study
    store: Store
    scratch: Path
    threads: int
    output: Path
    interrupted: Event = field(default_factory=Event)

    def run(self, point: Point) -> Trouble | None:
        """Execute a point in a kernel of its own; keep evidence when code fails."""
        from labkit.studies.execution import Execution, execute

        executed = self.scratch / f"{point.run_id}.ipynb"
        handed = {
            "study": self.study.name,
            "store": str(self.store.folder),
            "workers": self.threads,
            "output": str(self.output / point.run_id),
        }
        known = {name: value for name, value in handed.items() if name in self.study.notebook.parameters}
        values = {name: point.parameters[name] for name in self.study.grid}
        result = execute(self.study.notebook.path, point.parameters | known, executed)
        kept = self.store.folder / self.study.name / "failed" / point.run_id
        if not result.error:
            if self.store.find(self.study.name, point.run_id) is not None:
                for suffix in (".ipynb", ".txt"):
                    kept.with_suffix(suffix).unlink(missing_ok=True)
                return None
            result = Execution(_why_no_record(point))
        if result.refused or self.interrupted.is_set():
            return Trouble(point.run_id, values, result.error, result.refused)
        try:
            kept.parent.mkdir(parents=True, exist_ok=True)
            if executed.exists():
                shutil.copyfile(executed, kept.with_suffix(".ipynb"))
            kept.with_suffix(".txt").write_text(f"{result.error}\n\n{result.details}\n", encoding="utf-8")
        except OSError as error:
            return Trouble(point.run_id, values, f"{result.error} (no evidence kept: {error})", False)
        return Trouble(point.run_id, values, result.error, False, kept.with_suffix(".ipynb"))


def _run_pending(
    work: _Work, pending: list[Point], jobs: int, report: Report, tick: Callable[[int], None]
) -> None:
    troubles: dict[str, Trouble | None] = {}
    pool = ThreadPoolExecutor(jobs)

    def run(points: list[Point]) -> None:
        futures = {pool.submit(work.run, point): point.run_id for point in points}
        left = set(futures)
        while left:
            # A signal that comes just before a wait without end would be acted on only when a run is done.
            ended, left = wait(left, timeout=0.2, return_when=FIRST_COMPLETED)
            for future in ended:
                troubles[futures[future]] = future.result()
                tick(len(report.skipped) + len(troubles))

    try:
        lead = 0 if jobs == 1 or is_warm() else 1
        run(pending[:lead])
        run(pending[lead:])
    except BaseException:
        from labkit.studies.kernels import end_all

        work.interrupted.set()
        pool.shutdown(wait=False, cancel_futures=True)
        end_all()
        raise
    finally:
        pool.shutdown()
    for point in pending:
        trouble = troubles[point.run_id]
        if trouble is None:
            report.recorded.append(point.run_id)
        else:
            report.troubles.append(trouble)
    if report.recorded:
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
            f"{', '.join(sorted(EXECUTION_ONLY))}."
        )
