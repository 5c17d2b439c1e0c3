"""`labkit new`."""

import argparse
import os
import shlex
import shutil
import sys
from pathlib import Path

from labkit.commands.parts import Commands, print_json


def add(commands: Commands) -> None:
    """Add this command to the parser."""
    new = commands.add("new", _new, "Write a starter fleet, study, note and CI recipes into a new folder.")
    new.add_argument("folder", metavar="FOLDER", type=Path, help="not there yet; its name names the study")


def _new(arguments: argparse.Namespace) -> int:
    from labkit.studies.starting import write_starter

    study, *others = write_starter(arguments.folder)
    if arguments.json:
        print_json({"study": study, "files": [study, *others]})
        return 0
    print(f"written: {', '.join(str(path.relative_to(study.parent)) for path in (study, *others))}")
    here = Path(sys.executable).with_name("labkit")  # rarely on the PATH
    command = "labkit" if shutil.which("labkit") or not here.is_file() else shlex.quote(os.path.relpath(here))
    print(f"next:    {command} run {shlex.quote(str(arguments.folder / study.name))}")
    print(f"then:    put your own tables into {study.parent / 'fleet'}; README.md there says how to go on")
    return 0
