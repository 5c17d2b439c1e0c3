"""The replicates at each size: what is taken and refused, errors of their means, and resampled means."""

from dataclasses import dataclass
from typing import Any, cast

import numpy as np
import pandas as pd
from scipy.special import digamma, polygamma

from labkit.analysis.tables import PROVENANCE, describe
from labkit.checks import nearest
from labkit.errors import InputError, TooFewReplicates

# The trend of the variances counts for at least as much as ten replicates, and an error is never zero.
_LEAST_TREND = 10.0
_MOST_TREND = 1e4
_BLOCK = 4_000_000
# Squares of powers of numbers within this stay finite.
LARGEST = 1e30


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
        check_numbers(table, column)
    low = table[x].to_numpy(dtype=np.float64) < 1 / LARGEST
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


def check_numbers(table: pd.DataFrame, column: str) -> None:
    """Refuse a column that does not hold finite real numbers."""
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
    far = np.abs(numbers.to_numpy(dtype=np.float64)) > LARGEST
    if far.any():
        row = int(np.flatnonzero(far)[0])
        raise InputError(
            f"measures row {row} has {column} {numbers.iloc[row]}, which is beyond {LARGEST:g}; "
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
