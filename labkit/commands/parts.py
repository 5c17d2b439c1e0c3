"""What the commands share: their options, the store, and how they speak."""

import argparse
import json
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from labkit.records.store import Store


class Commands:
    """The commands of a parser; each gets the options that all have."""

    def __init__(self, parser: argparse.ArgumentParser) -> None:
        self._added = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")

    def add(
        self, name: str, function: Callable[[argparse.Namespace], int], about: str
    ) -> argparse.ArgumentParser:
        """Add a command, which `function` carries out and returns the exit status of."""
        added = self._added.add_parser(name, help=about, description=about)
        added.set_defaults(command=function)
        added.add_argument("--store", metavar="DIR", type=Path, help="folder of the records (results/runs)")
        added.add_argument("--json", action="store_true", help="print JSON")
        return added


def executing(command: argparse.ArgumentParser) -> None:
    """Add the options of a command that executes runs and writes an answer."""
    command.add_argument("--jobs", metavar="N", type=whole, help="kernels at the same time (one a core)")
    command.add_argument("--output", metavar="DIR", type=Path, help="folder of the answers (results/answers)")


def whole(text: str) -> int:
    """Return the whole number in a text."""
    try:
        return int(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"is {text!r}; give a whole number") from None


def number(text: str) -> float:
    """Return the number in a text."""
    try:
        return float(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"is {text!r}; give a number") from None


def store_of(arguments: argparse.Namespace) -> "Store":
    """Return the store that a command works on."""
    from labkit.records.store import open_store

    return open_store(arguments.store.absolute() if arguments.store else None)


def print_json(value: Any) -> None:
    """Print a value as JSON; what JSON does not know, as text."""
    print(json.dumps(value, indent=2, default=str))


def say(sentence: str) -> None:
    """Say a sentence on the standard error stream."""
    print(f"labkit: {sentence}", file=sys.stderr)
