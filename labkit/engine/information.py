"""What a policy can see of the loads when a task arrives."""

import numpy as np

from labkit.checks import check_positive, check_whole
from labkit.errors import InputError

# Each keeps a picture of all loads of its own.
MOST_DISPATCHERS = 4_096


class Information:
    """How fresh the loads are that a policy sees.

    Attributes
    ----------
    every : int or float
        From one report of the loads to the next, in tasks where work stays (`labkit.place`), in units of time
        where it leaves (`labkit.serve`, `labkit.replay` of a trace with durations); 0 for loads as they are.
    dispatchers : int
        How many dispatchers place tasks, each of which knows its own placements at once; 0 where none does.
    """

    every: float = 0
    dispatchers: int = 0

    @property
    def name(self) -> str:
        """The model in words, as written into tables."""
        if self.dispatchers:
            return f"dispatchers(count={self.dispatchers}, every={self.every})"
        return "fresh" if self.every == 0 else f"snapshot(every={self.every})"

    def __repr__(self) -> str:
        return f"<information {self.name}>"

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Information) and self.name == other.name

    def __hash__(self) -> int:
        return hash(self.name)


class Fresh(Information):
    """A policy sees the loads as they are when the task arrives.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.Fresh().name, lk.Fresh().every
    ('fresh', 0)
    >>> lk.place(lk.ring(4), "least-loaded", tasks=400, rng=1, information=lk.Fresh()).loads.tolist()
    [[100, 100, 100, 100]]
    """


class Snapshot(Information):
    """A policy sees the loads as they were at the last report.

    Parameters
    ----------
    every : int or float
        Where work stays: a report is made before the first task and after every `every` tasks, a whole
        number; ``Snapshot(1)`` is the same as ``Fresh()``. Where work leaves: the time between reports.

    Raises
    ------
    InputError
        When `every` is not above 0; where work stays, also when it is not whole.

    Examples
    --------
    Until the next report tasks crowd onto the server that was emptiest at the last one:

    >>> import labkit as lk
    >>> late = lk.Snapshot(every=200)
    >>> late.name
    'snapshot(every=200)'
    >>> lk.place(lk.ring(4), "least-loaded", tasks=400, rng=1, information=late).loads.tolist()
    [[152, 104, 62, 82]]
    """

    def __init__(self, every: float) -> None:
        self.every = _checked_every(every)


class Dispatchers(Information):
    """Several dispatchers place tasks; each sees its own placements at once, the others' at the next report.

    Each task comes to one of them by a fair draw. What a policy works out from the whole fleet (`renew`) is
    worked out from the last report, and is the same for all.

    Parameters
    ----------
    count : int
        Number of dispatchers, from 1 to 4,096. With one alone it is as if loads were fresh.
    every : int or float
        From one report of all loads to the next, as in `Snapshot`.

    Raises
    ------
    InputError
        When a number is out of range.

    Examples
    --------
    >>> import labkit as lk
    >>> several = lk.Dispatchers(count=4, every=50)
    >>> several.name, several.dispatchers, several.every
    ('dispatchers(count=4, every=50)', 4, 50)
    >>> lk.Dispatchers(count=0, every=50)
    Traceback (most recent call last):
        ...
    labkit.errors.InputError: count is 0; give a whole number of at least 1.
    """

    def __init__(self, count: int, every: float) -> None:
        self.dispatchers = check_whole("count", count)
        if self.dispatchers > MOST_DISPATCHERS:
            raise InputError(f"count is {count!r}; give at most {MOST_DISPATCHERS:,} dispatchers.")
        self.every = _checked_every(every)


def _checked_every(every: float) -> float:
    number = check_positive("every", every)
    # Whole numbers stay whole, in names too.
    return int(every) if isinstance(every, int | np.integer) else number


def checked_information(information: Information | None, *, in_tasks: bool = False) -> Information:
    """Return the information model, fresh by default; with `in_tasks` reports come after whole numbers."""
    if information is None:
        return Fresh()
    if isinstance(information, Information):
        if in_tasks:
            check_whole("every", information.every, least=0)
        return information
    raise InputError(
        f"information is {information!r}; give lk.Fresh(), lk.Snapshot(every=k) or "
        "lk.Dispatchers(count=m, every=k)."
    )
