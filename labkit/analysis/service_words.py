"""What serving and replaying found, as tables and sentences for a page."""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from labkit.analysis.wording import percent, quantity
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.policies.naming import parse_policy, shown_name
from labkit.policies.one_choice import OneChoice
from labkit.stationary.warm_up import drift_check
from labkit.survey.stability import bottleneck_words, even_split_limit, stability_limit
from labkit.traces.facts import TraceFacts

# Measure -> words, where {unit} is the unit of time.
MEASURES = {
    "sojourn_mean": "mean sojourn, {unit}",
    "sojourn_p50": "sojourn that half of the tasks exceed, {unit}",
    "sojourn_p90": "sojourn that 10 % of the tasks exceed, {unit}",
    "sojourn_p99": "sojourn that 1 % of the tasks exceed, {unit}",
    "waiting_mean": "mean waiting time, {unit}",
    "queue_mean": "mean number of tasks on a server",
    "max_load": "most tasks on any server",
    "max_utilisation": "highest load ÷ capacity of any server",
    "late_share": "share of tasks beyond the target",
    "blocked_share": "share of tasks blocked",
}


def measure_words(measure: str, unit: str) -> str:
    """Return a measure in words, with its unit."""
    return MEASURES.get(measure, measure).format(unit=unit)


def stability_words(fleet: Fleet, policies: Iterable[Any], *, sessions: bool = False) -> str:
    """Return, in Markdown, which load factors the fleet and each rule can serve at all.

    Parameters
    ----------
    fleet : Fleet
    policies : iterable of Policy or str
        The rules that are to be run.
    sessions : bool
        Tasks do not queue, so that any load can be carried.
    """
    limit, which = stability_limit(fleet), bottleneck_words(fleet, 9)
    if which == "all servers":
        reason = "all servers fill alike, so the network costs nothing"
    else:
        reason = f"from there on more work is confined to {which} than they can do, whatever the rule"
    choices = "each pair a choice" if fleet.implicit is not None else f"{len(fleet.options):,} choices"
    lines = [
        f"- **Fleet**: {len(fleet):,} servers, together {quantity(fleet.total_capacity)} units of capacity; "
        f"{choices}.",
        f"- **Stability limit**: a load factor of {limit:.4g}; {reason}.",
    ]
    if sessions:
        return (
            f"{lines[0]}\n- **Sessions** do not queue: any load can be carried, and what counts is how often "
            "a server holds more than its capacity."
        )
    if any(isinstance(parse_policy(policy), OneChoice) for policy in policies):
        own, fullest = even_split_limit(fleet)
        if own < limit:
            lines.append(
                f"- **one-choice** looks at nothing and overloads {fleet.names[fullest]!r} from {own:.4g} on."
            )
    return "\n".join(lines)


def with_limits(estimate: float, lower: float, upper: float) -> str:
    """Return a number with its limits, rounded to what the limits leave certain."""
    if not np.isfinite([estimate, lower, upper]).all():
        return "–"
    size = max(abs(estimate), abs(lower), abs(upper))
    if size == 0:
        return "0"
    half = max((upper - lower) / 2, 1e-4 * size)
    decimals = max(0, int(np.ceil(-np.log10(half))) + (half < 10))
    between = "to" if lower < 0 else "–"
    text = f"{estimate:z,.{decimals}f} ({lower:z,.{decimals}f} {between} {upper:z,.{decimals}f})"
    return text.replace("-", "−")


def limits_by(
    limits: pd.DataFrame, across: str, order: Sequence[Any] = (), title: str = "rule"
) -> pd.DataFrame:
    """Return rows of `labkit.service_limits` of one measure as text: a row a load, a column a rule.

    Parameters
    ----------
    limits : pandas.DataFrame
        Rows with policy, `across`, estimate, lower, upper; one row a pair.
    across : str
        The column that makes the rows.
    order : sequence of str
        Rules in the order of the columns; others follow.
    title : str
        What stands above the rows.
    """
    text = [with_limits(*values) for values in limits[["estimate", "lower", "upper"]].itertuples(index=False)]
    table = limits[["policy", across]].assign(text=text)
    wide = table.pivot(index=across, columns="policy", values="text")
    first = [name for name in dict.fromkeys(order) if name in wide.columns]
    wide = wide[[*first, *(name for name in wide.columns if name not in first)]]
    wide = wide.rename(columns=shown_name, index=lambda value: f"{value:g}")
    return wide.rename_axis(index=across.replace("_", " "), columns=title)


def tasks_over_time(by_interval: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    """Return the mean number of tasks in the fleet, one row a replicate, and the middles of the intervals.

    Parameters
    ----------
    by_interval : pandas.DataFrame
        Of one outcome of `labkit.serve`.
    """
    table = by_interval.assign(number=by_interval["area"] / (by_interval["end"] - by_interval["start"]))
    wide = table.pivot(index="replicate", columns="interval", values="number")
    one = table[table["replicate"] == table["replicate"].iloc[0]].sort_values("interval")
    return wide.to_numpy(), ((one["start"] + one["end"]) / 2).to_numpy()


def steady_row(outcome: Any) -> dict[str, Any]:
    """Return whether the number of tasks still drifts within the window of one outcome of `labkit.serve`."""
    drift = drift_check(tasks_over_time(outcome.by_interval)[0], name="the number of tasks")
    return {
        "rule": shown_name(outcome.policy),
        "load factor": outcome.load_factor,
        "tasks in the fleet, first half": drift.first_half,
        "second half": drift.second_half,
        "p of a drift by chance": drift.p_value,
    }


def steady_words(steady: pd.DataFrame, level: float = 0.05) -> str:
    """Return in a sentence what `steady_row` says of several runs, which share the level."""
    each = level / len(steady)
    moving = steady[steady["p of a drift by chance"] < each]
    if moving.empty:
        least = steady["p of a drift by chance"].min()
        return (
            f"None of the {len(steady)} sets of runs drifts: the least p is {least:.3f}, and an alarm is "
            f"below {each:.4f} (together {100 * level:g} %)."
        )
    where = "; ".join(f"{row['rule']} at {row['load factor']:g}" for _, row in moving.iterrows())
    return (
        f"**Still drifting**: {where}. Their numbers describe the start of a run, not its long run; give a "
        "longer horizon."
    )


def provision_page(provisions: Sequence[Any], fleet: Fleet) -> pd.DataFrame:
    """Return what `labkit.serve_headroom` or `labkit.replay_headroom` found, one row a rule, as text.

    Parameters
    ----------
    provisions : sequence of Provision
    fleet : Fleet
        At the capacities as they are.
    """
    rows = []
    for provision in provisions:
        row = provision.table.iloc[0]
        rows.append(
            {
                "rule": shown_name(row["policy"]),
                "capacity × today's": f"{row['scale']:.3f}",
                f"{100 * row['confidence']:g} % limits": f"{row['lower']:.3f} – {row['upper']:.3f}",
                "total capacity": quantity(row["scale"] * fleet.total_capacity),
                "more than today": quantity((row["scale"] - 1) * fleet.total_capacity),
            }
        )
    return pd.DataFrame(rows).set_index("rule")


def failure_page(measures: pd.DataFrame, unit: str) -> pd.DataFrame:
    """Return means over replicates, with failures and without, one row a rule and kind of failures.

    Parameters
    ----------
    measures : pandas.DataFrame
        Rows of ``outcome.measures`` with a column `failures`, "none" among them.
    unit : str
        The unit of time.
    """
    if "none" not in set(measures["failures"]):
        raise InputError("measures has no rows without failures; add them with failures 'none'.")
    counted = measures.assign(
        failures=measures["failures"].where(measures["failures"] == "none", "as given"),
        lost=100 * measures["lost"] / measures["arrivals"],
        moved=100 * measures["requeued"] / measures["arrivals"],
        held=100 * measures["waited"] / measures["arrivals"],
    )
    columns = ["sojourn_mean", "sojourn_p99", "max_load", "lost", "moved", "held"]
    means = counted.groupby(["policy", "failures"], sort=True)[columns].mean()
    means.columns = pd.Index(
        [
            f"mean sojourn, {unit}",
            f"1 % exceed, {unit}",
            "most tasks on a server",
            "lost, %",
            "moved, %",
            "held up, %",
        ]
    )
    means.index = means.index.set_names(["rule", "failures"])
    return means.rename(index=shown_name, level=0).round(2)


def trace_words(facts: TraceFacts, fleet: Fleet, *, unit: str, day: float) -> str:
    """Return in Markdown what a trace holds.

    Parameters
    ----------
    facts : TraceFacts
    fleet : Fleet
    unit : str
        The unit of time.
    day : float
        Length of a day in it.
    """
    mean = facts.work / facts.span / fleet.total_capacity if facts.span else np.nan
    days = facts.span / day
    lines = {
        "Tasks": f"{facts.tasks:,} over {quantity(facts.span)} {unit}, {days:.1f} days of {day:g}",
        "Size and duration": f"in the mean {quantity(facts.mean_size)} work units and "
        f"{quantity(facts.mean_duration)} {unit}; the longest task lasts {quantity(facts.longest)} {unit}",
        "At the same time as the task before": f"{percent(100 * facts.tied / facts.tasks)} % of the tasks",
        "Servers": f"{facts.used:,} of {len(fleet):,} are an option of some task",
        "Work in the fleet": f"{percent(100 * mean)} % of its capacity in the mean",
    }
    return "\n".join(f"- **{what}**: {value}" for what, value in lines.items())


def replay_page(
    measures: pd.DataFrame, by_interval: pd.DataFrame, *, unit: str, sessions: bool
) -> pd.DataFrame:
    """Return what each rule did with a trace, one row a rule, means over replicates.

    Parameters
    ----------
    measures, by_interval : pandas.DataFrame
        Of outcomes of `labkit.replay`, put together.
    unit : str
        The unit of time.
    sessions : bool
        Whether durations are times; else they are work that queues.
    """
    means = measures.groupby("policy", sort=False)[
        ["max_utilisation", "max_load", "utilisation", "sojourn_mean", "sojourn_p99", "blocked_share"]
    ].mean()
    beyond = by_interval.assign(beyond=by_interval["max_utilisation"] > 1)
    blocks = by_interval["interval"].nunique()
    columns = {"highest load": means["max_load"].round(1)}
    if sessions:
        columns |= {
            "highest load ÷ capacity": means["max_utilisation"].round(3),
            f"blocks beyond capacity, of {blocks}": beyond.groupby("policy")["beyond"]
            .mean()
            .mul(blocks)
            .round(1),
        }
    else:
        columns |= {
            "utilisation": means["utilisation"].round(3),
            f"mean sojourn, {unit}": means["sojourn_mean"].round(3),
            f"1 % exceed, {unit}": means["sojourn_p99"].round(3),
        }
    table = pd.DataFrame(columns).loc[means.index]
    return table.rename(index=shown_name).rename_axis("rule")


def bands_page(levels: pd.DataFrame, against: pd.DataFrame | None, baseline: str) -> pd.DataFrame:
    """Return bands of `labkit.block_bootstrap` as text, one row a rule: levels and differences.

    Parameters
    ----------
    levels, against : pandas.DataFrame
        Of one or several measures, without and with the baseline; None where there is one rule only.
    baseline : str
        The policy that the others are compared with.
    """
    words = {
        "max_utilisation": "mean over blocks of the highest load ÷ capacity",
        "overload_share": "share of blocks beyond capacity",
        "late_share": "share of late tasks",
        "sojourn_mean": "mean sojourn",
    }
    tables = {}
    for of, rows in levels.groupby("of", sort=False):
        columns = {f"{100 * rows['confidence'].iloc[0]:g} % band": _texts(_possible(rows))}
        if against is not None:
            columns[f"less that of {shown_name(baseline)}"] = _texts(against[against["of"] == of])
        tables[words[str(of)]] = pd.DataFrame(columns)
    table = pd.concat(tables, axis=1).fillna("–")
    return table.rename(index=shown_name).rename_axis("rule")


def _possible(rows: pd.DataFrame) -> pd.DataFrame:
    """Return the rows with bands of shares cut off at 0 and 1."""
    if not str(rows["of"].iloc[0]).endswith("_share"):
        return rows
    return rows.assign(lower=rows["lower"].clip(0, 1), upper=rows["upper"].clip(0, 1))


def _texts(rows: pd.DataFrame) -> pd.Series:
    numbers = rows[["estimate", "lower", "upper"]].itertuples(index=False)
    return pd.Series([with_limits(*values) for values in numbers], index=rows["policy"].to_numpy())


def warm_up_words(ends: Mapping[str, float], unit: str) -> str:
    """Return where MSER-5 would begin to measure under each rule; nothing where it was not asked."""
    if not ends:
        return ""
    each = ", ".join(f"{shown_name(policy)} {end:,.4g}" for policy, end in ends.items())
    return f"MSER-5 begins to measure at ({unit}): {each}. "
