"""What a log shows before any rule is tried: how much work came when, for how long, and how often at once."""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from labkit.checks import check_positive, check_whole
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.fleet.names import ABSENT
from labkit.traces.reading import Trace

# More days than these would make a table that nobody reads, and are a sign of a wrong unit of time.
MOST_DAYS = 100_000


@dataclass(frozen=True)
class TraceFacts:
    """What one pass over a log shows.

    Attributes
    ----------
    tasks : int
    first, last : float
        Times of the first and the last row.
    work : float
        Sum of size × duration (0 without durations).
    mean_size, mean_duration, longest : float
        Of the tasks; NaN where there are no durations.
    tied : int
        Tasks at the very time of the task before them.
    used : int
        Servers that are an option of some task.
    arrivals : pandas.DataFrame
        One row a part of a day: `day`, counted from 0 at the first row, `part`, `tasks`.
    parts : int
        Parts of a day.
    """

    tasks: int
    first: float
    last: float
    work: float
    mean_size: float
    mean_duration: float
    longest: float
    tied: int
    used: int
    arrivals: pd.DataFrame
    parts: int

    @property
    def span(self) -> float:
        """Time from the first row to the last."""
        return self.last - self.first


def trace_facts(trace: Trace, fleet: Fleet, *, day: float, parts: int = 24) -> TraceFacts:
    """Read a log once and return what it shows, in memory that does not grow with its rows.

    Parameters
    ----------
    trace : Trace
        From `labkit.traces.reading.open_trace`, with the servers of `fleet`.
    fleet : Fleet
    day : float
        Length of a day, in the units of time of the log. Days are counted from the first row.
    parts : int
        Parts of a day for which arrivals are counted.

    Returns
    -------
    TraceFacts

    Raises
    ------
    InputError
        When a row is refused, or the log holds more than 100,000 days.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> from labkit.traces.reading import open_trace
    >>> log = pd.DataFrame({"time": [0.0, 0.0, 25.0], "option_1": [0, 1, 2], "option_2": [1, 2, 0]})
    >>> facts = trace_facts(open_trace(log, lk.ring(3)), lk.ring(3), day=24.0)
    >>> facts.tasks, facts.tied, facts.span
    (3, 1, 25.0)
    """
    day, parts = check_positive("day", day), check_whole("parts", parts)
    counts: dict[int, int] = {}
    tasks = tied = 0
    work = sizes = durations = longest = 0.0
    first = last = np.nan
    used = np.zeros(fleet.size, dtype=bool)
    for block in trace.blocks():
        times = block.time
        if tasks == 0:
            first = last = float(times[0])
            tied -= 1  # the first row follows none
        tied += int(np.count_nonzero(np.diff(times, prepend=last) == 0))
        last = float(times[-1])
        if (last - first) / day > MOST_DAYS:
            raise InputError(
                f"day is {day:g}, but {trace.label} spans {last - first:g} units of time: more than "
                f"{MOST_DAYS:,} days, so give the length of a day in the units of its times."
            )
        tasks += len(times)
        size = np.ones(len(times)) if block.size is None else block.size
        sizes += float(size.sum())
        if block.duration is not None:
            durations += float(block.duration.sum())
            longest = max(longest, float(block.duration.max()))
            work += float(size @ block.duration)
        used[block.options[block.options != ABSENT]] = True
        which, many = np.unique(((times - first) * (parts / day)).astype(np.int64), return_counts=True)
        for part, count in zip(which.tolist(), many.tolist(), strict=True):
            counts[part] = counts.get(part, 0) + count
    tally = [counts.get(part, 0) for part in range(max(counts) + 1)]
    every = np.arange(len(tally))
    arrivals = pd.DataFrame({"day": every // parts, "part": every % parts, "tasks": tally})
    return TraceFacts(
        tasks=tasks, first=first, last=last, work=work, mean_size=sizes / tasks, tied=tied, parts=parts,
        mean_duration=durations / tasks if trace.has_duration else np.nan,
        longest=longest if trace.has_duration else np.nan,
        used=int(used.sum()), arrivals=arrivals,
    )  # fmt: skip
