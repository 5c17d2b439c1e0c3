"""From what age of the reports on a rule that looks at loads does worse than one that looks at none."""

from typing import Any

import numpy as np
import pandas as pd
from scipy.stats import t as student

from labkit.checks import check_fraction
from labkit.errors import InputError, TooFewReplicates

COLUMNS = ("network", "age", "policy", "replicate")


def against_blind(
    measures: pd.DataFrame, *, blind: str = "one-choice", of: str = "sojourn_mean", confidence: float = 0.95
) -> pd.DataFrame:
    """Return how far each rule lies from the blind one, by network and age, over the same replicates.

    Parameters
    ----------
    measures : pandas.DataFrame
        One row a run: network, age (of the reports; NaN for the rule that looks at none), policy, replicate
        and the measure.
    blind : str
        The rule that looks at no loads.
    of : str
        The measure; less is better.
    confidence : float
        Coverage of Student's limits, in (0, 1).

    Returns
    -------
    pandas.DataFrame
        One row a network, policy and age: estimate, lower, upper (of the ratio of the means of paired
        replicates, by the delta method), blind_mean, mean.

    Raises
    ------
    InputError
        When a column or the blind rule is missing.
    TooFewReplicates
        When there are fewer than 2 replicates.
    """
    confidence = check_fraction("confidence", confidence)
    for column in (*COLUMNS, of):
        if column not in measures.columns:
            raise InputError(f"measures has no column {column!r}; give runs by {', '.join(COLUMNS)}.")
    rows: list[dict[str, Any]] = []
    for network, group in measures.groupby("network", sort=False):
        base = group[group["policy"] == blind].set_index("replicate")[of]
        if base.empty or base.index.has_duplicates:
            raise InputError(f"measures needs {blind!r} once a replicate on {network}; run it there.")
        others = group[group["policy"] != blind]
        for (policy, age), runs in others.groupby(["policy", "age"], sort=True):
            values = runs.set_index("replicate")[of]
            ratio = values.mean() / base.mean()
            # The delta method: how far each pair of replicates is from this ratio.
            ratios = ratio + (values - ratio * base.reindex(values.index)) / base.mean()
            count = len(ratios)
            if count < 2 or ratios.isna().any():
                raise TooFewReplicates(
                    f"measures holds {count} replicates of {policy} on {network}, or others than of {blind}; "
                    "limits need at least 2 of both."
                )
            half = student.ppf((1 + confidence) / 2, count - 1) * ratios.std(ddof=1) / np.sqrt(count)
            rows.append(
                {
                    "network": network,
                    "policy": policy,
                    "age": age,
                    "estimate": ratios.mean(),
                    "lower": ratios.mean() - half,
                    "upper": ratios.mean() + half,
                    "mean": values.mean(),
                    "blind_mean": base.mean(),
                }
            )
    return pd.DataFrame(rows)


def worse_from(table: pd.DataFrame) -> pd.DataFrame:
    """Return from what age on looking is worse than not looking, one row a network and policy.

    Parameters
    ----------
    table : pandas.DataFrame
        As `against_blind` returns it.

    Returns
    -------
    pandas.DataFrame
        network, policy, better_at (the highest age below which every age is better with certainty), age
        (where the ratio crosses 1, between two ages on a logarithmic scale), worse_at (the lowest age that is
        worse with certainty); NaN where there is none.
    """
    rows = []
    for (network, policy), group in table.groupby(["network", "policy"], sort=False):
        group = group.sort_values("age")
        ages, ratio = group["age"].to_numpy(), group["estimate"].to_numpy()
        worse = np.flatnonzero(group["lower"].to_numpy() > 1)
        unsure = np.flatnonzero(group["upper"].to_numpy() >= 1)
        first_unsure = int(unsure[0]) if unsure.size else len(ages)
        over = np.flatnonzero(ratio > 1)
        age = np.nan
        if over.size and over[0] > 0:
            at = int(over[0])
            share = (1 - ratio[at - 1]) / (ratio[at] - ratio[at - 1])
            age = float(ages[at - 1] * (ages[at] / ages[at - 1]) ** share)
        rows.append(
            {
                "network": network,
                "policy": policy,
                "better_at": float(ages[first_unsure - 1]) if first_unsure else np.nan,
                "age": age,
                "worse_at": float(ages[worse[0]]) if worse.size else np.nan,
            }
        )
    return pd.DataFrame(rows)


def herding_words(found: pd.DataFrame, *, service_time: float, unit: str) -> str:
    """Return the rows of `worse_from` as a list in Markdown.

    Parameters
    ----------
    found : pandas.DataFrame
        Ages are in mean service times.
    service_time : float
        The mean service time of a server, in units of time.
    unit : str
        The unit of time.
    """
    lines = []
    for _, row in found.iterrows():
        where = f"- On {row['network']}, "
        if np.isfinite(row["age"]):
            lines.append(
                f"{where}{row['policy']} is worse than not looking once reports are about {row['age']:.3g} "
                f"mean service times ({service_time * row['age']:.3g} {unit}) apart{_how_sure(row)}."
            )
        elif np.isfinite(row["better_at"]):
            lines.append(
                f"{where}{row['policy']} is better than not looking up to {row['better_at']:.3g} mean "
                "service times, and on the whole at each age that was tried."
            )
        else:
            lines.append(
                f"{where}{row['policy']} is not better than not looking, with certainty, at the youngest age "
                "that was tried."
            )
    return "\n".join(lines)


def _how_sure(row: pd.Series) -> str:
    if np.isfinite(row["better_at"]) and np.isfinite(row["worse_at"]):
        return f" (better for certain up to {row['better_at']:.3g}, worse at {row['worse_at']:.3g})"
    return " (within the uncertainty of these replicates)"
