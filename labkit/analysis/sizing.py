"""How many replicates, and which sizes, reach a precision within a time: from a small pilot."""

import heapq
import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import pandas as pd
from scipy.stats import chi2

from labkit.analysis.precision import SKEWNESS_ALLOWANCE, t_quantile
from labkit.analysis.stopping import EQUAL_BELIEVED, LEAST_TO_STOP
from labkit.checks import check_fraction, check_positive, check_whole, nearest
from labkit.errors import InputError

# The spread that a pilot shows is raised to the limit that the true one stays below with this probability.
SURENESS = 0.8
# The cap to write into a study file, over what the point that needs most is expected to need.
CAP = 1.5
_MEASURED = ("mean", "deviation", "replicates", "seconds_a_replicate", "seconds_fixed")
_OPTIONAL = ("skewness", "piloted")
_MOST = 2**40


@dataclass(frozen=True)
class StudySize:
    """What a study takes.

    Attributes
    ----------
    table : pandas.DataFrame
        One row a grid point, in the order of the pilot: the row of the group that needs most replicates
        there, with `replicates` needed, `seconds` that the point then takes, and whether it was `piloted`.
    precision, confidence : float
    jobs : int
    seconds : float
        All points on `jobs` kernels.
    allowed : float or None
        Seconds that they may take.
    fits : bool
    left_out : list of str
        Points to leave out so that the rest fits, the largest first; all of them when not one fits.
    seconds_of_rest : float
    precision_in_time : float or None
        What all points can reach within the allowed time; None when no precision below 1 can be, or none was
        asked for.
    most_replicates : int
        A cap that leaves room: half as much again as the point that needs most.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> pilot = pd.DataFrame({
    ...     "point": ["small", "large"], "mean": [1.0, 2.0], "deviation": [0.2, 0.8], "replicates": [20, 20],
    ...     "seconds_a_replicate": [0.01, 0.5], "seconds_fixed": [2.0, 2.0],
    ... })
    >>> size = lk.size_study(pilot, precision=0.05, seconds=240)
    >>> size.table[["point", "replicates", "seconds", "piloted"]].values.tolist()
    [['small', 88, 2.88, True], ['large', 343, 173.5, True]]
    >>> size.fits, round(size.seconds), size.left_out
    (True, 176, [])
    >>> hurried = lk.size_study(pilot, precision=0.05, seconds=60)
    >>> hurried.fits, hurried.left_out, hurried.precision_in_time
    (False, ['large'], 0.089)
    """

    table: pd.DataFrame
    precision: float
    confidence: float
    jobs: int
    seconds: float
    allowed: float | None
    left_out: list[str]
    seconds_of_rest: float
    precision_in_time: float | None
    most_replicates: int

    @property
    def fits(self) -> bool:
        """Whether all points fit into the allowed time."""
        return self.allowed is None or self.seconds <= self.allowed


def size_study(
    pilot: pd.DataFrame,
    *,
    precision: float,
    seconds: float | None = None,
    jobs: int = 1,
    confidence: float = 0.95,
    least: int = LEAST_TO_STOP,
    x: str | None = None,
) -> StudySize:
    """Say how many replicates each grid point needs, how long all take, and what to give up if too long.

    Parameters
    ----------
    pilot : pandas.DataFrame
        One row a grid point and group (such as a policy): `point` (its name), `mean` and `deviation`
        (standard deviation) of the measure, the pilot's `replicates`, `seconds_a_replicate` and
        `seconds_fixed` of the whole point; `skewness` and `piloted` (False where extrapolated) may be left
        out. Other columns are labels.
    precision : float
        Half-width of the confidence interval of the mean, as a share of the mean, in (0, 1).
    seconds : float, optional
        Time that all points together may take.
    jobs : int
        Points computed at the same time.
    confidence : float
        Of that interval, in (0, 1).
    least : int
        No point gets fewer replicates.
    x : str, optional
        A column with the size of a point: what does not fit is then left out from the largest on, otherwise
        from what takes longest on.

    Returns
    -------
    StudySize

    Raises
    ------
    InputError
        When a number is refused, a column is missing or holds what it cannot, or a mean is 0, which has no
        relative precision.

    Notes
    -----
    The interval is that of `replicate_until`. A pilot of k replicates knows the standard deviation roughly
    only; it is raised to its upper 80 % limit (chi-square, as for normal values).

    Examples
    --------
    >>> import labkit as lk
    >>> import pandas as pd
    >>> pilot = pd.DataFrame({
    ...     "point": ["small", "large"], "mean": [1.0, 2.0], "deviation": [0.2, 0.8], "replicates": [20, 20],
    ...     "seconds_a_replicate": [0.01, 0.5], "seconds_fixed": [2.0, 2.0],
    ... })
    >>> size = lk.size_study(pilot, precision=0.05, seconds=60)
    >>> size.table["replicates"].tolist(), size.fits, size.left_out
    ([88, 343], False, ['large'])
    """
    precision = check_fraction("precision", precision)
    confidence = check_fraction("confidence", confidence)
    allowed = None if seconds is None else check_positive("seconds", seconds)
    jobs = check_whole("jobs", jobs)
    least = check_whole("least", least)
    points = _Points(_checked(pilot, x), confidence, least, jobs, x)
    table = points.needing(precision)
    total = makespan(table["seconds"], jobs)
    left_out: list[str] = []
    rest, within = total, None
    if allowed is not None and total > allowed:
        left_out, rest = points.shortened(table, allowed)
        within = points.precision_within(allowed, precision)
    most = _rounded_up(CAP * table["replicates"].max())
    return StudySize(
        table, precision, confidence, jobs, total, allowed, left_out, rest, within, int(most)
    )  # fmt: skip


class _Points:
    """The points of a pilot, and what each needs at a precision."""

    def __init__(self, pilot: pd.DataFrame, confidence: float, least: int, jobs: int, x: str | None) -> None:
        self.pilot, self.confidence, self.least, self.jobs, self.x = pilot, confidence, least, jobs, x

    def needing(self, precision: float) -> pd.DataFrame:
        """Return one row a point, that of the group that needs most."""
        needed = [self._needed(row, precision) for row in self.pilot.to_dict("records")]
        table = self.pilot.assign(needed=np.array(needed, dtype=np.float64))
        worst = table.groupby("point", sort=False)["needed"].idxmax()
        table = table.loc[worst].reset_index(drop=True)
        count = table.pop("needed")
        table["replicates"] = count.astype(np.int64)
        table["seconds"] = table["seconds_fixed"] + count * table["seconds_a_replicate"]
        return table

    def _needed(self, row: dict[Any, Any], precision: float) -> int:
        spread = row["deviation"] / abs(row["mean"])
        return replicates_for(
            spread, row["replicates"], precision, self.confidence, row["skewness"], least=self.least
        )

    def shortened(self, table: pd.DataFrame, allowed: float) -> tuple[list[str], float]:
        """Return the points to leave out, the largest first, and the seconds of the rest."""
        largest = table.sort_values(
            ([self.x] if self.x else []) + ["seconds"], ascending=False, kind="stable"
        )
        left_out: list[str] = []
        rest = table
        for point in largest["point"]:
            left_out.append(point)
            rest = table[~table["point"].isin(left_out)]
            if makespan(rest["seconds"], self.jobs) <= allowed:
                break
        return left_out, makespan(rest["seconds"], self.jobs)

    def precision_within(self, allowed: float, low: float) -> float | None:
        """Return the best precision that all points reach in a time, to two digits; None below 100 %."""

        def takes(precision: float) -> float:
            return makespan(self.needing(precision)["seconds"], self.jobs)

        high = 0.99
        if takes(high) > allowed:
            return None
        while high / low > 1.005:
            middle = math.sqrt(low * high)
            low, high = (low, middle) if takes(middle) <= allowed else (middle, high)
        return min(0.99, _rounded_up(high))


@lru_cache(maxsize=100_000)
def replicates_for(
    spread: float, pilot: int, precision: float, confidence: float, skewness: float = 0.0, *, least: int
) -> int:
    """Return how many replicates make the interval of a mean as short as a share of it.

    Parameters
    ----------
    spread : float
        Standard deviation over mean, from a pilot; 0 when all of its values were equal.
    pilot : int
        Replicates of that pilot, at least 2.
    precision, confidence : float
    skewness : float
    least : int
        The smallest number that is returned.
    """
    if spread == 0:
        return max(least, EQUAL_BELIEVED, math.ceil(3 / precision))
    spread *= math.sqrt((pilot - 1) / chi2.ppf(1 - SURENESS, pilot - 1))

    def reached(count: int) -> bool:
        allowance = 1 + SKEWNESS_ALLOWANCE * skewness**2 / count
        return _quantile(confidence, count - 1) * spread * allowance <= precision * math.sqrt(count)

    high = max(2, least)
    while not reached(high) and high < _MOST:
        high *= 2
    low = max(1, least - 1)
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if reached(middle) else (middle, high)
    return high


_quantile = lru_cache(maxsize=100_000)(t_quantile)


def makespan(seconds: Any, jobs: int) -> float:
    """Return how long tasks of these lengths take when each goes, in order, to the first free of `jobs`."""
    free = [0.0] * jobs
    for length in seconds:
        heapq.heapreplace(free, free[0] + float(length))
    return max(free)


def _rounded_up(value: float) -> float:
    """Return the next number with two digits from a value on."""
    unit = 10.0 ** (math.floor(math.log10(value)) - 1)
    return float(f"{math.ceil(value / unit * (1 - 1e-12)) * unit:.2g}")


def _checked(pilot: Any, x: str | None) -> pd.DataFrame:
    if not isinstance(pilot, pd.DataFrame) or pilot.empty:
        raise InputError(
            f"pilot is a {type(pilot).__name__} without rows; give a DataFrame, one row a point and policy."
        )
    table = pilot.reset_index(drop=True)
    for column in ("point", *_MEASURED, *([] if x is None else [x])):
        if column not in table.columns:
            raise InputError(f"pilot has no column {column!r}; {nearest(column, map(str, table.columns))}.")
    if "skewness" not in table.columns:
        table["skewness"] = 0.0
    if "piloted" not in table.columns:
        table["piloted"] = True
    least = {"mean": -math.inf, "skewness": -math.inf, "replicates": 2.0, **({x: -math.inf} if x else {})}
    for column in (*_MEASURED, "skewness", *([x] if x else [])):
        numbers = pd.to_numeric(table[column], errors="coerce").to_numpy(dtype=np.float64)
        wrong = ~(np.isfinite(numbers) & (numbers >= least.get(column, 0.0)))
        if wrong.any():
            row = int(np.flatnonzero(wrong)[0])
            rule = "a finite number" if column in ("mean", "skewness", x) else "a number of at least "
            rule += "" if column in ("mean", "skewness", x) else f"{least.get(column, 0):g}"
            raise InputError(f"pilot row {row} has {column} {table[column].iloc[row]}; give {rule}.")
        table[column] = numbers
    if (table["mean"] == 0).any():
        point = table.loc[table["mean"] == 0, "point"].iloc[0]
        raise InputError(
            f"pilot: the mean at {point} is 0, which has no relative precision; leave that point out or "
            "choose another measure."
        )
    return table
