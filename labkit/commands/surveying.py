"""`labkit survey`."""

import argparse
from pathlib import Path

from labkit.commands.parts import Commands, print_json, say, store_of, whole


def add(commands: Commands) -> None:
    """Add these commands to the parser."""
    survey = commands.add(
        "survey", _survey, "Survey a fleet: the best any rule could do, outages, links that would help."
    )
    survey.add_argument(
        "folder", metavar="FOLDER", type=Path, help="holds servers.csv and choices.csv (or .parquet)"
    )
    survey.add_argument("--links", metavar="N", type=whole, help="links to advise; 0: none (3)")
    survey.add_argument(
        "--distance", metavar="D", type=whole, help="links between servers at most D choices apart (2)"
    )
    survey.add_argument(
        "--outages",
        metavar="N",
        type=whole,
        help="losses to work out, fullest servers first; 0: none (1000)",
    )
    survey.add_argument("--name", metavar="NAME", help="name of the fleet (the name of the folder)")
    survey.add_argument("--output", metavar="DIR", type=Path, help="folder of the answers (results/answers)")


def _survey(arguments: argparse.Namespace) -> int:
    from labkit.records.project import ANSWERS
    from labkit.studies.surveying import survey_folder

    output = arguments.output.absolute() if arguments.output else ANSWERS
    asked = {name: getattr(arguments, name) for name in ("name", "links", "distance", "outages")}
    done = survey_folder(arguments.folder, store_of(arguments), output, say=say, **asked)
    if done.answer.error:
        say(done.answer.error.splitlines()[0])
        return 2 if done.answer.refused else 1
    if arguments.json:
        print_json({"run": done.run_id, "record": done.record, "page": done.answer.page, **done.data})
    else:
        print(f"{done.text}\npage: {done.answer.page}\nrecord: {done.record}")
    return 0
