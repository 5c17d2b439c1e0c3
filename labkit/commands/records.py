"""`labkit list`, `labkit show` and `labkit rerun`."""

import argparse

from labkit.commands.parts import Commands, print_json, say, store_of


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
    from labkit.errors import StoreError
    from labkit.records.schema import row_of_origin
    from labkit.studies.answering import align

    store = store_of(arguments)
    rows, status = [], 0
    for study in [arguments.study] if arguments.study else store.studies():
        for path in store.files(study, warn=say):
            try:
                table = store.read(path)
            except StoreError as error:
                say(str(error))
                status = 2
                continue
            rows.append({**row_of_origin(table), "rows": table.num_rows, "file": str(path)})
    rows.sort(key=lambda row: row["started"])
    if arguments.json:
        print_json(rows)
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
            print(f"{name if at == 0 else '':<16} {key + ' = ' if key else ''}{each}")
    print(f"{'file':<16} {path}")
    print(f"{'rows':<16} {measured.num_rows}")
    frame = measured.to_pandas()
    for at, how in enumerate(frame["stopping"].unique() if "stopping" in frame.columns else []):
        print(f"{'stopping' if at == 0 else '':<16} {how}")
    telling = ("policy", "information", "network", "failures", "load_factor", "tasks")
    labels = [name for name in telling if name in frame.columns]
    if labels:
        means = frame.drop(columns="replicate", errors="ignore").groupby(labels).mean(numeric_only=True)
        print(f"\nmeans over replicates\n{means.reset_index().to_string(index=False)}")
    return 0


def _rerun(arguments: argparse.Namespace) -> int:
    from labkit.studies.rerun import rerun

    store = store_of(arguments)
    result = rerun(store, store.locate(arguments.run, warn=say), say=say, here=arguments.here)
    if arguments.json:
        print_json({**vars(result), "identical": not result.difference})
        return 1 if result.difference else 0
    for note in result.notes:
        print(f"note: {note}")
    at = "here" if result.place == "here" else f"at commit {result.place[:10]} in a work tree of its own"
    print(f"executed {at}")
    if result.difference:
        print(f"run {result.run_id} differs: {result.difference}")
        return 1
    print(f"run {result.run_id} is identical to the bit: {result.rows} rows of {', '.join(result.columns)}")
    return 0
