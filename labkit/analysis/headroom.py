"""How much headroom holds the risk of overload down, with limits that assume no distribution."""

import math

import numpy as np
import pandas as pd

from labkit.analysis.tables import describe, moments_of, prepare
from labkit.checks import check_fraction
from labkit.errors import TooFewReplicates

# Tail probabilities that are equal in exact arithmetic may differ by rounding.
_ROUNDING = 1e-12


def headroom(
    measures: pd.DataFrame, *, risk: float, confidence: float = 0.95, of: str = "gap"
) -> pd.DataFrame:
    """Return the headroom that is exceeded with a probability of at most `risk`, for every group.

    The estimate is the inverse-CDF quantile at level 1 − `risk`: the smallest observed value that at least
    that share of the replicates does not exceed; it is always a value that was observed. The limits are two
    order statistics whose ranks come from the binomial distribution with equal tails. They assume independent
    replicates and nothing about the distribution, ties included, and cover the true quantile with a
    probability of at least `confidence` [1]_.

    Parameters
    ----------
    measures : pandas.DataFrame
        One row a replicate and checkpoint, as in ``outcome.measures``. Groups are formed by `tasks` (where
        work leaves by `load_factor` and `horizon`) and by the labels: `policy`, `information`, `server` (in
        ``outcome.by_server``: what each server needs for itself), any other column of text and any named
        index level.
    risk : float
        The accepted probability, in (0, 1), that the fullest server goes beyond the headroom; with rows of
        ``outcome.by_server``, that this one server does: that some server does is far more likely then.
    confidence : float
        Least coverage of the limits, in (0, 1).
    of : str
        The measure whose quantile is wanted: "gap" (utilisation above the mean) or, say, "excess".

    Returns
    -------
    pandas.DataFrame
        One row a group, sorted by labels and tasks: the labels, tasks (or load_factor, horizon), replicates,
        mean_load, mean_utilisation and fair_utilisation (means over replicates, where the table has them),
        headroom, lower, upper (in units of `of`), risk, confidence.

    Raises
    ------
    TooFewReplicates
        When a group holds too few replicates for limits at this risk; the sentence says how many it needs.
    InputError
        When the table or a number is refused.

    Examples
    --------
    >>> import labkit as lk
    >>> measures = lk.place(lk.ring(20), "least-loaded", tasks=2000, replicates=400, rng=1).measures
    >>> needed = lk.headroom(measures, risk=0.01)
    >>> needed[["policy", "tasks", "replicates", "mean_utilisation"]].values.tolist()
    [['least-loaded', 2000, 400, 100.0]]
    >>> bool((needed["lower"] <= needed["headroom"]).all() and (needed["headroom"] <= needed["upper"]).all())
    True

    References
    ----------
    .. [1] H. A. David and H. N. Nagaraja, "Order Statistics", 3rd edition, Wiley, 2003, section 7.1.
    """
    risk = check_fraction("risk", risk)
    confidence = check_fraction("confidence", confidence)
    table, labels = prepare(measures, of)
    keys = [*labels, *moments_of(table)]
    rows = []
    for _, group in table.groupby(keys, sort=True, observed=True):
        first = group.iloc[0]
        values = np.sort(group[of].to_numpy(dtype=np.float64))
        lower, upper = _limit_ranks(len(values), risk, confidence)
        if lower < 1 or upper > len(values):
            raise TooFewReplicates(_too_few(len(values), risk, confidence, describe(first, keys)))
        row = {name: first[name] for name in keys}
        row["replicates"] = len(values)
        if "mean_load" in group:
            row["mean_load"] = group["mean_load"].mean()
        if {"max_utilisation", "gap"} <= set(group.columns):
            row["mean_utilisation"] = (group["max_utilisation"] - group["gap"]).mean()
        if "fair_utilisation" in group:
            row["fair_utilisation"] = group["fair_utilisation"].mean()
        row["headroom"] = values[_quantile_rank(len(values), risk) - 1]
        row["lower"], row["upper"] = values[lower - 1], values[upper - 1]
        row["risk"], row["confidence"] = risk, confidence
        rows.append(row)
    return pd.DataFrame(rows)


def replicates_needed(risk: float, confidence: float = 0.95) -> int:
    """Return the least number of replicates for which `headroom` has limits on both sides.

    The highest of n replicates is an upper limit when (1 − risk)ⁿ ≤ (1 − confidence)/2, and the lowest a
    lower limit when riskⁿ is as small; at a risk of 1 % and 95 % confidence that takes 368 replicates.

    Parameters
    ----------
    risk, confidence : float
        As in `headroom`; both in (0, 1).

    Returns
    -------
    int
        At least 1.

    Raises
    ------
    InputError
        When either lies outside (0, 1).

    Examples
    --------
    >>> import labkit as lk
    >>> lk.replicates_needed(risk=0.01)
    368
    >>> 0.99**367 > 0.025 >= 0.99**368
    True
    """
    risk = check_fraction("risk", risk)
    confidence = check_fraction("confidence", confidence)
    tail = math.log((1 - confidence) / 2)
    slowest = max(math.log1p(-risk), math.log(risk))
    return max(1, math.ceil(tail / slowest * (1 - _ROUNDING)))


def _quantile_rank(replicates: int, risk: float) -> int:
    beyond = math.floor(replicates * risk * (1 + _ROUNDING))
    return max(1, replicates - beyond)


def _limit_ranks(replicates: int, risk: float, confidence: float) -> tuple[int, int]:
    """Return the ranks, counted from 1, of the two limits; 0 or replicates + 1 when there is none."""
    from scipy.stats import binom  # slow to import, and needed for limits only

    tail = (1 - confidence) / 2 * (1 + _ROUNDING)
    law = binom(replicates, 1 - risk)
    lower = int(law.ppf(tail))
    while lower > 0 and law.cdf(lower - 1) > tail:
        lower -= 1
    while lower < replicates and law.cdf(lower) <= tail:
        lower += 1
    upper = int(law.isf(tail)) + 1
    while upper <= replicates and law.sf(upper - 1) > tail:
        upper += 1
    while upper > 1 and law.sf(upper - 2) <= tail:
        upper -= 1
    return lower, upper


def _too_few(replicates: int, risk: float, confidence: float, where: str) -> str:
    needed = replicates_needed(risk, confidence)
    return (
        f"measures holds {replicates} replicates for {where}; a risk of {risk:g} with {100 * confidence:g} % "
        f"limits needs at least {needed}, so run {needed} replicates or accept a larger risk."
    )
