"""`labkit run` and `labkit answer`."""

import argparse
import contextlib
from pathlib import Path
from typing import TYPE_CHECKING, Any

from labkit.commands.parts import Commands, executing, number, print_json, say, store_of, whole

if TYPE_CHECKING:
    from labkit.records.store import Store
    from labkit.studies.model import Study
    from labkit.studies.running import Report


def add(commands: Commands) -> None:
    """Add these commands to the parser."""
    run = commands.add("run", _run, "Run a study: execute what is not recorded yet, then write its answer.")
    run.add_argument("study", metavar="STUDY", help="a study of experiments/, or the path of a TOML file")
    executing(run)
    _computing(run)

    answer = commands.add(
        "answer", _answer, "Answer for a fleet of your own: two tables in a folder, no study file."
    )
    answer.add_argument(
        "folder", metavar="FOLDER", type=Path, help="holds servers.csv and choices.csv (or .parquet)"
    )
    answer.add_argument(
        "--tasks",
        metavar="N",
        type=whole,
        help="tasks placed (as many as fill 80 %% of the total capacity; 100 a server without capacities)",
    )
    answer.add_argument("--risk", metavar="R", type=number, help="accepted overload risk")
    answer.add_argument(
        "--replicates", metavar="N", type=whole, help="independent repetitions (as the risk needs)"
    )
    answer.add_argument("--policies", metavar="RULE", nargs="+", help="placement rules, such as least-loaded")
    answer.add_argument(
        "--report-every", metavar="K", type=whole, nargs="+", help="loads reported every K tasks; 0: fresh"
    )
    answer.add_argument("--entropy", metavar="E", type=whole, help="number that all randomness starts from")
    answer.add_argument("--name", metavar="NAME", help="name of the study (the name of the folder)")
    executing(answer)
    _computing(answer)


def _computing(command: argparse.ArgumentParser) -> None:
    command.add_argument(
        "--scheduler", metavar="ADDRESS", help="have replicates computed by a Dask cluster: tcp://host:port"
    )
    command.add_argument(
        "--timeout", metavar="S", type=number, help="end a run after so many seconds; it counts as failed"
    )


def _run(arguments: argparse.Namespace) -> int:
    from labkit.studies.model import read_study

    return _run_and_answer(read_study(arguments.study), arguments)


def _answer(arguments: argparse.Namespace) -> int:
    from labkit.studies.own_fleet import check_own_records, study_of_fleet

    study, note = study_of_fleet(
        arguments.folder,
        name=arguments.name,
        risk=arguments.risk,
        report_every=arguments.report_every,
        tasks=arguments.tasks,
        replicates=arguments.replicates,
        policies=arguments.policies,
        entropy=arguments.entropy,
    )
    check_own_records(study.name, study.points[0].identity.parameters["fleet"], store_of(arguments))
    return _run_and_answer(study, arguments, note)


def _run_and_answer(study: "Study", arguments: argparse.Namespace, note: str = "") -> int:
    from labkit.records.project import ANSWERS
    from labkit.records.store import check_writable
    from labkit.studies.answering import write_answer
    from labkit.studies.grouping import groups_of, in_words

    store = store_of(arguments)
    output = (arguments.output.absolute() if arguments.output else ANSWERS) / study.name
    groups = groups_of(study) if study.answer_notebook is not None else []
    for group in groups:
        check_writable("output", output / group.folder)
    report = _run_points(study, store, arguments, output, note)
    for trouble in report.troubles:
        where = f" (see {trouble.evidence})" if trouble.evidence else ""
        first = (trouble.error.splitlines() or ["no message"])[0]
        kind = "refused" if trouble.refused else "failed"
        point = f" ({in_words(trouble.values)})" if trouble.values else ""
        say(f"run {trouble.run_id}{point} {kind}: {first}{where}")
    result: dict[str, Any] = {
        "study": study.name,
        "store": store.folder,
        "recorded": report.recorded,
        "skipped": report.skipped,
        "failed": [vars(trouble) for trouble in report.troubles],
        "answer": None,
        "answers": [],
    }
    statuses = [report.status]
    without = {trouble.run_id for trouble in report.troubles}
    for group in groups:
        if without.intersection(point.run_id for point in group.points):
            continue
        answer = write_answer(study, group, store, output / group.folder)
        if answer.error:
            heading = f"{group.heading}: " if group.heading else ""
            say(f"{heading}{answer.error.splitlines()[0]}")
            statuses.append(2 if answer.refused else 1)
        result["answers"].append({"group": group.values, "page": answer.page, "error": answer.error})
        if len(groups) == 1:
            result["answer"] = {"page": answer.page, "error": answer.error}
        if not arguments.json:
            if group.heading:
                print(f"=== {group.heading} ===")
            if answer.text:
                print(answer.text)
            if answer.page:
                print(f"page:    {answer.page}")
            if group.heading:
                print(flush=True)
    status = 1 if 1 in statuses else max(statuses)
    if arguments.json:
        print_json(result)
        return status
    counts = f"{len(report.recorded)} recorded now, {len(report.skipped)} before"
    counts += f", {len(report.troubles)} without a record" if report.troubles else ""
    print(f"records: {store.folder / study.name} ({counts})")
    return status


def _run_points(
    study: "Study", store: "Store", arguments: argparse.Namespace, output: Path, note: str
) -> "Report":
    """Run the points behind a progress bar, which appears when nothing has been refused."""
    from labkit.studies.running import run_points

    with contextlib.ExitStack() as shown:
        bar: Any = None

        def tick(done: int, replicates: int) -> None:
            nonlocal bar
            if bar is None:
                from labkit.sharing.waiting import Waiting

                if note:
                    say(note)
                work = Waiting(study.name, len(study.points), "run", first=done, logged=True)
                bar = shown.enter_context(work)
            if replicates:
                bar.note = f"{replicates:,} replicates"
            if done > bar.done:
                bar.add(done - bar.done)

        return run_points(
            study,
            store,
            jobs=arguments.jobs,
            output=output,
            scheduler=arguments.scheduler,
            timeout=arguments.timeout,
            tick=tick,
            say=say,
        )
