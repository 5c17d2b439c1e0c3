"""When servers go down and come back: a given schedule, or random times."""

import hashlib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa

from labkit.checks import check_positive
from labkit.engine.failure_tables import read_schedule
from labkit.errors import InputError
from labkit.fleet.csv_files import whole_options
from labkit.fleet.model import Fleet, positions_of
from labkit.text import from_name

# More events than these take minutes and hundreds of MB for each replicate.
MOST_EVENTS = 10_000_000
# Times drawn at once; part of the law of the bits, so it never changes with a setting.
_DRAWN = 1 << 14

Events = tuple[np.ndarray, np.ndarray, np.ndarray]


class Failures:
    """A schedule of failures and returns.

    Parameters
    ----------
    schedule : pandas.DataFrame or path
        Table, or a CSV or parquet file of it, with a row an event: `time` (at least 0, in the run's unit, not
        before the row above), `server` (its name) and `state`, "down" or "up". All servers are up at the
        start; events at one time happen in the order of the rows. A table without rows means no failures.

    Raises
    ------
    InputError
        When a row breaks these rules, or a server goes down that is down or comes back that is up; the
        sentence names the row and, for CSV, the line.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> schedule = pd.DataFrame({"time": [10.0, 40.0], "server": [2, 2], "state": ["down", "up"]})
    >>> failures = lk.Failures(schedule)
    >>> failures.availability(lk.ring(3), horizon=100.0)
    0.9
    >>> failures.name == lk.Failures(schedule).name
    True
    """

    def __init__(self, schedule: pd.DataFrame | str | Path) -> None:
        table = read_schedule(schedule)
        self.times, self.ups = table.times, table.ups
        self._code, self._names, self._from_text = table.code, table.names, table.from_text
        self._label = table.label

    @property
    def name(self) -> str:
        """The schedule in words, with a digest of its rows; it cannot be read back."""
        digest = hashlib.sha256(repr(self._names).encode())
        for values, kind in ((self.times, "<f8"), (self.ups, "u1"), (self._code, "<i8")):
            digest.update(values.astype(kind).tobytes())
        return f"schedule(events={len(self.times)}, digest={digest.hexdigest()[:12]})"

    def events(self, fleet: Fleet, horizon: float, generator: np.random.Generator) -> Events:
        """Return what happens before the horizon.

        Parameters
        ----------
        fleet : Fleet
            Whose servers the schedule names, also those after the horizon.
        horizon : float
            Above 0, in the run's unit of time.
        generator : numpy.random.Generator
            Not used; the same schedule happens in each replicate.

        Returns
        -------
        times : numpy.ndarray
            float64 of shape (events,), sorted; events at one time in the order of the rows.
        servers : numpy.ndarray
            uint32, positions of servers.
        ups : numpy.ndarray
            bool, True where the server comes back.

        Raises
        ------
        InputError
            When the fleet has no server of a name.

        Examples
        --------
        >>> import numpy as np
        >>> import pandas as pd
        >>> import labkit as lk
        >>> schedule = pd.DataFrame({"time": [10.0, 40.0], "server": [2, 2], "state": ["down", "up"]})
        >>> failures = lk.Failures(schedule)
        >>> times, servers, ups = failures.events(lk.ring(3), 30.0, np.random.default_rng(1))
        >>> times.tolist(), servers.tolist(), ups.tolist()
        ([10.0], [2], [False])
        """
        servers = self._positions(fleet)
        count = int(np.searchsorted(self.times, horizon, side="left"))
        return self.times[:count].copy(), servers[:count], self.ups[:count].copy()

    def check_servers(self, fleet: Fleet) -> None:
        """Refuse a schedule that names a server the fleet does not have.

        Parameters
        ----------
        fleet : Fleet

        Raises
        ------
        InputError
            The sentence names the schedule and the server.

        Examples
        --------
        >>> import pandas as pd
        >>> import labkit as lk
        >>> failures = lk.Failures(pd.DataFrame({"time": [10.0], "server": [7], "state": ["down"]}))
        >>> failures.check_servers(lk.ring(8))
        >>> failures.check_servers(lk.ring(3))  # doctest: +ELLIPSIS
        Traceback (most recent call last):
            ...
        labkit.errors.InputError: schedule holds 7, which names no server; ...
        """
        self._positions(fleet)

    def availability(self, fleet: Fleet, horizon: float) -> float:
        """Return the mean share of the time up to the horizon that a server is up.

        Parameters
        ----------
        fleet : Fleet
        horizon : float
            Above 0, in the run's unit of time.

        Returns
        -------
        float
            From 0 to 1.

        Raises
        ------
        InputError
            When the fleet has no server of a name.

        Examples
        --------
        One of four servers is down half of the time:

        >>> import pandas as pd
        >>> import labkit as lk
        >>> failures = lk.Failures(pd.DataFrame({"time": [10.0], "server": [0], "state": ["down"]}))
        >>> failures.availability(lk.ring(4), horizon=20.0)
        0.875
        """
        times, _, ups = self.events(fleet, horizon, np.random.default_rng(0))
        down = np.where(ups, -1.0, 1.0) @ (horizon - times)
        return float(1 - down / (horizon * len(fleet)))

    def _positions(self, fleet: Fleet) -> np.ndarray:
        names = self._names
        if self._from_text and pd.api.types.is_integer_dtype(fleet.names.dtype):
            names = list(whole_options(pa.chunked_array([pa.array(names, pa.string())])))
        found = positions_of(fleet, names, self._label)
        return found.astype(np.uint32)[self._code]

    def __repr__(self) -> str:
        return f"<failures {self.name}>"

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Failures) and self.name == other.name

    def __hash__(self) -> int:
        return hash(self.name)


class RandomFailures:
    """Each server fails and comes back on its own, after exponential times; all are up at the start.

    Parameters
    ----------
    up : float
        Mean time from a return to the next failure, above 0, in the run's unit of time.
    down : float
        Mean time from a failure to the return, above 0.

    Examples
    --------
    >>> import labkit as lk
    >>> failures = lk.RandomFailures(up=99, down=1)
    >>> failures.name, failures.availability(lk.ring(3), 1000.0)
    ('random(up=99.0, down=1.0)', 0.99)
    """

    def __init__(self, up: float, down: float) -> None:
        self.up, self.down = check_positive("up", up), check_positive("down", down)

    @property
    def name(self) -> str:
        """The failures in words."""
        return f"random(up={self.up!r}, down={self.down!r})"

    def events(self, fleet: Fleet, horizon: float, generator: np.random.Generator) -> Events:
        """Return what happens before the horizon, as `Failures.events` does.

        The draws do not depend on the horizon: a longer one only adds events.

        Parameters
        ----------
        fleet : Fleet
        horizon : float
            Above 0, in the run's unit of time.
        generator : numpy.random.Generator
            Source of the times.

        Returns
        -------
        times, servers, ups : numpy.ndarray
            As from `Failures.events`.

        Raises
        ------
        InputError
            When more events are to be expected than memory holds.

        Examples
        --------
        Four servers, each of which fails about once in 90 + 10 units of time; one is still down at the end:

        >>> import numpy as np
        >>> import labkit as lk
        >>> failures = lk.RandomFailures(up=90, down=10)
        >>> times, servers, ups = failures.events(lk.ring(4), 10_000.0, np.random.default_rng(1))
        >>> int((~ups).sum()), int(ups.sum())
        (382, 381)
        """
        expected = 2 * horizon * len(fleet) / (self.up + self.down)
        if expected > MOST_EVENTS:
            raise InputError(
                f"up is {self.up!r} and down is {self.down!r}; {len(fleet)} servers then fail and return "
                f"about {expected:.3g} times up to {horizon:g}, so give longer times (at most "
                f"{MOST_EVENTS:,} events)."
            )
        blocks = list(self._blocks(len(fleet), horizon, generator))
        times, servers, ups = (np.concatenate(parts) for parts in zip(*blocks, strict=True))
        order = np.argsort(times, kind="stable")
        return times[order], servers[order], ups[order]

    def _blocks(self, servers: int, horizon: float, generator: np.random.Generator) -> Iterator[Events]:
        """Yield the events of the next few failures and returns of every server until all are beyond."""
        pairs = max(2, _DRAWN // servers)
        scale = np.tile([self.down, self.up], pairs)
        ups = np.tile([True, False], pairs)
        # first a failure alone, so that each block may begin with a return
        now = generator.standard_exponential(servers) * self.up
        inside = now < horizon
        positions = np.arange(servers, dtype=np.uint32)
        yield now[inside], positions[inside], np.zeros(int(inside.sum()), bool)
        while (now < horizon).any():
            steps = generator.standard_exponential((servers, 2 * pairs)) * scale
            steps[:, 0] += now
            times = np.cumsum(steps, axis=1)
            rows, columns = np.nonzero(times < horizon)
            yield times[rows, columns], positions[rows], ups[columns]
            now = times[:, -1]

    def availability(self, fleet: Fleet, horizon: float) -> float:
        """Return the share of time that a server is up in the long run, up/(up + down).

        Parameters
        ----------
        fleet : Fleet
            Not used; all servers are alike.
        horizon : float
            Not used.

        Returns
        -------
        float
            Above 0 and below 1.

        Examples
        --------
        >>> import labkit as lk
        >>> lk.RandomFailures(up=90, down=10).availability(lk.ring(4), horizon=1000.0)
        0.9
        """
        return self.up / (self.up + self.down)

    def __repr__(self) -> str:
        return f"<failures {self.name}>"

    def __eq__(self, other: object) -> bool:
        return isinstance(other, RandomFailures) and self.name == other.name

    def __hash__(self) -> int:
        return hash(self.name)


def checked_failures(failures: Any) -> Failures | RandomFailures | None:
    """Return the failures that are given; None stands for none.

    Parameters
    ----------
    failures : Failures, RandomFailures, str or None
        A text is ``"random(up=99, down=1)"``.

    Raises
    ------
    InputError
        When it is something else.
    """
    if failures is None or isinstance(failures, Failures | RandomFailures):
        return failures
    if isinstance(failures, str) and failures.strip().startswith("random"):
        random: RandomFailures = from_name("failures", failures, {"random": RandomFailures}, _EXAMPLE, "9")
        return random
    shown = repr(failures) if isinstance(failures, str | int | float | bool) else type(failures).__name__
    raise InputError(
        f"failures is {shown}; give lk.Failures(schedule), lk.RandomFailures(up=, down=) or '{_EXAMPLE}'."
    )


_EXAMPLE = "random(up=99, down=1)"
