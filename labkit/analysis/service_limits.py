"""Confidence limits of what `labkit.serve` and `labkit.replay` measure, from replicates or one long run."""

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
import pandas as pd
from scipy.stats import t as student

from labkit.analysis.tables import PROVENANCE, describe
from labkit.checks import check_fraction, nearest
from labkit.errors import InputError, TooFewReplicates

# Measure -> the two columns of by_interval whose sums it is the ratio of; None stands for time.
RATIOS: dict[str, tuple[str, str | None]] = {
    "sojourn_mean": ("sojourn_sum", "completed"),
    "waiting_mean": ("waiting_sum", "completed"),
    "waiting_share": ("delayed", "completed"),
    "late_share": ("late", "completed"),
    "blocked_share": ("blocked", "arrivals"),
    "queue_mean": ("area", None),
    "utilisation": ("work", None),
}
# Numbers of batches that are tried in turn while neighbouring batches are alike.
BATCHES = (30, 20, 15, 10)
LEAST_BATCHES = BATCHES[-1]
# Neighbouring batches with at most this correlation count as independent.
ALIKE = 0.2
_COLUMNS = ("measure", "estimate", "lower", "upper", "confidence", "method", "count", "correlation")


def service_limits(
    measures: pd.DataFrame,
    by_interval: pd.DataFrame | None = None,
    *,
    of: str | Sequence[str] = "sojourn_mean",
    confidence: float = 0.95,
) -> pd.DataFrame:
    """Return a measure of each group of runs with confidence limits.

    Where a group has two or more replicates, they are independent and the limits are Student's of their mean.
    Where it has one, its intervals are gathered into batches: a measure is a ratio of sums (sojourn time per
    completed task, tasks per time), its limits come from the residuals of the batches, numerator − ratio ×
    denominator (delta method), and Student's t with one degree of freedom less than there are batches. There
    are 30 batches; 20, 15 and at last 10 while the correlation of neighbouring batches is above 0.2. Few
    batches cost little precision (Schmeiser 1982; Law & Kelton's text book; both from memory).

    Parameters
    ----------
    measures : pandas.DataFrame
        One row a replicate, as in ``outcome.measures``. Groups are formed by `load_factor` and by the labels:
        `policy`, any other column of text and any named index level.
    by_interval : pandas.DataFrame, optional
        As in ``outcome.by_interval`` of the same runs; needed for groups of one replicate. Intervals that
        begin before the row's `warmup` are left out.
    of : str or list of str
        Measures. With several replicates any measured column; with one: sojourn_mean, waiting_mean,
        waiting_share, late_share, blocked_share, queue_mean or utilisation.
    confidence : float
        Coverage of the limits, in (0, 1).

    Returns
    -------
    pandas.DataFrame
        One row a group and measure: the labels, measure, estimate, lower, upper (in units of the measure),
        confidence, method ("replicates" or "batch means"), count (replicates or batches), correlation (of
        neighbouring batches; NaN for replicates). A correlation still above 0.2 with 10 batches says that the
        run is too short for these limits.

    Raises
    ------
    TooFewReplicates
        When a group has one replicate and no intervals, fewer than 10, or a measure that is no ratio of sums.
    InputError
        When a table or a number is refused.

    Notes
    -----
    Values that are all equal have limits of width zero: where nothing was blocked, that is no proof that
    nothing can be. Simulated coverage of 95 % limits of a mean sojourn from one run (one queue, exponential
    service, load 0.7, 100 intervals): 95 % at 20,000 service times, 92 % at 5,000, 86 % at 1,000.

    Examples
    --------
    >>> import pandas as pd
    >>> runs = pd.DataFrame({"replicate": range(4), "sojourn_mean": [3.1, 3.4, 3.2, 3.5]})
    >>> service_limits(runs)[["estimate", "lower", "upper", "method"]].round(3).values.tolist()
    [[3.3, 3.009, 3.591, 'replicates']]
    """
    confidence = check_fraction("confidence", confidence)
    table, labels = _checked_measures(measures)
    wanted = _checked_names(of, table)
    kinds = table[labels].drop_duplicates()
    rows = []
    for group in _groups(table, labels):
        about = {name: group.iloc[0][name] for name in labels}
        for name in wanted:
            values = _numbers(group[name], name, describe(group.iloc[0], labels))
            if len(group) >= 2:
                found = _over_replicates(values, confidence)
            else:
                intervals = _intervals_of(group.iloc[0], by_interval, kinds, name)
                found = _over_batches(name, float(values[0]), intervals, confidence)
            rows.append(about | {"measure": name} | found)
    return pd.DataFrame(rows, columns=[*labels, *_COLUMNS])


def _over_replicates(values: np.ndarray, confidence: float) -> dict[str, Any]:
    error = float(values.std(ddof=1) / np.sqrt(len(values)))
    return _row(float(values.mean()), error, len(values), confidence, "replicates", np.nan)


def _over_batches(name: str, estimate: float, intervals: pd.DataFrame, confidence: float) -> dict[str, Any]:
    part, whole = RATIOS[name]
    over = intervals[whole] if whole else intervals["end"] - intervals["start"]
    parts, wholes = intervals[part].to_numpy(np.float64), over.to_numpy(np.float64)
    for wanted in BATCHES:
        count = min(wanted, len(parts))
        error, correlation = ratio_error(parts, wholes, count)
        if correlation <= ALIKE:
            break
    # The table's own measure may be per server or per unit of capacity, which the sums of intervals are not.
    ratio = parts.sum() / wholes.sum()
    scale = estimate / ratio if ratio else 1.0
    return _row(estimate, error * scale, count, confidence, "batch means", correlation)


def ratio_error(parts: np.ndarray, wholes: np.ndarray, batches: int) -> tuple[float, float]:
    """Return the standard error of sum(parts)/sum(wholes), and the correlation of neighbouring batches.

    Parameters
    ----------
    parts, wholes : numpy.ndarray
        float64 of shape (intervals,), in order of time.
    batches : int
        Into how many batches, of equal numbers of intervals to one, they are gathered.
    """
    top, bottom = (
        np.array([batch.sum() for batch in np.array_split(values, batches)]) for values in (parts, wholes)
    )
    residuals = top - top.sum() / bottom.sum() * bottom
    squares = float(residuals @ residuals)
    error = np.sqrt(squares * batches / (batches - 1)) / bottom.sum()
    # Residuals that sum to 0 look less alike than the batches are, by about 1/batches.
    alike = float(residuals[1:] @ residuals[:-1]) / squares + 1 / batches if squares else 0.0
    return float(error), alike


def _row(
    estimate: float, error: float, count: int, confidence: float, method: str, correlation: float
) -> dict[str, Any]:
    half = float(student.ppf((1 + confidence) / 2, count - 1)) * error
    values = (estimate, estimate - half, estimate + half, confidence, method, count, correlation)
    return dict(zip(_COLUMNS[1:], values, strict=True))


def _intervals_of(
    row: pd.Series, by_interval: pd.DataFrame | None, groups: pd.DataFrame, name: str
) -> pd.DataFrame:
    """Return the intervals of a group's only replicate, in order, without the warm-up.

    `groups` has the labels of all groups, one row each.
    """
    labels = list(groups.columns)
    where = describe(row, labels) or "these runs"
    advice = "run at least 2 replicates"
    if name not in RATIOS:
        raise TooFewReplicates(
            f"measures holds one replicate of {where}; {name} has no limits from one run, so {advice}."
        )
    if by_interval is None:
        raise TooFewReplicates(
            f"measures holds one replicate of {where}; {advice} or give by_interval=outcome.by_interval."
        )
    part, whole = RATIOS[name]
    for column in ("replicate", "start", "end", part, whole or part):
        if column not in by_interval.columns:
            raise InputError(f"by_interval has no column {column!r}; give outcome.by_interval.")
    shared = [label for label in labels if label in by_interval.columns]
    if len(set(map(tuple, groups[shared].to_numpy(object)))) < len(groups):
        lacking = " and ".join(repr(label) for label in labels if label not in shared)
        raise InputError(
            f"by_interval has no column {lacking}, by which the runs of measures differ; add it, or give the "
            "tables of one outcome at a time."
        )
    same = np.logical_and.reduce([by_interval[label] == row[label] for label in [*shared, "replicate"]])
    found = by_interval[same].sort_values("start", kind="stable")
    if found["start"].duplicated().any():
        raise InputError(f"by_interval holds two rows for one interval of {where}; give each run once.")
    if "warmup" in row.index:
        found = found[found["start"] >= row["warmup"] * (1 - 1e-12)]
    if len(found) < LEAST_BATCHES:
        raise TooFewReplicates(
            f"by_interval holds {len(found)} intervals of {where} after the warm-up; limits from one run "
            f"need at least {LEAST_BATCHES}, so ask for more intervals or {advice}."
        )
    sums = {column: _numbers(found[column], column, where, "by_interval") for column in {part, whole or part}}
    if whole and sums[whole].sum() <= 0:
        raise InputError(f"by_interval holds no {whole} of {where}; give a longer horizon.")
    return found


def _checked_measures(measures: Any) -> tuple[pd.DataFrame, list[str]]:
    if not isinstance(measures, pd.DataFrame):
        raise InputError(f"measures is {type(measures).__name__}; give the DataFrame of outcome.measures.")
    lifted = [str(name) for name in measures.index.names if name is not None]
    table = measures.drop(columns=[name for name in lifted if name in measures.columns])
    table = table.reset_index(lifted) if lifted else table
    table = table.reset_index(drop=True)
    if not len(table):
        raise InputError("measures has no rows; serve at least one replicate first.")
    if "replicate" not in table.columns:
        raise InputError(
            f"measures has no column 'replicate'; {nearest('replicate', map(str, table.columns))}."
        )
    labels = list(_labels(table, lifted))
    for label in [*labels, "replicate"]:
        if table[label].isna().any():
            row = int(np.argmax(table[label].isna()))
            raise InputError(f"measures row {row} has no {label}; fill it in or drop the column.")
    twice = table.duplicated([*labels, "replicate"])
    if twice.any():
        copy = table[twice].iloc[0]
        raise InputError(
            f"measures holds replicate {copy['replicate']} of {describe(copy, labels)} more than once; each "
            "counts once, so drop the copy or tell the two apart by a column of text."
        )
    return table, labels


def _labels(table: pd.DataFrame, lifted: list[str]) -> Iterator[str]:
    for name in sorted(table.columns, key=lambda name: name != "policy"):
        column = table[name]
        text = pd.api.types.is_string_dtype(column) or isinstance(column.dtype, pd.CategoricalDtype)
        given = name in lifted and name != "replicate"
        if name in ("policy", "load_factor") or given or (text and name not in PROVENANCE):
            yield name


def _groups(table: pd.DataFrame, labels: list[str]) -> list[pd.DataFrame]:
    return [group for _, group in table.groupby(labels, sort=True, observed=True)] if labels else [table]


def _checked_names(of: Any, table: pd.DataFrame) -> list[str]:
    names = [of] if isinstance(of, str) else of
    if not isinstance(names, Sequence) or not all(isinstance(name, str) for name in names) or not names:
        raise InputError(
            f"of is {of!r}; give the name of a measure, such as 'sojourn_mean', or a list of names."
        )
    for name in names:
        numeric = name in table.columns and pd.api.types.is_numeric_dtype(table[name])
        if not numeric or name in ("replicate", "load_factor"):
            measured = [
                column
                for column in table.columns
                if pd.api.types.is_numeric_dtype(table[column]) and column not in ("replicate", "load_factor")
            ]
            raise InputError(
                f"of holds {name!r}, which measures does not measure; {nearest(name, measured)}."
            )
    return list(names)


def _numbers(column: pd.Series, name: str, where: str, table: str = "measures") -> np.ndarray:
    values = column.to_numpy(dtype=np.float64, na_value=np.nan)
    if not np.isfinite(values).all():
        shown = values[~np.isfinite(values)][0]
        raise InputError(
            f"{table} holds {name} {shown} for {where or 'these runs'}; each must be a finite number, so "
            "choose another measure or a longer horizon."
        )
    return values
