"""The command line: thin. What is heavy is imported by the command that needs it."""

import argparse
import os
import signal
import sys
import threading
from collections.abc import Sequence
from types import FrameType
from typing import NoReturn

from labkit import __version__
from labkit.commands import frozen, planning, records, running, sizing, store, surveying
from labkit.commands.parts import Commands, say
from labkit.errors import InputError, SchedulerLost


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
        say(str(error))
        return 2
    except SchedulerLost as error:
        say(str(error))
        return 1
    except KeyboardInterrupt as interrupted:
        say(str(interrupted) or "interrupted; runs already recorded are kept")
        return 130
    except BrokenPipeError:
        # the reader has seen enough; python would complain once more at exit
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0


def _terminate(number: int, frame: FrameType | None) -> None:
    sys.exit(128 + number)


class _Parser(argparse.ArgumentParser):
    """A parser that refuses like everything else: one sentence, no usage."""

    def error(self, message: str) -> NoReturn:
        about, _, rule = message.removeprefix("argument ").partition(": ")
        if rule.startswith("is "):
            raise InputError(f"{about} {rule}.")
        raise InputError(f"{message}; see {self.prog} --help.")


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="labkit",
        description="How much headroom a fleet needs when its work can go only to a few places each.",
    )
    parser.add_argument("--version", action="version", version=f"labkit {__version__}")
    commands = Commands(parser)
    for module in (running, sizing, surveying, planning, records, store, frozen):
        module.add(commands)
    return parser


if __name__ == "__main__":
    sys.exit(main())
