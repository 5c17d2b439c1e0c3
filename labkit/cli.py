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
from labkit.commands import frozen, planning, records, reporting, running, sizing, starting, store, surveying
from labkit.commands.parts import Commands, say
from labkit.errors import InputError, SchedulerLost


def main(words: Sequence[str] | None = None) -> int:
    """Run a command and return its exit status.

    0: done. 1: something failed or differs. 2: input was refused, in one sentence on the standard error
    stream. 130: interrupted; 143: told to end, as by a batch system; 129: the terminal was closed.
    """
    ended_by: list[int] = []

    def interrupt(number: int, frame: FrameType | None) -> None:
        ended_by.append(number)
        raise KeyboardInterrupt

    if threading.current_thread() is threading.main_thread():
        for name in ("SIGTERM", "SIGHUP"):
            number = getattr(signal, name, None)
            if number is not None and signal.getsignal(number) != signal.SIG_IGN:  # nohup ignores SIGHUP
                signal.signal(number, interrupt)
    try:
        arguments = _parser().parse_args(words)
        status = int(arguments.command(arguments))
        sys.stdout.flush()
        return status
    except InputError as error:
        say(str(error))
        return 2
    except MemoryError:
        say("there is not enough memory for this; give fewer replicates or servers, or a larger machine")
        return 1
    except SchedulerLost as error:
        say(str(error))
        return 1
    except KeyboardInterrupt as interrupted:
        say(str(interrupted) or "interrupted; runs already recorded are kept")
        return 128 + ended_by[0] if ended_by else 130
    except BrokenPipeError:
        # the reader has seen enough; python would complain once more at exit
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0


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
    for module in (starting, running, sizing, surveying, reporting, planning, records, store, frozen):
        module.add(commands)
    return parser


if __name__ == "__main__":
    sys.exit(main())
