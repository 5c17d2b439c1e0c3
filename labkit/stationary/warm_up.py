"""How much of a run's start to leave out, and whether what is kept still drifts."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.stats import t as student

from labkit.engine.sizes import as_numbers
from labkit.errors import InputError, NotStationary

# A drift at most this probable by chance confirms what MSER-5 says of the second half.
CHANCE = 0.2
# Intervals to a batch; the 5 of MSER-5.
BATCH = 5
LEAST_INTERVALS = 50
# Batches of each half of a single replicate, from which its drift is judged.
HALF_BATCHES = 10
# From so many replicates on, the drift of each is one number of the test.
ENOUGH_REPLICATES = 5


def first_kept(series: Any, *, name: str = "series") -> int:
    """Return the first interval that no longer shows how the run started, by MSER-5.

    The means of intervals are averaged over replicates, then over batches of five. Of all numbers d of
    batches that could be left out at the start, the one is taken that makes the squared standard error of the
    mean of the rest least, as if batches were independent: Σ (y_j − ȳ)² / (n − d)² over the n − d batches
    kept. What is left out too little raises the numerator, too much lowers the denominator [1]_ [2]_.

    Parameters
    ----------
    series : array-like
        Means of equal intervals from the start of the run, shape (replicates, intervals) or (intervals,);
        at least 50 intervals, all finite.
    name : str
        What a refusal calls the series.

    Returns
    -------
    int
        Number of intervals to leave out, a multiple of 5; 0 when the whole run may be kept.

    Raises
    ------
    NotStationary
        When the least standard error is reached only beyond the first half, and the halves of what could be
        kept differ, too (`drift_check`, p < 0.2): the run is too short to tell.
    InputError
        When the series is not of this shape.

    Notes
    -----
    White takes any least standard error beyond the first half for a sign of too short a run. The last few
    batches agree by chance too often for that: 13 % of stationary runs of 100 independent intervals would be
    refused. Therefore the rule looks up to three quarters of the run and asks for a second sign. What it
    refuses by chance (simulated, first-order autoregressions): of 100 intervals 3 %, or 11 % where
    neighbouring batches have a correlation of 0.5; of 200 intervals 1 % and 4 %, of 400 less than 1 %. So
    400 intervals are better than 100. No rule sees a transient that is longer than the run and smaller than
    its noise.

    References
    ----------
    .. [1] K. P. White, "An effective truncation heuristic for bias reduction in simulation output",
       Simulation 69 (1997), from memory.
    .. [2] K. P. White, M. J. Cobb and S. C. Spratt, "A comparison of five steady-state truncation heuristics
       for simulation", Winter Simulation Conference 2000, from memory.

    Examples
    --------
    >>> import numpy as np
    >>> start = np.exp(-np.arange(200) / 10)
    >>> noise = np.random.default_rng(1).normal(0, 0.05, (4, 200))
    >>> first_kept(5 - 4 * start + noise)
    65
    """
    values = _checked(series, name)
    means = values.mean(axis=0)
    count = len(means) // BATCH
    batches = means[: count * BATCH].reshape(count, BATCH).mean(axis=1)
    errors = _squared_errors(batches)[: 3 * count // 4 + 1]
    least = int(np.argmin(errors))
    if least <= count // 2:
        return least * BATCH
    within = int(np.argmin(errors[: count // 2 + 1]))
    if drift_check(values[:, within * BATCH :], name=name).p_value >= CHANCE:
        return within * BATCH
    raise NotStationary(
        f"{name} still changes beyond its first half ({len(means)} intervals; MSER-5 would leave out "
        f"{least * BATCH} or more); the horizon is too short to tell where the start is forgotten, so give a "
        "longer one, at least twice as long, or a lower load_factor."
    )


def _squared_errors(batches: np.ndarray) -> np.ndarray:
    """Return the squared standard error of the mean without the first 0, 1, 2 ... batches."""
    # moments about the overall mean, so that sums lose no digits
    centred = (batches - batches.mean())[::-1]
    kept = np.arange(1, len(batches) + 1)
    sums, squares = np.cumsum(centred), np.cumsum(centred**2)
    spread = np.maximum(squares - sums**2 / kept, 0)
    return (spread / kept**2)[::-1]


@dataclass(frozen=True)
class Drift:
    """How the second half of a kept series differs from the first.

    Attributes
    ----------
    first_half, second_half : float
        Means.
    statistic : float
        Difference over its standard error; 0 when there is no difference at all.
    p_value : float
        Probability of one at least as large without drift, two-sided, by Student's t.
    degrees : float
        Degrees of freedom.
    method : str
        "replicates" or "batch means".
    """

    first_half: float
    second_half: float
    statistic: float
    p_value: float
    degrees: float
    method: str


def drift_check(series: Any, *, name: str = "series") -> Drift:
    """Compare the mean of the first half of a series with that of the second.

    From 5 replicates on, the differences of the replicates are tested against 0. With fewer, each half of
    each replicate is cut into 10 batches, taken off a straight line; the correlation r of neighbouring
    batches, where it is above 0, widens the variance by (1 + r)/(1 − r) and takes as much off the degrees of
    freedom (as for a first-order autoregression). With one replicate, stationary series of 200 intervals then
    have p < 0.01 in 1 % of cases, 4 % where the relaxation time is 7 intervals, 9 % where it is 20
    (simulated); the test over replicates has the level that it states.

    Parameters
    ----------
    series : array-like
        Means of equal intervals, the warm-up left out: shape (replicates, intervals) or (intervals,), finite;
        at least 20 intervals where there are fewer than 5 replicates, else 2.
    name : str
        What a refusal calls the series.

    Returns
    -------
    Drift

    Raises
    ------
    InputError
        When the series is not of this shape. A drift is no error.

    Examples
    --------
    >>> import numpy as np
    >>> noise = np.random.default_rng(1).normal(0, 1, (20, 100))
    >>> drift_check(noise).p_value > 0.01, drift_check(noise + np.arange(100) / 100).p_value < 0.01
    (True, True)
    """
    many = np.ndim(series) == 2 and len(series) >= ENOUGH_REPLICATES
    values = _checked(series, name, least=2 if many else 2 * HALF_BATCHES)
    half = values.shape[1] // 2
    first, second = values[:, :half], values[:, -half:]
    if many:
        change = second.mean(axis=1) - first.mean(axis=1)
        error = change.std(ddof=1) / np.sqrt(len(change))
        degrees, method = float(len(change) - 1), "replicates"
    else:
        error, degrees = _batch_error(first, second)
        method = "batch means"
    difference = float(second.mean() - first.mean())
    statistic = difference / float(error) if error > 0 else float(np.copysign(np.inf, difference))
    statistic = statistic if difference else 0.0
    p_value = float(2 * student.sf(abs(statistic), degrees))
    return Drift(float(first.mean()), float(second.mean()), statistic, p_value, degrees, method)


def _batch_error(first: np.ndarray, second: np.ndarray) -> tuple[float, float]:
    """Return the standard error of the difference of two means, and its degrees of freedom."""
    batches = np.array(
        [
            [part.mean() for part in np.array_split(row, HALF_BATCHES)]
            for half in (first, second)
            for row in half
        ]
    )
    # Off a line of its own each: a drift within a half is no noise.
    steps = np.arange(HALF_BATCHES) - (HALF_BATCHES - 1) / 2
    centred = batches - batches.mean(axis=1, keepdims=True)
    centred -= np.outer(centred @ steps / (steps @ steps), steps)
    squares = float(np.sum(centred**2))
    degrees = len(batches) * (HALF_BATCHES - 2)
    # A line taken off makes neighbours look less alike, by about twice 1/batches.
    seen = float(np.sum(centred[:, 1:] * centred[:, :-1])) / squares if squares else 0.0
    correlation = min(max(0.0, seen + 2 / HALF_BATCHES), 0.9)
    widening = (1 + correlation) / (1 - correlation)
    variance = squares / degrees * widening
    return float(np.sqrt(4 * variance / batches.size)), max(1.0, degrees / widening)


def _checked(series: Any, name: str, least: int = LEAST_INTERVALS) -> np.ndarray:
    given = as_numbers(series)
    values = None if given is None else np.atleast_2d(np.asarray(given, np.float64))
    if given is None or values is None or given.ndim not in (1, 2) or not values.size:
        found = type(series).__name__ if given is None else f"numbers of shape {given.shape}"
        raise InputError(f"{name} is {found}; give means of intervals, one row a replicate.")
    if values.shape[1] < least:
        raise InputError(f"{name} has {values.shape[1]} intervals; give at least {least}.")
    bad = np.argwhere(~np.isfinite(values))
    if len(bad):
        replicate, interval = bad[0]
        raise InputError(
            f"{name} holds {values[replicate, interval]} at interval {interval} of replicate {replicate}; "
            "each must be a finite number, so make the intervals long enough that work departs in each."
        )
    return values
