"""Which rule keeps the fullest server lower, judged on the same arrivals."""

from typing import Any, cast

import numpy as np
import pandas as pd

from labkit.analysis.tables import describe, moments_of, prepare
from labkit.checks import check_fraction, nearest
from labkit.errors import InputError, TooFewReplicates
from labkit.randomness import seed_sequence

RESAMPLES = 9_999
_BLOCK = 4_000_000


def compare(
    measures: pd.DataFrame, *, baseline: Any, of: str = "gap", confidence: float = 0.95, rng: Any = None
) -> pd.DataFrame:
    """Return how far each policy lies from the baseline on the same replicates.

    Replicate r of every policy meets the same arrivals, so the difference is taken replicate by replicate.
    The band is the percentile bootstrap of the mean difference over whole replicates: one set of resamples
    serves all policies and checkpoints, so bands along a curve belong together. Differences that are all
    equal have a band of width zero.

    Parameters
    ----------
    measures : pandas.DataFrame
        One row a policy, replicate and checkpoint, as in ``outcome.measures``; see `headroom` for the labels.
        Policies are compared within equal tasks (where work leaves equal load_factor and horizon) and equal
        labels.
    baseline : str or Policy
        The policy that the others are compared with.
    of : str
        The measure that is compared.
    confidence : float
        Coverage of the band, in (0, 1).
    rng : int, numpy.random.SeedSequence or numpy.random.Generator, optional
        Source of the resamples; give it wherever the band is to be repeated. Default: fresh entropy from the
        system, so that the band differs from call to call in its last digits.

    Returns
    -------
    pandas.DataFrame
        One row a policy (without the baseline), label set and checkpoint: the labels, tasks, replicates,
        baseline, difference (mean of policy − baseline, in units of `of`), lower, upper, share_lower (share
        of replicates in which the policy was strictly lower), confidence.

    Raises
    ------
    InputError
        When the baseline is not in the table, when a replicate of one is missing from the other, or when the
        table or a number is refused.
    TooFewReplicates
        When there is only one replicate.

    Examples
    --------
    >>> import labkit as lk
    >>> import pandas as pd
    >>> fleet, rules = lk.ring(20), ["one-choice", "least-loaded"]
    >>> tables = [lk.place(fleet, rule, tasks=2000, replicates=50, rng=1).measures for rule in rules]
    >>> paired = lk.compare(pd.concat(tables), baseline="one-choice", rng=2)
    >>> paired[["policy", "baseline", "replicates", "share_lower"]].values.tolist()
    [['least-loaded', 'one-choice', 50, 1.0]]
    >>> bool(paired["upper"].item() < 0)
    True
    """
    confidence = check_fraction("confidence", confidence)
    baseline = getattr(baseline, "name", baseline)
    seed = np.random.SeedSequence() if rng is None else seed_sequence(rng)
    table, labels = prepare(measures, of)
    if "policy" not in labels:
        raise InputError("measures has no column 'policy'; add one that names the rule of each row.")
    policies = sorted(table["policy"].unique())
    if baseline not in policies:
        raise InputError(
            f"baseline is {baseline!r}, which is not in measures; {nearest(baseline, policies)}."
        )
    others = [name for name in labels if name != "policy"]
    groups = [group for _, group in table.groupby(others, observed=True)] if others else [table]
    moments = moments_of(table)
    rows = [row for group in groups for row in _rows(group, others, moments, baseline, of, confidence, seed)]
    columns = [*labels, *moments, "replicates", "baseline", "difference", "lower", "upper", "share_lower"]
    result = pd.DataFrame(rows, columns=[*columns, "confidence"])
    return result.sort_values([*labels, *moments], ignore_index=True)


def _rows(
    group: pd.DataFrame,
    others: list[str],
    moments: list[str],
    baseline: str,
    of: str,
    confidence: float,
    seed: np.random.SeedSequence,
) -> list[dict[str, Any]]:
    """Return the rows of one set of labels other than the policy."""
    grid = group.pivot(index="replicate", columns=["policy", *moments], values=of)
    if baseline not in grid.columns.get_level_values("policy"):
        raise InputError(
            f"baseline {baseline!r} has no rows for {describe(group.iloc[0], others)}; run it there too."
        )
    columns = cast("list[tuple[Any, ...]]", grid.columns.tolist())
    pairs = [pair for pair in columns if pair[0] != baseline]
    _check_paired(grid, pairs, baseline)
    differences = np.column_stack(
        [grid[pair].to_numpy(np.float64) - grid[(baseline, *pair[1:])].to_numpy(np.float64) for pair in pairs]
        or [np.empty((len(grid), 0))]
    )
    lower, upper = _bands(differences, confidence, seed)
    rows: list[dict[str, Any]] = []
    for at, (policy, *moment) in enumerate(pairs):
        row = {"policy": policy, **{name: group.iloc[0][name] for name in others}}
        row |= {**dict(zip(moments, moment, strict=True)), "replicates": len(grid), "baseline": baseline}
        row |= {"difference": differences[:, at].mean(), "lower": lower[at], "upper": upper[at]}
        row |= {"share_lower": (differences[:, at] < 0).mean(), "confidence": confidence}
        rows.append(row)
    return rows


def _check_paired(grid: pd.DataFrame, pairs: list[tuple[Any, ...]], baseline: str) -> None:
    names = [str(name) for name in grid.columns.names[1:]]
    alike = "checkpoints" if names == ["tasks"] else " and ".join(names)

    def words(pair: tuple[Any, ...]) -> str:
        return ", ".join(f"{name} {value}" for name, value in zip(names, pair[1:], strict=True))

    for pair in pairs:
        if (baseline, *pair[1:]) not in grid.columns:
            raise InputError(
                f"policy {pair[0]!r} is measured at {words(pair)} but the baseline {baseline!r} is not; "
                f"give both the same {alike}."
            )
    missing = np.argwhere(grid.isna().to_numpy())
    if len(missing):
        row, column = missing[0]
        pair = grid.columns[column]
        raise InputError(
            f"replicate {grid.index[row]} of policy {pair[0]!r} is missing at {words(pair)}; differences "
            "need the same replicates of every policy, so run the missing ones or drop that replicate "
            "everywhere."
        )
    if len(grid) < 2:
        raise TooFewReplicates(
            "measures holds 1 replicate a policy; a band on a difference needs at least 2."
        )


def _bands(
    differences: np.ndarray, confidence: float, seed: np.random.SeedSequence
) -> tuple[np.ndarray, np.ndarray]:
    """Return the limits, each of shape (columns,), of the mean over the rows of `differences`."""
    replicates = len(differences)
    generator = np.random.Generator(np.random.SFC64(seed))
    centre = differences.mean(axis=0)
    centred = differences - centre
    means = []
    step = max(1, _BLOCK // replicates)
    for start in range(0, RESAMPLES, step):
        resamples = min(step, RESAMPLES - start)
        drawn = generator.integers(0, replicates, (resamples, replicates))
        drawn += replicates * np.arange(resamples)[:, None]
        counts = np.bincount(drawn.ravel(), minlength=resamples * replicates).reshape(resamples, replicates)
        means.append(counts.astype(np.float64) @ centred / replicates)
    tail = (1 - confidence) / 2
    low, high = np.quantile(np.vstack(means), [tail, 1 - tail], axis=0)
    equal = np.ptp(differences, axis=0) == 0
    return np.where(equal, differences[0], centre + low), np.where(equal, differences[0], centre + high)
