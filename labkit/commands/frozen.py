"""`labkit freeze` and `labkit verify`."""

import argparse
from pathlib import Path

from labkit.commands.parts import Commands, print_json, say, store_of, whole


def add(commands: Commands) -> None:
    """Add these commands to the parser."""
    freeze = commands.add("freeze", _freeze, "Freeze the records of a study as a table that can be cited.")
    freeze.add_argument("study", metavar="STUDY", help="a study of experiments/, or the path of a TOML file")
    freeze.add_argument("--name", metavar="NAME", required=True, help="name of the table, never one in use")
    freeze.add_argument(
        "--measures", metavar="COLUMN", nargs="+", help="numbers in the table (gap and excess)"
    )
    freeze.add_argument(
        "--allow-changes",
        action="store_true",
        help="freeze although not everything is committed; the table then says so",
    )
    freeze.add_argument("--output", metavar="DIR", type=Path, help="folder of the answers (results/answers)")

    verify = commands.add(
        "verify", _verify, "Check every byte of a frozen table and, if asked, execute runs of it again."
    )
    verify.add_argument("name", metavar="NAME", help="a folder of results/frozen")
    verify.add_argument(
        "--rerun", metavar="K", type=whole, help="execute the runs behind K rows, drawn at random, again"
    )


def _freeze(arguments: argparse.Namespace) -> int:
    from labkit.records.project import ANSWERS
    from labkit.studies.freezing import freeze

    frozen = freeze(
        arguments.study,
        arguments.name,
        store_of(arguments),
        measures=arguments.measures,
        allow_changes=arguments.allow_changes,
        output=arguments.output.absolute() if arguments.output else ANSWERS,
        say=say,
    )
    if arguments.json:
        print_json({"place": frozen.place, "manifest": frozen.manifest})
        return 0
    facts = frozen.manifest
    print((frozen.place / "table.md").read_text(encoding="utf-8"))
    print(f"table:    {frozen.place} ({facts['rows']} rows from {len(facts['runs'])} runs)")
    print(f"manifest: {facts['digest']}")
    return 0


def _verify(arguments: argparse.Namespace) -> int:
    from dataclasses import asdict

    from labkit.studies.verifying import verify
    from labkit.text import printable

    result = verify(arguments.name, arguments.rerun, say=say)
    if arguments.json:
        print_json({**asdict(result), "holds": not result.findings})
        return 1 if result.findings else 0
    for note in result.notes:
        print(f"note: {printable(note)}")
    for each in result.findings:
        print(f"frozen table {result.name}: {printable(each.sentence)}")
    if result.findings:
        return 1
    print(f"frozen table {result.name} holds: {result.files} files as frozen, the table as its rows give it")
    for row in result.sampled:
        print(f"row {row.at} drawn ({printable(row.about)}): run {', '.join(row.runs)} executed again")
    if result.sampled:
        print(f"{len(result.runs)} runs are identical to the bit: {result.rows} measured rows")
    return 0
