"""From measures to the answer: what each rule needs, what it saves, and which rule to take."""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from labkit.analysis.headroom import headroom
from labkit.checks import check_number, check_positive, nearest
from labkit.errors import HeadroomExceeded, InputError
from labkit.policies.naming import moves_placed_work


def answer_table(
    measures: pd.DataFrame, *, risk: float, confidence: float = 0.95, baseline: str, total_capacity: float
) -> pd.DataFrame:
    """Return what each policy needs once all tasks are placed, one row a policy and kind of information.

    Parameters
    ----------
    measures : pandas.DataFrame
        Rows of ``outcome.measures`` or of records, with `policy`; rows without `information` count as
        "fresh". Every group must end at the same number of tasks.
    risk, confidence : float
        As in `labkit.headroom`.
    baseline : str
        The policy that savings are counted from.
    total_capacity : float
        Capacity of the whole fleet in work units.

    Returns
    -------
    pandas.DataFrame
        Sorted by information, then headroom. Utilisations are load ÷ capacity, capacities work units:

        - policy, information, tasks, replicates, mean_utilisation
        - headroom, lower, upper: the (1 − risk) quantile of the gap and its limits
        - of_mean: headroom ÷ mean_utilisation
        - network: optimum − mean, the part of the headroom that no rule can avoid; rule: the rest
          (NaN when the excess was not measured)
        - capacity_needed: (mean_utilisation + headroom) × total capacity: the least capacity, in today's
          proportions, at which the fullest server overflows with a probability of at most `risk`
        - saved: headroom of the baseline − headroom, × total capacity
        - saved_at_least: the same from the baseline's lower to the policy's upper limit, true with a
          probability of at least `confidence`; NaN for the baseline itself
        - risk, confidence

    Raises
    ------
    InputError
        When the baseline is unknown or missing for one kind of information, or checkpoints end apart.
    TooFewReplicates
        When the replicates do not suffice for the risk.
    """
    total_capacity = check_positive("total_capacity", total_capacity)
    last = _last_checkpoint(measures)
    rows = headroom(last, risk=risk, confidence=confidence)
    if baseline not in set(rows["policy"]):
        raise InputError(
            f"baseline is {baseline!r}, which was not run; {nearest(baseline, rows['policy'].unique())}."
        )
    rows["of_mean"] = rows["headroom"] / rows["mean_utilisation"]
    keys = ["policy", "information"]
    network = (last["gap"] - last["excess"]).groupby([last[name] for name in keys]).mean()
    rows["network"] = network.reindex(pd.MultiIndex.from_frame(rows[keys])).to_numpy()
    rows["rule"] = rows["headroom"] - rows["network"]
    rows["capacity_needed"] = (rows["mean_utilisation"] + rows["headroom"]) * total_capacity
    base = rows[rows["policy"] == baseline].set_index("information")
    absent = sorted(set(rows["information"]) - set(base.index))
    if absent:
        raise InputError(
            f"baseline {baseline!r} was not run with information {absent[0]!r}; run it there too."
        )
    rows["saved"] = (
        base["headroom"].reindex(rows["information"]).to_numpy() - rows["headroom"]
    ) * total_capacity
    least = (base["lower"].reindex(rows["information"]).to_numpy() - rows["upper"]) * total_capacity
    rows["saved_at_least"] = np.where(rows["policy"] == baseline, np.nan, least)
    columns = [
        *(
            "policy",
            "information",
            "tasks",
            "replicates",
            "mean_utilisation",
            "headroom",
            "lower",
            "upper",
            "of_mean",
        ),
        *("network", "rule", "capacity_needed", "saved", "saved_at_least", "risk", "confidence"),
    ]
    return rows.sort_values(["information", "headroom", "policy"], ignore_index=True)[columns]


def _last_checkpoint(measures: pd.DataFrame) -> pd.DataFrame:
    for column in ("policy", "replicate", "tasks", "max_utilisation", "gap", "excess"):
        if column not in measures.columns:
            raise InputError(
                f"measures has no column {column!r}; give rows of outcome.measures or of records."
            )
    columns = ["policy", "replicate", "tasks", "max_utilisation", "gap", "excess"]
    table = measures[columns].assign(information=measures.get("information", "fresh"))
    ends = table.groupby(["policy", "information"])["tasks"].max()
    if ends.nunique() > 1:
        rows = ends.sort_values(kind="stable").reset_index()
        low, high = rows.iloc[0], rows.iloc[-1]
        raise InputError(
            f"policy {low['policy']!r} ends at tasks {low['tasks']} but policy {high['policy']!r} at tasks "
            f"{high['tasks']}; give runs with equal tasks."
        )
    return table[table["tasks"] == table["tasks"].max()]


@dataclass(frozen=True)
class Verdict:
    """The rule that the answer is about, with its rows of the answer table.

    Attributes
    ----------
    policy : str
        The rule in operation, or the best one.
    given : bool
        True when the rule was named by the user.
    worst : pandas.Series
        Its row with the highest headroom over all kinds of information.
    highest : pandas.Series
        Its row with the highest upper limit.
    best : str
        The rule whose headroom, in its worst information, is lowest.
    close : tuple of str
        Other rules whose limits overlap those of `best` wherever both were run.
    """

    policy: str
    given: bool
    worst: pd.Series
    highest: pd.Series
    best: str
    close: tuple[str, ...]


def judge(table: pd.DataFrame, policy: str = "") -> Verdict:
    """Find the rule that needs least headroom in the worst of the kinds of information.

    A reference that moves work already placed is none.

    Parameters
    ----------
    table : pandas.DataFrame
        The table of `answer_table`.
    policy : str
        The rule in operation; empty takes the best one.

    Raises
    ------
    InputError
        When `policy` is not in the table, or moves work already placed, or there are no other policies.
    """
    policies = [name for name in table["policy"].unique() if not moves_placed_work(name)]
    if not policies or (policy and moves_placed_work(policy)):
        raise InputError(
            f"policy is {policy or table['policy'].iloc[0]!r}, which moves work already placed, as no "
            "dispatcher can; name a placement rule."
        )
    table = table[table["policy"].isin(policies)]
    if policy and policy not in policies:
        raise InputError(f"policy is {policy!r}, which was not run; {nearest(policy, policies)}.")
    worst = table.groupby("policy", sort=False)["headroom"].max()
    best = str(worst.sort_values(kind="stable").index[0])
    taken = policy or best
    rows = table[table["policy"] == taken]
    close = tuple(name for name in policies if name != best and _overlap(table, best, name))
    by_headroom = rows.sort_values(["headroom", "upper"], kind="stable").iloc[-1]
    by_upper = rows.sort_values(["upper", "headroom"], kind="stable").iloc[-1]
    return Verdict(taken, bool(policy), by_headroom, by_upper, best, close)


def _overlap(table: pd.DataFrame, one: str, other: str) -> bool:
    both = pd.merge(table[table["policy"] == one], table[table["policy"] == other], on="information")
    return bool(
        len(both) and ((both["lower_x"] <= both["upper_y"]) & (both["lower_y"] <= both["upper_x"])).all()
    )


def check_max_headroom(verdict: Verdict, max_headroom: float | None) -> None:
    """Raise `HeadroomExceeded` when the upper limit of the headroom needed lies above `max_headroom`.

    Parameters
    ----------
    verdict : Verdict
        What `judge` found.
    max_headroom : float or None
        Highest headroom, in utilisation, that is still acceptable; None never raises.

    Raises
    ------
    HeadroomExceeded
        When the upper limit is higher.
    InputError
        When `max_headroom` is not a finite number of at least 0.
    """
    if max_headroom is None:
        return
    allowed = check_number("max_headroom", max_headroom)
    if allowed < 0:
        raise InputError(f"max_headroom is {max_headroom!r}; give a number of at least 0.")
    worst = verdict.highest
    if worst["upper"] > allowed:
        raise HeadroomExceeded(
            f"policy {verdict.policy!r} with information {worst['information']!r} needs headroom "
            f"{worst['headroom']:.4g} at risk {worst['risk']:g}; its upper {100 * worst['confidence']:g} % "
            f"limit {worst['upper']:.4g} is above max_headroom {allowed:g}, so add capacity, change the "
            "rule or the network, or allow more."
        )
