"""The command line: thin. What is heavy is imported by the command that needs it."""

import argparse
import contextlib
import json
import os
import re
import signal
import sys
import threading
from collections.abc import Sequence
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any, NoReturn

from labkit import __version__
from labkit.errors import InputError

if TYPE_CHECKING:
    from labkit.records.store import Store
    from labkit.studies.model import Study
    from labkit.studies.running import Report


def main(words: Sequence[str] | None = None) -> int:
    """Run a command and return its exit status.

    0: done. 1: something failed or differs. 2: input was refused, in one sentence on the standard error
    stream. 130: interrupted.
    """
    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGTERM, _terminate)
    try:
        arguments = _parser().parse_args(words)
        status = int(arguments.command(arguments))
        sys.stdout.flush()
        return status
    except InputError as error:
        _say(str(error))
        return 2
    except KeyboardInterrupt:
        _say("interrupted; runs already recorded are kept")
        return 130
    except BrokenPipeError:
        # the reader has seen enough; python would complain once more at exit
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0


def _terminate(number: int, frame: FrameType | None) -> None:
    sys.exit(128 + number)


def _say(sentence: str) -> None:
    print(f"labkit: {sentence}", file=sys.stderr)


class _Parser(argparse.ArgumentParser):
    """A parser that refuses like everything else: one sentence, no usage."""

    def error(self, message: str) -> NoReturn:
        about, _, rule = message.removeprefix("argument ").partition(": ")
        if rule.startswith("is "):
            raise InputError(f"{about} {rule}.")
        raise InputError(f"{message}; see {self.prog} --help.")


def _whole(text: str) -> int:
    try:
        return int(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"is {text!r}; give a whole number") from None


def _number(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"is {text!r}; give a number") from None


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="labkit",
        description="How much headroom a fleet needs when its work can go only to a few places each.",
    )
    parser.add_argument("--version", action="version", version=f"labkit {__version__}")
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")

    def command(name: str, function: Any, about: str) -> argparse.ArgumentParser:
        added = commands.add_parser(name, help=about, description=about)
        added.set_defaults(command=function)
        added.add_argument("--store", metavar="DIR", type=Path, help="folder of the records (results/runs)")
        added.add_argument("--json", action="store_true", help="print JSON")
        return added

    def executing(added: argparse.ArgumentParser) -> None:
        added.add_argument("--jobs", metavar="N", type=_whole, help="kernels at the same time (one a core)")
        added.add_argument(
            "--output", metavar="DIR", type=Path, help="folder of the answers (results/answers)"
        )

    run = command("run", _run, "Run a study: execute what is not recorded yet, then write its answer.")
    run.add_argument("study", metavar="STUDY", help="a study of experiments/, or the path of a TOML file")
    executing(run)

    answer = command(
        "answer", _answer, "Answer for a fleet of your own: two tables in a folder, no study file."
    )
    answer.add_argument(
        "folder", metavar="FOLDER", type=Path, help="holds servers.csv and choices.csv (or .parquet)"
    )
    answer.add_argument(
        "--tasks",
        metavar="N",
        type=_whole,
        help="tasks placed (as many as fill 80 %% of the total capacity; 100 a server without capacities)",
    )
    answer.add_argument("--risk", metavar="R", type=_number, help="accepted overload risk")
    answer.add_argument(
        "--replicates", metavar="N", type=_whole, help="independent repetitions (as the risk needs)"
    )
    answer.add_argument("--policies", metavar="RULE", nargs="+", help="placement rules, such as least-loaded")
    answer.add_argument(
        "--report-every", metavar="K", type=_whole, nargs="+", help="loads reported every K tasks; 0: fresh"
    )
    answer.add_argument("--entropy", metavar="E", type=_whole, help="number that all randomness starts from")
    answer.add_argument("--name", metavar="NAME", help="name of the study (the name of the folder)")
    executing(answer)

    survey = command(
        "survey", _survey, "Survey a fleet: the best any rule could do, outages, links that would help."
    )
    survey.add_argument(
        "folder", metavar="FOLDER", type=Path, help="holds servers.csv and choices.csv (or .parquet)"
    )
    survey.add_argument("--links", metavar="N", type=_whole, help="links to advise; 0: none (3)")
    survey.add_argument(
        "--distance", metavar="D", type=_whole, help="links between servers at most D choices apart (2)"
    )
    survey.add_argument(
        "--outages",
        metavar="N",
        type=_whole,
        help="losses to work out, fullest servers first; 0: none (1000)",
    )
    survey.add_argument("--name", metavar="NAME", help="name of the fleet (the name of the folder)")
    survey.add_argument("--output", metavar="DIR", type=Path, help="folder of the answers (results/answers)")

    plan = command("plan", _plan, "Write the tables with which a dispatcher of your own can follow a rule.")
    plan.add_argument(
        "folder", metavar="FOLDER", type=Path, help="holds servers.csv and choices.csv (or .parquet)"
    )
    plan.add_argument("--policy", metavar="RULE", help="the placement rule (smooth-feedback)")
    plan.add_argument(
        "--output", metavar="DIR", type=Path, help="new folder for the plan (results/plans/FOLDER-RULE)"
    )
    plan.add_argument(
        "--decisions", metavar="N", type=_whole, help="decisions that the test vectors hold (320)"
    )
    plan.add_argument(
        "--check", metavar="PLAN", type=Path, help="only check that the plan in this folder is whole and fits"
    )

    listing = command("list", _list, "List the recorded runs.")
    listing.add_argument("study", metavar="STUDY", nargs="?", help="only the runs of this study")

    show = command("show", _show, "Show a record: where it comes from and what it measured.")
    show.add_argument("run", metavar="RUN", help="the first digits of a run's id")

    rerun = command("rerun", _rerun, "Execute a recorded run again and compare every measure bit for bit.")
    rerun.add_argument("run", metavar="RUN", help="the first digits of a run's id")
    return parser


def _store(arguments: argparse.Namespace) -> "Store":
    from labkit.records.store import open_store

    return open_store(arguments.store.absolute() if arguments.store else None)


def _print_json(value: Any) -> None:
    print(json.dumps(value, indent=2, default=str))


def _run(arguments: argparse.Namespace) -> int:
    from labkit.studies.model import read_study

    return _run_and_answer(read_study(arguments.study), arguments)


def _answer(arguments: argparse.Namespace) -> int:
    from labkit.studies.own_fleet import study_of_fleet

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
    return _run_and_answer(study, arguments, note)


def _survey(arguments: argparse.Namespace) -> int:
    from labkit.records.project import ANSWERS
    from labkit.studies.surveying import survey_folder

    output = arguments.output.absolute() if arguments.output else ANSWERS
    asked = {name: getattr(arguments, name) for name in ("name", "links", "distance", "outages")}
    done = survey_folder(arguments.folder, _store(arguments), output, say=_say, **asked)
    if done.answer.error:
        _say(done.answer.error.splitlines()[0])
        return 2 if done.answer.refused else 1
    if arguments.json:
        _print_json({"run": done.run_id, "record": done.record, "page": done.answer.page, **done.data})
    else:
        print(f"{done.text}\npage: {done.answer.page}\nrecord: {done.record}")
    return 0


def _plan(arguments: argparse.Namespace) -> int:
    from labkit.fleet.readers import read_fleet

    if arguments.check is not None:
        from labkit.plans.reading import read_plan

        given = ("policy", "output", "decisions")
        beside = next((name for name in given if getattr(arguments, name) is not None), None)
        if beside is not None:
            raise InputError(f"--check only reads a plan; leave out --{beside}.")
        found = read_plan(arguments.check, read_fleet(arguments.folder))
        if arguments.json:
            _print_json({"plan": arguments.check, "header": found.header})
        else:
            print(f"{repr(found)[1:-1]}: whole, and made for this fleet")
        return 0
    from labkit.plans.export import DECISIONS, write_plan
    from labkit.policies.naming import parse_policy
    from labkit.records.project import PLANS
    from labkit.studies.own_fleet import name_of_folder

    policy = "smooth-feedback" if arguments.policy is None else arguments.policy
    output = arguments.output
    if output is None:
        rule = "-".join(re.findall(r"[A-Za-z0-9.]+", parse_policy(policy).name))
        output = PLANS / f"{name_of_folder(arguments.folder)}-{rule}"
    lines: list[str] = []
    decisions = DECISIONS if arguments.decisions is None else arguments.decisions
    written = write_plan(arguments.folder, policy, output, decisions=decisions, say=lines.append)
    if arguments.json:
        header = json.loads((written / "plan.json").read_text(encoding="utf-8"))
        _print_json({"plan": written, "header": header})
    else:
        print("\n".join(lines))
    return 0


def _run_and_answer(study: "Study", arguments: argparse.Namespace, note: str = "") -> int:
    from labkit.records.project import ANSWERS
    from labkit.records.store import check_writable
    from labkit.studies.answering import write_answer
    from labkit.studies.grouping import groups_of, in_words

    store = _store(arguments)
    output = (arguments.output.absolute() if arguments.output else ANSWERS) / study.name
    groups = groups_of(study) if study.answer_notebook is not None else []
    for group in groups:
        check_writable("output", output / group.folder)
    report = _run_points(study, store, arguments.jobs, output, note)
    for trouble in report.troubles:
        where = f" (see {trouble.evidence})" if trouble.evidence else ""
        first = (trouble.error.splitlines() or ["no message"])[0]
        kind = "refused" if trouble.refused else "failed"
        point = f" ({in_words(trouble.values)})" if trouble.values else ""
        _say(f"run {trouble.run_id}{point} {kind}: {first}{where}")
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
            _say(f"{heading}{answer.error.splitlines()[0]}")
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
        _print_json(result)
        return status
    counts = f"{len(report.recorded)} recorded now, {len(report.skipped)} before"
    counts += f", {len(report.troubles)} without a record" if report.troubles else ""
    print(f"records: {store.folder / study.name} ({counts})")
    return status


def _run_points(study: "Study", store: "Store", jobs: int | None, output: Path, note: str) -> "Report":
    """Run the points behind a progress bar, which appears when nothing has been refused."""
    from labkit.studies.running import run_points

    with contextlib.ExitStack() as shown:
        bar: Any = None

        def tick(done: int) -> None:
            nonlocal bar
            if bar is None:
                from tqdm import tqdm

                if note:
                    _say(note)
                bar = shown.enter_context(
                    tqdm(total=len(study.points), desc=study.name, unit="run", file=sys.stderr)
                )
            bar.update(done - bar.n)

        return run_points(study, store, jobs=jobs, output=output, tick=tick, say=_say)


def _list(arguments: argparse.Namespace) -> int:
    from labkit.errors import StoreError
    from labkit.records.schema import row_of_origin
    from labkit.studies.answering import align

    store = _store(arguments)
    rows, status = [], 0
    for study in [arguments.study] if arguments.study else store.studies():
        for path in store.files(study, warn=_say):
            try:
                table = store.read(path)
            except StoreError as error:
                _say(str(error))
                status = 2
                continue
            rows.append({**row_of_origin(table), "rows": table.num_rows, "file": str(path)})
    rows.sort(key=lambda row: row["started"])
    if arguments.json:
        _print_json(rows)
    elif rows:
        lines = [["run", "study", "notebook", "started", "seconds", "rows", "commit", "parameters"]]
        for row in rows:
            commit = (row["git_hash"][:10] or "none") + ("+changes" if row["dirty"] else "")
            seconds = f"{row['elapsed']:.1f}"
            about = ", ".join(f"{name}={value}" for name, value in row["parameters"].items())
            when = row["started"][:19]
            lines.append(
                [row["run_id"], row["study"], row["notebook"], when, seconds, str(row["rows"]), commit, about]
            )
        print(align(lines))
    else:
        print(f"no records in {store.folder}")
    return status


def _show(arguments: argparse.Namespace) -> int:
    from labkit.records.schema import measured_part, row_of_origin

    store = _store(arguments)
    path = store.locate(arguments.run, warn=_say)
    table = store.read(path)
    origin = row_of_origin(table)
    measured = measured_part(table)
    if arguments.json:
        rows = [
            {name: None if value != value else value for name, value in row.items()}
            for row in measured.to_pylist()
        ]
        _print_json({**origin, "file": str(path), "measures": rows})
        return 0
    for name, value in origin.items():
        for at, (key, each) in enumerate(value.items() if isinstance(value, dict) else [("", value)]):
            print(f"{name if at == 0 else '':<16} {key + ' = ' if key else ''}{each}")
    print(f"{'file':<16} {path}")
    print(f"{'rows':<16} {measured.num_rows}")
    frame = measured.to_pandas()
    labels = [name for name in ("policy", "information", "tasks") if name in frame.columns]
    if labels:
        means = frame.drop(columns="replicate", errors="ignore").groupby(labels).mean(numeric_only=True)
        print(f"\nmeans over replicates\n{means.reset_index().to_string(index=False)}")
    return 0


def _rerun(arguments: argparse.Namespace) -> int:
    from labkit.studies.rerun import rerun

    store = _store(arguments)
    result = rerun(store, store.locate(arguments.run, warn=_say), say=_say)
    if arguments.json:
        _print_json({**vars(result), "identical": not result.difference})
        return 1 if result.difference else 0
    for note in result.notes:
        print(f"note: {note}")
    if result.difference:
        print(f"run {result.run_id} differs: {result.difference}")
        return 1
    print(f"run {result.run_id} is identical to the bit: {result.rows} rows of {', '.join(result.columns)}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
