"""The door of `fit_growth`: what it takes and refuses; errors of means, resamples, limits."""

from dataclasses import dataclass
from typing import Any, cast

import numpy as np
import pandas as pd
from scipy.special import digamma, polygamma

from labkit.analysis.tables import PROVENANCE, describe
from labkit.checks import nearest
from labkit.errors import InputError, TooFewReplicates

# How far beyond the measured sizes a prediction is made without being forced.
REACH = 16.0
# The trend of the variances counts for at least as much as ten replicates, and an error is never zero.
_LEAST_TREND = 10.0
_MOST_TREND = 1e4
_BLOCK = 4_000_000
# Squares of powers of numbers within this stay finite.
_LARGEST = 1e30
# Laws of at least this weight count as not ruled out.
_RIVAL = 0.05


@dataclass(frozen=True)
class SizeGroups:
    """Replicates by size, sizes ascending."""

    x: np.ndarray
    values: list[np.ndarray]

    @property
    def counts(self) -> np.ndarray:
        """Replicates at each size."""
        return np.array([len(values) for values in self.values])

    @property
    def means(self) -> np.ndarray:
        """Mean at each size."""
        return np.array([values.mean() for values in self.values])

    @property
    def variances(self) -> np.ndarray:
        """Variance at each size, with divisor replicates − 1; exactly 0 where all are equal."""
        return np.array([values.var(ddof=1) if np.ptp(values) else 0.0 for values in self.values])


def sizes_and_values(measures: Any, x: str, y: str) -> SizeGroups:
    """Check a table of measures and gather the replicates at each size.

    Parameters
    ----------
    measures : pandas.DataFrame
    x, y : str
        Columns of the size and of the measure.

    Raises
    ------
    TooFewReplicates
        When a size has a single replicate.
    InputError
        When a column is missing or holds a value that cannot be used, when rows are mixed, or when there are
        fewer than three sizes.
    """
    if not isinstance(measures, pd.DataFrame):
        raise InputError(f"measures is {type(measures).__name__}; give a DataFrame with one row a replicate.")
    lifted = [str(name) for name in measures.index.names if name is not None and name not in measures.columns]
    table = (measures.reset_index(lifted) if lifted else measures).reset_index(drop=True)
    if not len(table):
        raise InputError("measures has no rows; place at least two replicates at each of three sizes first.")
    for name, column in (("x", x), ("y", y)):
        if not isinstance(column, str):
            raise InputError(f"{name} is {column!r}; give the name of one column of measures.")
        if column not in table.columns:
            advice = nearest(column, map(str, table.columns))
            if column == "servers":
                advice = "add the size of each fleet, as in measures.assign(servers=len(fleet))"
            raise InputError(f"measures has no column {column!r}; {advice}.")
    if x == y:
        raise InputError(f"x and y are both {x!r}; name the size as x and the measure as y.")
    for column in (x, y):
        _check_numbers(table, column)
    low = table[x].to_numpy(dtype=np.float64) < 1 / _LARGEST
    if low.any():
        row = int(np.flatnonzero(low)[0])
        raise InputError(f"measures row {row} has {x} {table[x].iloc[row]}; every size must be above 0.")
    _check_not_mixed(table, x, y)
    # Sorted, so that the order of the rows does not matter.
    grouped = {
        float(cast(float, size)): np.sort(rows.to_numpy(dtype=np.float64))
        for size, rows in table.groupby(x)[y]
    }
    if len(grouped) < 3:
        raise InputError(
            f"measures holds {len(grouped)} size{'s' * (len(grouped) != 1)} in {x!r}; a law of growth needs "
            "at least 3, better 6 or more that double from one to the next."
        )
    for size, values in grouped.items():
        if len(values) < 2:
            raise TooFewReplicates(
                f"measures holds 1 replicate at {x} {size:g}; its error cannot be told from fewer than 2, so "
                "run more there or drop that size."
            )
    groups = SizeGroups(np.array(list(grouped)), list(grouped.values()))
    if not groups.variances.any():
        raise InputError(
            f"measures has the same {y} in all replicates of each size; without any spread no error and no "
            "band can be told, so choose a measure that varies."
        )
    return groups


def _check_numbers(table: pd.DataFrame, column: str) -> None:
    numbers = table[column]
    if isinstance(numbers, pd.DataFrame):
        raise InputError(f"measures has several columns {column!r}; keep one.")
    if not pd.api.types.is_numeric_dtype(numbers) or pd.api.types.is_bool_dtype(numbers):
        raise InputError(f"column {column!r} of measures holds {numbers.dtype}; it must hold numbers.")
    if pd.api.types.is_complex_dtype(numbers):
        raise InputError(f"column {column!r} of measures holds {numbers.dtype}; it must hold real numbers.")
    wrong = ~np.isfinite(numbers.to_numpy(dtype=np.float64, na_value=np.nan))
    if wrong.any():
        row = int(np.flatnonzero(wrong)[0])
        raise InputError(
            f"measures row {row} has {column} {numbers.iloc[row]}; every {column} must be a finite number, "
            "so choose another column or drop the row."
        )
    far = np.abs(numbers.to_numpy(dtype=np.float64)) > _LARGEST
    if far.any():
        row = int(np.flatnonzero(far)[0])
        raise InputError(
            f"measures row {row} has {column} {numbers.iloc[row]}, which is beyond {_LARGEST:g}; "
            "choose a larger unit."
        )


def _is_text(column: pd.Series) -> bool:
    text = pd.api.types.is_string_dtype(column) or pd.api.types.is_object_dtype(column)
    return text or isinstance(column.dtype, pd.CategoricalDtype)


def _check_not_mixed(table: pd.DataFrame, x: str, y: str) -> None:
    """Refuse rows of several policies, studies, moments and the like.

    A text that names each size's own fleet differs from size to size and is no mixture.
    """
    sizes = table[x].nunique()
    for name in table.columns:
        column = table[name]
        if name in (x, y) or name in PROVENANCE or not _is_text(column):
            continue
        found = column.astype(object).where(column.notna(), "(blank)").map(str)
        kinds = sorted(found.unique())
        by_size = found.groupby(table[x]).nunique().max() == 1 and len(kinds) == sizes
        always = name in ("policy", "study", "information")
        if len(kinds) > 1 and (always or not by_size):
            shown = ", ".join(map(repr, kinds[:3])) + (", …" if len(kinds) > 3 else "")
            raise InputError(
                f"measures mixes {len(kinds)} kinds of {name} ({shown}); growth is fitted to one at a time, "
                f"as in fit_growth(measures[measures[{name!r}] == {kinds[0]!r}], ...)."
            )
    if "tasks" in table.columns and "tasks" not in (x, y):
        moments = table.groupby(x)["tasks"].nunique()
        if moments.max() > 1:
            raise InputError(
                f"measures holds {moments.max()} checkpoints at {x} {moments.idxmax():g}; keep one number of "
                "tasks a size, such as the last."
            )
    if "replicate" in table.columns and "replicate" not in (x, y):
        repeated = table.duplicated([x, "replicate"]).to_numpy()
        if repeated.any():
            twice = table.iloc[int(np.flatnonzero(repeated)[0])]
            raise InputError(
                f"measures holds {describe(twice, ['replicate'])} of {x} {twice[x]:g} more than once; keep "
                "one kind of run, or number the replicates through when they are different runs."
            )


def moderated_errors(groups: SizeGroups) -> tuple[np.ndarray, np.ndarray]:
    """Return the standard error of the mean at each size, and the degrees of freedom behind it.

    A variance from few replicates is leaned towards the trend of all variances (log-linear in log size), by
    as much as they agree with it (Smyth 2004, from memory); with many replicates it stays as it is.

    Parameters
    ----------
    groups : SizeGroups
        The replicates at each size.

    Returns
    -------
    numpy.ndarray, shape (sizes,)
    numpy.ndarray, shape (sizes,)
    """
    freedom = groups.counts - 1.0
    seen = groups.variances > 0
    half = freedom[seen] / 2
    logs = np.log(groups.variances[seen]) - digamma(half) + np.log(half)
    noise = polygamma(1, half)
    place = np.log(groups.x)
    slope = 1 if seen.sum() >= 3 else 0
    line = np.polynomial.Polynomial.fit(place[seen], logs, slope, w=1 / np.sqrt(noise))
    left = seen.sum() - slope - 1
    beyond = np.sum((logs - line(place[seen])) ** 2) / left - noise.mean() if left > 0 else 0.0
    halves = np.geomspace(_MOST_TREND, _LEAST_TREND, 400) / 2
    weight = 2 * float(np.interp(beyond, polygamma(1, halves), halves))
    trend = np.exp(line(place) + digamma(weight / 2) - np.log(weight / 2))
    variances = (weight * trend + freedom * groups.variances) / (weight + freedom)
    behind = np.minimum(weight + freedom, freedom.sum())
    return np.sqrt(variances / groups.counts), behind


def resampled_means(
    groups: SizeGroups, spreads: np.ndarray, resamples: int, generator: np.random.Generator
) -> np.ndarray:
    """Return means of replicates drawn anew within each size, shape (resamples, sizes).

    Their standard deviation is set to `spreads`; where all replicates are equal, nothing can be drawn anew
    and normal deviates stand in.
    """
    means = np.empty((resamples, len(groups.x)))
    for at, values in enumerate(groups.values):
        count = len(values)
        exact = np.sqrt(np.mean((values - values.mean()) ** 2) / count)
        if exact == 0:
            means[:, at] = values[0] + spreads[at] * generator.standard_normal(resamples)
            continue
        step = max(1, _BLOCK // count)
        for start in range(0, resamples, step):
            some = slice(start, min(start + step, resamples))
            drawn = values[generator.integers(0, count, (some.stop - some.start, count))].mean(axis=1)
            means[some, at] = values.mean() + (drawn - values.mean()) * spreads[at] / exact
    return means


def quantile_band(
    curves: np.ndarray, masses: np.ndarray, confidence: float, simultaneous: bool
) -> tuple[np.ndarray, np.ndarray]:
    """Return the limits between which curves lie with a share of `confidence` of their mass.

    Parameters
    ----------
    curves : numpy.ndarray, shape (curves, points)
    masses : numpy.ndarray, shape (curves,)
    confidence : float
    simultaneous : bool
        True: that share of the mass lies between the limits at all points at once. Limits are then equally
        deep quantiles at every point, as deep as needed (ranks as in Mandel & Betensky 2008, from memory).
    """
    masses = masses / masses.sum()
    order = np.argsort(curves, axis=0, kind="stable")
    ordered = np.take_along_axis(curves, order, axis=0)
    middle = np.cumsum(masses[order], axis=0) - masses[order] / 2
    tail = (1 - confidence) / 2
    if simultaneous:
        shallow = np.minimum(middle, 1 - middle)
        depth = np.empty_like(shallow)
        np.put_along_axis(depth, order, shallow, axis=0)
        least = depth.min(axis=1)
        deepest = np.argsort(-least, kind="stable")
        last = min(int(np.searchsorted(np.cumsum(masses[deepest]), confidence)), len(deepest) - 1)
        tail = least[deepest[last]]
    columns = range(curves.shape[1])
    lower = [np.interp(tail, middle[:, at], ordered[:, at]) for at in columns]
    upper = [np.interp(1 - tail, middle[:, at], ordered[:, at]) for at in columns]
    return np.array(lower), np.array(upper)


def check_points(xs: Any, low: float, high: float, above: dict[str, float], force: bool) -> np.ndarray:
    """Return the sizes asked for, shape (points,).

    Parameters
    ----------
    xs : float or sequence of float
    low, high : float
        Smallest and largest size that was measured.
    above : dict
        Law → the size above which it is defined.
    force : bool
        Whether sizes farther outside than `REACH` are allowed.

    Raises
    ------
    InputError
        When a size is not a finite number above 0, too far outside, or where a law is not defined.
    """
    try:
        points = np.atleast_1d(np.asarray(xs, dtype=np.float64))
    except (TypeError, ValueError):
        raise InputError(f"xs is {xs!r}; give one size or a list of sizes.") from None
    if points.ndim != 1 or not points.size:
        raise InputError(f"xs has shape {points.shape}; give one size or a list of at least one.")
    wrong = ~((points >= 1 / _LARGEST) & (points <= _LARGEST))
    if wrong.any():
        raise InputError(
            f"xs holds {points[wrong][0]:g}; every size must be above 0 and at most {_LARGEST:g}."
        )
    if not force and points.max() > REACH * high:
        raise InputError(
            f"xs holds {points.max():g}, which is {points.max() / high:.3g} times the largest measured size "
            f"{high:g}; laws that agree on the data part company there, so ask for at most "
            f"{REACH * high:g}, or set force=True."
        )
    if not force and points.min() < low / REACH:
        raise InputError(
            f"xs holds {points.min():g}, which is less than 1/{REACH:g} of the smallest measured size "
            f"{low:g}; ask for at least {low / REACH:g}, or set force=True."
        )
    for name, least in above.items():
        if points.min() <= least:
            raise InputError(
                f"xs holds {points.min():g}, where the law {name!r} is not defined; ask for sizes above "
                f"{least:.4g}, or fit without it by laws=[...]."
            )
    return points


def conclusions(
    name: str,
    weights: pd.Series,
    misfit: float,
    held_out: dict[str, Any],
    at_limit: list[str],
    left_out: dict[str, str],
) -> list[str]:
    """Return what can and what cannot be concluded, one sentence each.

    Parameters
    ----------
    name : str
        The measure.
    weights : pandas.Series
        Weight of each law, largest first.
    misfit : float
    held_out : dict
        As in `labkit.GrowthFit`.
    at_limit : list of str
        Laws whose exponent ends at the limit of its search.
    left_out : dict
        Law → why it was not fitted.
    """
    best, share = weights.index[0], weights.iloc[0]
    rivals = [f"{law} ({weight:.2f})" for law, weight in weights.iloc[1:].items() if weight >= _RIVAL]
    if rivals:
        sentences = [f"The data favour {best} ({share:.2f}) but do not rule out {', '.join(rivals)}."]
    else:
        sentences = [f"Among the laws tried, the data single out {best} ({share:.2f})."]
    if misfit > 1:
        sentences.append(
            "No law agrees with the means within their errors (chi-square per degree of freedom "
            f"{misfit:.3g}): bands are widened {np.sqrt(misfit):.3g} times; beyond the data all is a guess."
        )
    if held_out["inside"] is not None:
        verdict = "the two agree" if held_out["inside"] else "they miss it, so beware of larger sizes"
        sentences.append(
            f"From the smaller sizes alone the laws expect a mean {name} of {held_out['estimate']:.4g} "
            f"({held_out['lower']:.4g} to {held_out['upper']:.4g}) at {held_out['x']:g}, where "
            f"{held_out['mean']:.4g} was measured: {verdict}."
        )
    sentences += [f"The exponent of {law} ends at the limit of its search." for law in at_limit]
    sentences += [f"{law.capitalize()} was left out: {reason}." for law, reason in left_out.items()]
    sentences.append(
        "Beyond the sizes measured, a band holds only if one of these laws goes on holding there."
    )
    return sentences
