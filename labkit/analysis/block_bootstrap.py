"""Confidence from one trace: its intervals of time resampled in blocks of what hangs together."""

from typing import Any

import numpy as np
import pandas as pd
from scipy import stats

from labkit.checks import check_fraction, check_member, check_whole, nearest
from labkit.errors import InputError
from labkit.randomness import seed_sequence

# Each measure is a sum over intervals ÷ another one.
MEASURES = {
    "sojourn_mean": ("sojourn_sum", "completed"),
    "waiting_mean": ("waiting_sum", "completed"),
    "late_share": ("late", "completed"),
    "blocked_share": ("blocked", "arrivals"),
    "tasks_present": ("area", "time"),
    "max_load": ("max_load", "intervals"),
    "max_utilisation": ("max_utilisation", "intervals"),
    "overload_share": ("overloaded", "intervals"),
}
LEAST_INTERVALS, LEAST_BLOCKS = 10, 5
_KEYS = ("policy", "replicate", "interval")
_PLACES = ("interval", "start", "end")
_DRAWN = 4_000_000


def block_bootstrap(
    by_interval: pd.DataFrame,
    *,
    of: str = "sojourn_mean",
    baseline: Any = None,
    length: int = 1,
    confidence: float = 0.95,
    rng: Any,
    resamples: int = 1_999,
) -> pd.DataFrame:
    """Return what a trace says of a policy, or of the difference of two, with a band for other such times.

    The same trace again gives the same numbers; what another week would give is seen from how the days of
    this one differ. Blocks of `length` consecutive intervals are drawn with replacement, the last followed by
    the first, until they are as many as there were (circular block bootstrap).

    Parameters
    ----------
    by_interval : pandas.DataFrame
        ``outcome.by_interval`` of `labkit.replay` with ``block=`` (or of `labkit.serve`), or several of them
        put together. Replicates are averaged within an interval: they differ in coins, not in the trace.
    of : str
        sojourn_mean, waiting_mean (of the tasks that leave); late_share; blocked_share (of the arrivals);
        tasks_present (mean number of tasks in the fleet); max_load, max_utilisation (mean over intervals of
        the highest within each); or overload_share (share of intervals in which some utilisation exceeds 1).
    baseline : str or Policy, optional
        The policy that the others are compared with, on the same resampled blocks. Default: no comparison.
    length : int
        Intervals in a block: so many that what happens in one block hardly tells of the next. At most a fifth
        of all. Default: 1, for intervals that know nothing of each other, such as days without a trend.
    confidence : float
        Coverage of the band, in (0, 1).
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Source of the resamples.
    resamples : int
        How many, at least 99.

    Returns
    -------
    pandas.DataFrame
        One row a policy (without the baseline): policy, of, baseline (where one is given), estimate (the
        measure, or policy − baseline), lower, upper, intervals, left_out (the last interval, when it is
        shorter than the others), length, confidence.

    Raises
    ------
    InputError
        When there are fewer than 10 intervals of full length, when policies have not the same intervals, or
        when the table or an argument is refused.

    Notes
    -----
    Circular block bootstrap: Politis & Romano (1992), after Künsch (1989); both from memory. The band is that
    of the percentiles about the estimate, wider by Student's quantile for the number of blocks, since few
    blocks vary less than what they stand for. It holds for a series without trend. Simulated coverage of
    95 % bands on 100 intervals: 95 % with ``length=1`` when intervals are independent; when neighbours
    correlate by 0.5, 93 % with ``length=10``, 91 % with 5, and 73 % with 1.

    The highest load of the whole trace is not among the measures: what is higher than all that was seen,
    resampling cannot tell.

    Examples
    --------
    >>> import labkit as lk
    >>> from labkit.traces.invented import invented_trace
    >>> fleet = lk.ring(6)
    >>> trace = invented_trace(fleet, days=14, tasks_per_day=200, rng=1)
    >>> tables = [
    ...     lk.replay(fleet, trace, rule, rng=1, warmup=48.0, block=24.0).by_interval
    ...     for rule in ("one-choice", "least-loaded")
    ... ]
    >>> import pandas as pd
    >>> found = lk.block_bootstrap(pd.concat(tables), of="max_load", baseline="one-choice", rng=2)
    >>> found[["policy", "intervals", "left_out"]].values.tolist()
    [['least-loaded', 11, 1]]
    >>> bool(found["upper"].item() < 0)
    True
    """
    check_member("of", of, MEASURES)
    confidence, length = check_fraction("confidence", confidence), check_whole("length", length)
    resamples, seed = check_whole("resamples", resamples, least=99), seed_sequence(rng)
    table = _checked(by_interval, of)
    owners, runs = _as_runs(table)
    policies = sorted(set(owners))
    baseline = getattr(baseline, "name", baseline)
    if baseline is not None and baseline not in policies:
        raise InputError(
            f"baseline is {baseline!r}, which is not in by_interval; {nearest(baseline, policies)}."
        )
    if policies == [baseline]:
        raise InputError(f"by_interval holds only the baseline {baseline!r}; add another policy.")
    full = _full_intervals(runs)
    if full.sum() < LEAST_INTERVALS:
        raise InputError(
            f"by_interval has {full.sum()} intervals of full length; give at least {LEAST_INTERVALS}, "
            "so replay a longer trace or give a shorter block."
        )
    if length * LEAST_BLOCKS > full.sum():
        raise InputError(
            f"length is {length}, and by_interval has {full.sum()} intervals of full length; give at most a "
            f"fifth of them, {full.sum() // LEAST_BLOCKS}."
        )
    own = [[at for at, owner in enumerate(owners) if owner == policy] for policy in policies]
    parts, wholes = (
        np.array([runs[name][rows][:, full].mean(axis=0) for rows in own]) for name in MEASURES[of]
    )
    estimate, drawn = _resampled(parts, wholes, length, resamples, seed)
    if np.isnan(drawn).any():
        raise InputError(
            f"{of} divides by '{MEASURES[of][1]}', which is 0 in nearly all intervals; give a longer block."
        )
    shown = [at for at, name in enumerate(policies) if name != baseline]
    if baseline is not None:
        base = policies.index(baseline)
        estimate, drawn = estimate - estimate[base], drawn - drawn[base]
    lower, upper = _band(estimate, drawn, confidence, full.sum() / length)
    result = pd.DataFrame({"policy": [policies[at] for at in shown], "of": of})
    if baseline is not None:
        result["baseline"] = baseline
    columns = {"estimate": estimate, "lower": lower, "upper": upper}
    result = result.assign(**{name: values[shown] for name, values in columns.items()})
    return result.assign(
        intervals=int(full.sum()), left_out=int((~full).sum()), length=length, confidence=confidence
    )


def _checked(by_interval: pd.DataFrame, of: str) -> pd.DataFrame:
    """Return the table with the two sums of the measure, sorted."""
    if not isinstance(by_interval, pd.DataFrame):
        raise InputError(
            f"by_interval is {type(by_interval).__name__}; give the DataFrame outcome.by_interval."
        )
    made = ("time", "intervals", "overloaded")
    source = "max_utilisation" if of == "overload_share" else MEASURES[of][0]
    needed = {*_KEYS, "start", "end", source, MEASURES[of][1]}.difference(made)
    for name in sorted(needed):
        if name not in by_interval.columns:
            raise InputError(
                f"by_interval has no column {name!r}; {nearest(name, map(str, by_interval.columns))}."
            )
    numbers = sorted(needed.difference(("policy",)))
    table = by_interval[["policy", *numbers]].reset_index(drop=True)
    for name in numbers:
        if table[name].dtype.kind not in "iuf" or not np.isfinite(table[name].to_numpy(np.float64)).all():
            raise InputError(
                f"by_interval has values of {name!r} that are no finite numbers; leave them out."
            )
    if not all(isinstance(name, str) for name in table["policy"]):
        raise InputError("by_interval has a policy that is no text; give each row the name of its policy.")
    table = table.assign(time=table["end"] - table["start"], intervals=1)
    if of == "overload_share":
        table["overloaded"] = table["max_utilisation"] > 1
    if not len(table):
        raise InputError("by_interval has no rows; replay a trace with durations first.")
    twice = table.duplicated(list(_KEYS)).to_numpy()
    if twice.any():
        row = table[list(_KEYS)].loc[int(np.argmax(twice))]
        raise InputError(
            f"by_interval has interval {row['interval']} of replicate {row['replicate']} of policy "
            f"{row['policy']!r} twice; give each policy one name and one setting."
        )
    return table.sort_values(list(_KEYS), ignore_index=True)


def _as_runs(table: pd.DataFrame) -> tuple[list[str], dict[str, np.ndarray]]:
    """Return the policy of each run (a policy and replicate), and columns of shape (runs, intervals)."""
    starts = np.flatnonzero(
        (table[["policy", "replicate"]] != table[["policy", "replicate"]].shift()).any(axis=1)
    )
    shape = (len(starts), -1) if len(table) % len(starts) == 0 else (1, -1)
    runs = {str(name): table[name].to_numpy().reshape(shape) for name in table if name != "policy"}
    same = (np.array_equal(runs[name], np.broadcast_to(runs[name][0], runs[name].shape)) for name in _PLACES)
    if shape[0] != len(starts) or not all(same):
        raise InputError(
            "by_interval has not the same intervals for all policies and replicates; replay each with the "
            "same trace, warmup and block."
        )
    return table["policy"].to_numpy()[starts].tolist(), runs


def _full_intervals(runs: dict[str, np.ndarray]) -> np.ndarray:
    """Return which intervals have full length, in order: all, or all but the last."""
    lengths = runs["time"][0]
    full = lengths > (1 - 1e-6) * lengths.max()
    if not full[:-1].all():
        raise InputError(
            f"by_interval has an interval, {runs['interval'][0][int(np.argmin(full))]}, shorter than others "
            "before its last one; give intervals of one length."
        )
    return full


def _resampled(
    parts: np.ndarray, wholes: np.ndarray, length: int, resamples: int, seed: np.random.SeedSequence
) -> tuple[np.ndarray, np.ndarray]:
    """Return ratios of sums, shape (policies,), and those of resampled intervals, (policies, resamples)."""
    draw = np.random.Generator(np.random.SFC64(seed))
    count = parts.shape[1]
    blocks = -(-count // length)
    sums = np.stack([parts, wholes])
    whole_blocks = _circular_sums(sums, length)
    # The last block is cut, so that each resample has as many intervals as there are.
    last_block = _circular_sums(sums, count - (blocks - 1) * length)
    drawn = np.empty((*sums.shape[:2], resamples))
    step = max(1, _DRAWN // blocks)
    for start in range(0, resamples, step):
        first = draw.integers(0, count, (min(step, resamples - start), blocks))
        for place in np.ndindex(*sums.shape[:2]):
            total = whole_blocks[place][first[:, :-1]].sum(axis=1) + last_block[place][first[:, -1]]
            drawn[(*place, slice(start, start + len(first)))] = total
    with np.errstate(invalid="ignore", divide="ignore"):
        estimate = sums[0].sum(axis=1) / sums[1].sum(axis=1)
        return estimate, np.where(drawn[1] == 0, np.nan, drawn[0] / drawn[1])


def _circular_sums(values: np.ndarray, length: int) -> np.ndarray:
    """Return the sums of `length` values from each place on, the first following the last."""
    return np.sum([np.roll(values, -shift, axis=-1) for shift in range(length)], axis=0)


def _band(
    estimate: np.ndarray, drawn: np.ndarray, confidence: float, blocks: float
) -> tuple[np.ndarray, np.ndarray]:
    tail = (1 - confidence) / 2
    wider = stats.t.ppf(1 - tail, blocks - 1) / stats.norm.ppf(1 - tail) * np.sqrt(blocks / (blocks - 1))
    low, high = np.quantile(drawn, [tail, 1 - tail], axis=1)
    return estimate - wider * (estimate - low), estimate + wider * (high - estimate)
