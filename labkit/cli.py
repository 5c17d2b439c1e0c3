"""The command line: thin. What is heavy is imported by the command that needs it."""

import argparse
import json
import os
import signal
import sys
import threading
from collections.abc import Sequence
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any

from labkit import __version__
from labkit.errors import InputError

if TYPE_CHECKING:
    from labkit.records.store import Store
    from labkit.studies.model import Study


def main(words: Sequence[str] | None = None) -> int:
    """Run a command and return its exit status.

    0: done. 1: something failed or differs. 2: input was refused, in one sentence on the standard error
    stream. 130: interrupted.
    """
    arguments = _parser().parse_args(words)
    if threading.current_thread() is threading.main_thread():
        signal.signal(signal.SIGTERM, _terminate)
    try:
        status = int(arguments.command(arguments))
        sys.stdout.flush()
        return status
    except InputError as error:
        print(f"labkit: {error}", file=sys.stderr)
        return 2
    except KeyboardInterrupt:
        print("labkit: interrupted; runs already recorded are kept", file=sys.stderr)
        return 130
    except BrokenPipeError:
        # the reader has seen enough; python would complain once more at exit
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0


def _terminate(number: int, frame: FrameType | None) -> None:
    sys.exit(128 + number)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
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
        added.add_argument("--jobs", metavar="N", type=int, help="kernels at the same time (one a core)")
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
    answer.add_argument("--tasks", metavar="N", type=int, help="work placed (the total demand)")
    answer.add_argument("--risk", metavar="R", type=float, help="accepted overload risk")
    answer.add_argument(
        "--replicates", metavar="N", type=int, help="independent repetitions (as the risk needs)"
    )
    answer.add_argument("--policies", metavar="RULE", nargs="+", help="placement rules, such as least-loaded")
    answer.add_argument(
        "--report-every", metavar="K", type=int, nargs="+", help="loads reported every K tasks; 0: fresh"
    )
    answer.add_argument("--entropy", metavar="E", type=int, help="number that all randomness starts from")
    answer.add_argument("--name", metavar="NAME", help="name of the study (the name of the folder)")
    executing(answer)

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

    study = study_of_fleet(
        arguments.folder,
        name=arguments.name,
        risk=arguments.risk,
        report_every=arguments.report_every,
        tasks=arguments.tasks,
        replicates=arguments.replicates,
        policies=arguments.policies,
        entropy=arguments.entropy,
    )
    return _run_and_answer(study, arguments)


def _run_and_answer(study: "Study", arguments: argparse.Namespace) -> int:
    from tqdm import tqdm

    from labkit.records.project import ANSWERS
    from labkit.records.store import check_writable
    from labkit.studies.answering import write_answer
    from labkit.studies.running import check_study, run_points

    check_study(study)
    store = _store(arguments)
    output = (arguments.output.absolute() if arguments.output else ANSWERS) / study.name
    if study.answer_notebook is not None:
        check_writable("output", output)
    with tqdm(total=len(study.points), desc=study.name, unit="run", file=sys.stderr) as bar:
        report = run_points(study, store, jobs=arguments.jobs, tick=lambda done: bar.update(done - bar.n))
    for trouble in report.troubles:
        where = f" (see {trouble.evidence})" if trouble.evidence else ""
        first = (trouble.error.splitlines() or ["no message"])[0]
        kind = "refused" if trouble.refused else "failed"
        print(f"labkit: run {trouble.run_id} {kind}: {first}{where}", file=sys.stderr)
    result: dict[str, Any] = {
        "study": study.name,
        "store": store.folder,
        "recorded": report.recorded,
        "skipped": report.skipped,
        "failed": [vars(trouble) for trouble in report.troubles],
        "answer": None,
    }
    status, text = report.status, ""
    if study.answer_notebook is not None and not report.troubles:
        answer = write_answer(study, store, output)
        text = answer.text
        result["answer"] = {"page": answer.page, "error": answer.error}
        if answer.error:
            print(f"labkit: {answer.error.splitlines()[0]}", file=sys.stderr)
            status = 2 if answer.refused else 1
    if arguments.json:
        _print_json(result)
        return status
    if text:
        print(text)
    counts = f"{len(report.recorded)} recorded now, {len(report.skipped)} before"
    counts += f", {len(report.troubles)} without a record" if report.troubles else ""
    if result["answer"] and result["answer"]["page"]:
        print(f"page:    {result['answer']['page']}")
    print(f"records: {store.folder / study.name} ({counts})")
    return status


def _list(arguments: argparse.Namespace) -> int:
    from labkit.errors import StoreError
    from labkit.records.schema import row_of_origin
    from labkit.studies.answering import align

    store = _store(arguments)
    rows, status = [], 0
    for study in [arguments.study] if arguments.study else store.studies():
        for path in store.files(study):
            try:
                table = store.read(path)
            except StoreError as error:
                print(f"labkit: {error}", file=sys.stderr)
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
    path = store.locate(arguments.run)
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
    result = rerun(store, store.locate(arguments.run))
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
