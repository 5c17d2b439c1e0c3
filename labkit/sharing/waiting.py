"""How far work has come, shown to whoever waits for it: nothing before two seconds, one line while it runs.

In a terminal it is a line of the error stream that is written over; in a notebook with a reader, a line that
is replaced; in a notebook that a program executes, one line when the work is done; in a pipe or a log,
nothing, or a line each tenth where a command asks for it. LABKIT_WAITING=off in the environment turns it off.
"""

import os
import sys
import time
from collections.abc import Callable
from contextvars import Context, copy_context
from threading import Condition, Thread
from typing import Any

from labkit.sharing.audience import notebook_kernel, somebody_at_the_notebook
from labkit.sharing.progress import VARIABLE as TELLING

VARIABLE = "LABKIT_WAITING"
# Seconds until something is shown, and between two looks at what is shown.
PATIENCE, LOOK = 2.0, 0.5
COLUMNS = 79


class Waiting:
    """Work under way, as a context; `add` counts what is done.

    Only the outermost of several is shown: what is waited for is the whole. Showing is left to a thread of
    its own, so that a single step of a minute is seen as well: its time passes while its count stands.

    Parameters
    ----------
    what : str
        What is being done, such as "links chosen".
    total : int or None
        Number of steps, None when it is not known.
    unit : str
        What is counted, in the singular, for the pace.
    first : int
        Steps that were done before, which say nothing about the pace.
    logged : bool
        Whether it is shown at once, and in a log a line each tenth: for a command that runs for long.

    Attributes
    ----------
    note : str
        Written behind the pace.
    """

    def __init__(
        self, what: str, total: int | None, unit: str, *, first: int = 0, logged: bool = False
    ) -> None:
        self.what, self.total, self.unit, self.first, self.logged = what, total, unit, first, logged
        self.done, self.note = first, ""
        self.began = 0.0
        self.context: Context | None = None
        self._show: Any = None

    def __enter__(self) -> "Waiting":
        self.began = time.monotonic()
        _watch.begin(self)
        return self

    def __exit__(self, *error: object) -> None:
        _watch.end(self, whole=error[0] is None)

    def add(self, steps: int = 1) -> None:
        """Count steps that are done."""
        with _watch.changed:
            self.done += steps

    def line(self) -> str:
        """Return how far it is, and how long what is left will take at the pace so far."""
        from tqdm import tqdm

        meter: Callable[..., str] = tqdm.format_meter
        seconds = time.monotonic() - self.began
        return meter(
            self.done, self.total, seconds, ncols=COLUMNS, prefix=self.what, unit=f" {self.unit}",
            initial=self.first, postfix=self.note,
        )  # fmt: skip

    def last_line(self) -> str:
        """Return what was done in what time."""
        seconds = time.monotonic() - self.began
        time_taken = f"{seconds:.0f} s" if seconds < 120 else f"{seconds / 60:.0f} min"
        note = f", {self.note}" if self.note else ""
        of_total = f" of {self.total:,}" if self.logged and self.total else ""
        return f"{self.what}: {self.done:,}{of_total} in {time_taken}{note}"

    def draw(self) -> None:
        """Show the line, for the first time or again."""
        self._tell(lambda show: show.line(self.line()))

    def finish(self, whole: bool) -> None:
        """Leave one tidy line, when anything was to be seen."""
        if self._show is not None:
            words = self.last_line() if whole else f"{self.last_line()}, then ended"
            self._tell(lambda show: show.last(words))

    def _tell(self, put: Callable[[Any], None]) -> None:
        try:
            if self._show is None:
                self._show = _Nothing() if _off() else _place(self)
            put(self._show)
        except (OSError, ValueError):  # nobody reads any more, or the stream is closed: the work goes on
            self._show = _Nothing()


class _Watch:
    """The thread that shows what is under way; it is started once and sleeps while there is nothing."""

    def __init__(self) -> None:
        self.changed = Condition()
        self.under_way: list[Waiting] = []
        self.thread: Thread | None = None
        self.process = 0
        self.asleep = False

    def begin(self, waiting: Waiting) -> None:
        with self.changed:
            if self.process != os.getpid():  # a copy of the process has no thread
                self.thread, self.process, self.under_way, self.asleep = None, os.getpid(), [], False
            self.under_way.append(waiting)
            if len(self.under_way) > 1 or _off():
                return
            waiting.context = copy_context()  # a notebook knows from it which cell the line belongs to
            if self.thread is None:
                self.thread = Thread(target=self.run, name="labkit-waiting", daemon=True)
                self.thread.start()
            if (
                self.asleep or waiting.logged
            ):  # else it looks by itself in time: waking it would cost a short call a third
                self.changed.notify()

    def end(self, waiting: Waiting, whole: bool) -> None:
        with self.changed:
            if waiting in self.under_way:
                self.under_way.remove(waiting)
            waiting.finish(whole)

    def run(self) -> None:
        while True:
            with self.changed:
                while not self.under_way:
                    self.asleep = True
                    self.changed.wait()
                self.asleep = False
                first = self.under_way[0]
                due = 0.0 if first.logged else first.began + PATIENCE - time.monotonic()
                if due <= 0 and first.context is not None:
                    first.context.run(first.draw)
                self.changed.wait(min(PATIENCE, max(due, LOOK)))


_watch = _Watch()


def _off() -> bool:
    """Tell whether nothing is to be shown: it is turned off, or a study shows its replicates itself."""
    return os.environ.get(VARIABLE, "").lower() in {"off", "0", "no"} or bool(os.environ.get(TELLING))


def _place(waiting: Waiting) -> Any:
    """Return where the line goes."""
    if notebook_kernel() is not None:
        return _Cell(read=somebody_at_the_notebook())
    if sys.stderr is not None and sys.stderr.isatty():
        return _Terminal()
    return _Log(waiting) if waiting.logged and sys.stderr is not None else _Nothing()


class _Nothing:
    def line(self, words: str) -> None:
        """Show nothing."""

    def last(self, words: str) -> None:
        """Leave nothing."""


class _Terminal:
    def line(self, words: str) -> None:
        """Write the line over what was there."""
        sys.stderr.write(f"\r{words:<{COLUMNS}}")
        sys.stderr.flush()

    def last(self, words: str) -> None:
        """Write the last line, and go to the next."""
        self.line(words[:COLUMNS])
        sys.stderr.write("\n")
        sys.stderr.flush()


class _Log:
    """Whole lines, one each tenth of the work."""

    def __init__(self, waiting: Waiting) -> None:
        self.waiting = waiting
        self.tenth = 0

    def line(self, words: str) -> None:
        """Write a line when another tenth is done."""
        work = self.waiting
        tenth = 10 * (work.done - work.first) // max(1, (work.total or 0) - work.first)
        if work.total and self.tenth < tenth < 10:
            self.tenth = tenth
            note = f", {work.note}" if work.note else ""
            print(f"{work.what}: {work.done:,} of {work.total:,}{note}", file=sys.stderr, flush=True)

    def last(self, words: str) -> None:
        """Write the last line."""
        print(words, file=sys.stderr, flush=True)


class _Cell:
    """A line below the cell; without a reader it is there only when the work is done."""

    def __init__(self, read: bool) -> None:
        self.read = read
        self.handle: Any = None

    def line(self, words: str) -> None:
        """Replace the line."""
        if self.read:
            self._put(words)

    def last(self, words: str) -> None:
        """Replace the line by the last one."""
        self._put(words)

    def _put(self, words: str) -> None:
        from IPython.display import display

        if self.handle is None:
            self.handle = display({"text/plain": words}, raw=True, display_id=True)
        else:
            self.handle.update({"text/plain": words}, raw=True)
