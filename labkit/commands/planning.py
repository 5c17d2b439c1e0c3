"""`labkit plan`."""

import argparse
import json
import re
from pathlib import Path

from labkit.commands.parts import Commands, print_json, whole
from labkit.errors import InputError


def add(commands: Commands) -> None:
    """Add these commands to the parser."""
    plan = commands.add(
        "plan", _plan, "Write the tables with which a dispatcher of your own can follow a rule."
    )
    plan.add_argument(
        "folder", metavar="FOLDER", type=Path, help="holds servers.csv and choices.csv (or .parquet)"
    )
    plan.add_argument("--policy", metavar="RULE", help="the placement rule (smooth-feedback)")
    plan.add_argument(
        "--output", metavar="DIR", type=Path, help="new folder for the plan (results/plans/FOLDER-RULE)"
    )
    plan.add_argument(
        "--decisions", metavar="N", type=whole, help="decisions that the test vectors hold (320)"
    )
    plan.add_argument(
        "--check", metavar="PLAN", type=Path, help="only check that the plan in this folder is whole and fits"
    )


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
            print_json({"plan": arguments.check, "header": found.header})
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
        print_json({"plan": written, "header": header})
    else:
        print("\n".join(lines))
    return 0
