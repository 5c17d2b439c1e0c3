"""`labkit list`, `labkit show` and `labkit rerun`."""

import argparse
import json
from pathlib import Path
from typing import Any

from labkit.commands.parts import Commands, print_json, say, store_of
from labkit.errors import InputError

# Columns of a record that `labkit list` shows, besides the number of rows.
_SHOWN = ("run_id", "study", "notebook", "started", "elapsed", "git_hash", "dirty", "parameters")
# Files of records in a study from which compaction is worth a hint.
MANY_FILES = 5_000


def add(commands: Commands) -> None:
    """Add these commands to the parser."""
    listing = commands.add("list", _list, "List the recorded runs.")
    listing.add_argument("study", metavar="STUDY", nargs="?", help="only the runs of this study")

    show = commands.add("show", _show, "Show a record: where it comes from and what it measured.")
    show.add_argument("run", metavar="RUN", help="the first digits of a run's id")

    rerun = commands.add(
        "rerun", _rerun, "Execute a recorded run again and compare every measure bit for bit."
    )
    rerun.add_argument("run", metavar="RUN", help="the first digits of a run's id")
    rerun.add_argument(
        "--here", action="store_true", help="with today's code, even when the record is of an earlier commit"
    )


def _list(arguments: argparse.Namespace) -> int:
    from labkit.checks import nearest
    from labkit.records.listing import failed_runs, listed
    from labkit.records.project import check_study_name
    from labkit.records.schema import ORIGIN

    store = store_of(arguments)
    studies = store.studies() if arguments.study is None else [arguments.study]
    if arguments.study is not None and arguments.study not in store.studies():
        check_study_name(arguments.study)
        if store.studies():
            there = nearest(arguments.study, store.studies())
            raise InputError(f"study is {arguments.study!r}, which has no records; {there}.")
    names = ORIGIN.names if arguments.json else _SHOWN
    found = [listed(store, study, names, warn=say) for study in studies]
    columns = {
        name: [value for part in found for value in part.columns[name]]
        for name in (*names, "rows", "folder", "name")
    }
    order = sorted(range(len(columns["run_id"])), key=columns["started"].__getitem__)
    if arguments.json:
        print_json([_whole_row(columns, at) for at in order])
    else:
        _print_runs(columns, order)
        known = set(columns["run_id"])
        failed = [each for study in studies for each in failed_runs(store, study) if each[0] not in known]
        if failed:
            _print_failed(failed)
        elif not order:
            print(f"no records in {store.folder}")
    many = [study for study, part in zip(studies, found, strict=True) if part.loose > MANY_FILES]
    if many:
        say(
            f"{sum(part.loose for part in found):,} records are in files of their own; labkit compact"
            f"{' ' + many[0] if len(many) == 1 else ''} puts them into larger files that are read faster."
        )
    return 0 if all(part.whole for part in found) else 2


def _whole_row(columns: dict[str, list[Any]], at: int) -> dict[str, Any]:
    from labkit.records.schema import ORIGIN, decoded_origin

    origin = decoded_origin({name: columns[name][at] for name in ORIGIN.names})
    file = str(columns["folder"][at] / columns["name"][at])
    return {**origin, "rows": columns["rows"][at], "file": file}


def _print_runs(columns: dict[str, list[Any]], order: list[int]) -> None:
    """Print the table of runs column by column: quick for a hundred thousand, too."""
    from labkit.text import printable

    if not order:
        return
    runs = {name: [values[at] for at in order] for name, values in columns.items()}
    marks = ["+changes" if dirty else "" for dirty in runs["dirty"]]
    shown = {
        "run": runs["run_id"],
        "study": runs["study"],
        "notebook": runs["notebook"],
        "started": [started[:19] for started in runs["started"]],
        "seconds": [f"{elapsed:.1f}" for elapsed in runs["elapsed"]],
        "rows": [str(rows) for rows in runs["rows"]],
        "commit": [(git[:10] or "none") + mark for git, mark in zip(runs["git_hash"], marks, strict=True)],
        "parameters": _in_words(runs["parameters"]),
    }
    padded = []
    for name, texts in shown.items():
        cells = list(map(printable, texts))
        width = max(len(name), max(map(len, cells))) if name != "parameters" else 0
        padded.append([cell.ljust(width) for cell in (name, *cells)])
    print("\n".join(map(str.rstrip, map("  ".join, zip(*padded, strict=True)))))


def _in_words(texts: list[str]) -> list[str]:
    """Return the parameters of runs as a reader likes them; many are decoded at once, which is quicker."""
    found = []
    for start in range(0, len(texts), 500):
        for parameters in json.loads(f"[{','.join(texts[start : start + 500])}]"):
            found.append(", ".join([f"{name}={value}" for name, value in parameters.items()]))
    return found


def _print_failed(failed: list[tuple[str, str, Path]]) -> None:
    from labkit.text import align

    print(align([["failed", "error", "evidence"], *([run, error, str(path)] for run, error, path in failed)]))


def _show(arguments: argparse.Namespace) -> int:
    from labkit.records.schema import measured_part, row_of_origin
    from labkit.text import printable

    store = store_of(arguments)
    path = store.locate(arguments.run, warn=say)
    table = store.read(path)
    origin = row_of_origin(table)
    measured = measured_part(table)
    if arguments.json:
        rows = [
            {name: None if value != value else value for name, value in row.items()}
            for row in measured.to_pylist()
        ]
        print_json({**origin, "file": str(path), "measures": rows})
        return 0
    for name, value in origin.items():
        for at, (key, each) in enumerate(value.items() if isinstance(value, dict) else [("", value)]):
            print(f"{name if at == 0 else '':<16} {printable(f'{key} = {each}' if key else str(each))}")
    print(f"{'file':<16} {printable(str(path))}")
    print(f"{'rows':<16} {measured.num_rows}")
    frame = measured.to_pandas()
    for at, how in enumerate(frame["stopping"].unique() if "stopping" in frame.columns else []):
        print(f"{'stopping' if at == 0 else '':<16} {printable(str(how))}")
    telling = ("policy", "information", "network", "failures", "load_factor", "tasks")
    labels = [name for name in telling if name in frame.columns]
    if labels:
        means = frame.drop(columns="replicate", errors="ignore").groupby(labels).mean(numeric_only=True)
        lines = means.reset_index().to_string(index=False).split("\n")
        print("\nmeans over replicates", *map(printable, lines), sep="\n")
    return 0


def _rerun(arguments: argparse.Namespace) -> int:
    from labkit.studies.rerun import rerun
    from labkit.text import printable

    store = store_of(arguments)
    result = rerun(store, store.locate(arguments.run, warn=say), say=say, here=arguments.here)
    if arguments.json:
        print_json({**vars(result), "identical": not result.difference})
        return 1 if result.difference else 0
    for note in result.notes:
        print(f"note: {printable(note)}")
    at = "here" if result.place == "here" else f"at commit {result.place[:10]} in a work tree of its own"
    print(f"executed {at}")
    if result.difference:
        print(f"run {result.run_id} differs: {printable(result.difference)}")
        return 1
    columns = printable(", ".join(result.columns))
    print(f"run {result.run_id} is identical to the bit: {result.rows} rows of {columns}")
    return 0
