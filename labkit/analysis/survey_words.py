"""The survey in words and in tables of text: what a reader gets, and what a record keeps."""

import textwrap
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import pandas as pd

from labkit.analysis.balance import in_words
from labkit.analysis.wording import percent, quantity, utilisation, writer
from labkit.fleet.model import Fleet
from labkit.survey.facts import Survey
from labkit.text import short

# Facts that come out of linear algebra, whose last digits differ between processors; a record keeps these.
_INEXACT = ("algebraic_connectivity", "resistance", "resistance_before")
_DIGITS = 8
SHOWN = 10


def best_in_words(best: Survey) -> str:
    """Return what any placement rule could reach at best on a fleet, and why not better."""
    if best.balanceable:
        return (
            f"The fleet is balanceable: some split of the demand fills all {best.fleet.size:,} servers "
            "alike. Whatever a rule leaves above the mean is its own."
        )
    facts: dict[str, Any] = dict(best.table()[["fact", "value"]].to_numpy().tolist())
    return (
        f"No rule can keep the fullest server, on average, below {_times(facts['optimum_over_mean'])} the "
        f"mean utilisation: {percent(100 * facts['bottleneck_demand_share'])} % of the demand can go only to "
        f"{in_words(best.bottleneck)}, with {percent(100 * facts['bottleneck_capacity_share'])} % of the "
        f"capacity. With the demand placed once that is a utilisation of {utilisation(best.optimum)} against "
        f"a mean of {utilisation(best.mean)}; for other amounts of work both grow in proportion."
    )


def outages_in_words(lost: pd.DataFrame, best: Survey) -> str:
    """Return what the loss of one server, or of a pair, does to the optimum.

    Parameters
    ----------
    lost : pandas.DataFrame
        The table of `labkit.outages`.
    best : Survey
        Of the whole fleet.
    """
    worst = lost.sort_values("optimum", ascending=False, kind="stable").iloc[0]
    write = writer(abs(worst["extra_headroom"]), worst["optimum"])
    what = "pair" if "second" in lost else "server"
    who = f"{worst['server']} and {worst['second']}" if what == "pair" else str(worst["server"])
    equal = int((lost["optimum"] >= worst["optimum"] * (1 - 1e-9)).sum())
    costs = f"{equal:,} losses cost most, that of {who} among them"
    if equal == 1:
        costs = f"The {what} whose loss costs most is {who}"
    sentences = [
        f"{costs}: the optimum rises from {write(best.optimum)} to "
        f"{write(worst['optimum'])}, {_times(worst['optimum'] / best.optimum)} what it was."
    ]
    harmless = int((lost["extra_headroom"] <= 1e-9 * best.optimum).sum())
    verb = "does" if harmless == 1 else "do"
    kept = (
        f"{harmless:,} of the {len(lost):,} losses {verb} not raise it"
        if harmless
        else "every loss raises it"
    )
    shown = f"; the table shows the worst {SHOWN}, outages.csv all" if len(lost) > SHOWN else ""
    sentences.append(f"{kept[0].upper()}{kept[1:]}{shown}.")
    stranded = lost[lost["unplaced"] > 0]
    if len(stranded):
        most = stranded["unplaced"].max()
        sentences.append(
            f"{len(stranded):,} leave demand without any place, up to {quantity(most)} work units."
        )
    return " ".join(sentences)


def links_in_words(links: pd.DataFrame, best: Survey, distance: int) -> str:
    """Return what the advised links achieve (the table of `labkit.advise_links` at this distance)."""
    if not len(links):
        apart = f"No link between servers at most {distance} choices apart lowers the optimum"
        return f"{apart}; other pairs can be given to lk.advise_links as candidates."
    last = links.iloc[-1]
    count, verb = (f"{len(links)} links", "lower") if len(links) > 1 else ("link", "lowers")
    if last["optimum"] < best.optimum * (1 - 1e-9):
        share = percent(100 * links["demand"].sum() / (best.mean * best.fleet.total_capacity))
        write = writer(best.optimum)
        before, after = write(best.optimum), write(last["optimum"])
        if before == after:
            return (
                f"The {count} below, with {share} % of all demand re-routed, {verb} the optimum, {before}, "
                f"by less than the digits shown; the mean is {utilisation(best.mean)}."
            )
        return (
            f"The {count} below, with {share} % of all demand re-routed, {verb} the optimum from {before} to "
            f"{after}; the mean is {utilisation(best.mean)}.{_unseen(links, write)}"
        )
    if best.balanceable:
        return (
            f"The optimum cannot fall. The {count} below tie the fleet closer together: the total effective "
            f"resistance, which the spread of loads under least-loaded follows, falls from "
            f"{links['resistance_before'].iloc[0]:,.4g} to {last['resistance']:,.4g}."
        )
    return f"The {count} below make the bottleneck smaller, but do not lower the optimum yet."


def _unseen(links: pd.DataFrame, write: Callable[[float], str]) -> str:
    """Return a sentence about the steps whose effect the digits shown do not tell."""
    pairs = zip(links["step"], links["optimum_before"], links["optimum"], strict=True)
    steps = [str(step) for step, before, after in pairs if write(before) == write(after)]
    if not steps:
        return ""
    which = (
        f"Step {steps[0]} has" if len(steps) == 1 else f"Steps {', '.join(steps[:-1])} and {steps[-1]} have"
    )
    return f" {which} no visible effect on it."


def fact_rows(best: Survey) -> pd.DataFrame:
    """Return the facts as text, one row a fact with its meaning, for a page."""
    table = best.table()
    shown = [_value(fact, value) for fact, value in zip(table["fact"], table["value"], strict=True)]
    words = table["fact"].str.replace("_", " ")
    return pd.DataFrame({"value": shown, "meaning": table["meaning"]}).set_index(pd.Index(words, name="fact"))


def outage_rows(lost: pd.DataFrame, most: int = SHOWN) -> pd.DataFrame:
    """Return the outages that cost most as text, for a page."""
    worst = lost.sort_values(["optimum", "unplaced"], ascending=False, kind="stable").head(most)
    write = writer(worst["optimum"].max() if len(worst) else 1.0)
    rows = [
        {
            "lost": " + ".join(short(row[name]) for name in ("server", "second") if name in worst),
            "optimum then": write(row["optimum"]),
            "extra headroom": write(row["extra_headroom"]),
            "mean then": write(row["mean"]),
            "demand with no place": quantity(row["unplaced"]),
            "bottleneck then": _names(row.get("bottleneck", ()), row["bottleneck_servers"]),
        }
        for _, row in worst.iterrows()
    ]
    return pd.DataFrame(rows).set_index("lost") if rows else pd.DataFrame()


def fullest_rows(best: Survey, most: int = SHOWN) -> pd.DataFrame:
    """Return the servers with the highest fair utilisation as text, for a page."""
    rows = best.profile.sort_values("fair_utilisation", ascending=False, kind="stable").head(most)
    write = writer(best.optimum)
    found = {
        "capacity": rows["capacity"].map(quantity),
        "fair load": rows["fair_load"].map(quantity),
        "fair utilisation": rows["fair_utilisation"].map(write),
        "level": rows["level"].astype(str),
        "bottleneck": rows["bottleneck"].map({True: "yes", False: "no"}),
    }
    named = pd.Index(rows["server"].map(short), name="fullest servers")
    return pd.DataFrame(found).set_index(named)


def rerouted_table(fleet: Fleet, links: pd.DataFrame) -> pd.DataFrame:
    """Return which choices the advised links take their demand from, one row a link and choice.

    Parameters
    ----------
    fleet : Fleet
        The fleet without the links.
    links : pandas.DataFrame
        The table of `labkit.advise_links`.

    Returns
    -------
    pandas.DataFrame
        step, link_1 and link_2 (the ends of the link), option_1, option_2, ... (the choice that the demand
        comes from; it may be an earlier link), amount in work units.
    """
    choices = fleet.choices.drop(columns="demand")
    rows = []
    for row in links.to_dict("records"):
        for place, amount in row["taken_from"]:
            if place < len(choices):
                options = choices.iloc[place].to_dict()
            else:
                earlier = links.iloc[place - len(choices)]
                options = {name: earlier[name] for name in ("option_1", "option_2")}
            ends = {"step": row["step"], "link_1": row["option_1"], "link_2": row["option_2"]}
            rows.append({**ends, **options, "amount": amount})
    order = ["step", "link_1", "link_2", *choices.columns, "amount"]
    return pd.DataFrame(rows).reindex(columns=order)


def rerouted_rows(fleet: Fleet, links: pd.DataFrame, most: int = 2 * SHOWN) -> pd.DataFrame:
    """Return the largest amounts to re-route as text, for a page."""
    table = rerouted_table(fleet, links)
    table = table.sort_values(["step", "amount"], ascending=[True, False], kind="stable").head(most)
    options = [name for name in table if str(name).startswith("option_")]
    rows = [
        {
            "step": row["step"],
            "move to": f"{short(row['link_1'])} – {short(row['link_2'])}",
            "demand": quantity(row["amount"]),
            "of choice": " – ".join(short(row[name]) for name in options if row[name] == row[name]),
        }
        for row in table.astype(object).to_dict("records")
    ]
    return pd.DataFrame(rows).set_index("step")


def link_rows(links: pd.DataFrame) -> pd.DataFrame:
    """Return the advised links as text, for a page."""
    rows = []
    for _, row in links.iterrows():
        write = writer(row["optimum_before"])
        rows.append(
            {
                "step": row["step"],
                "link": f"{short(row['option_1'])} – {short(row['option_2'])}",
                "demand re-routed": quantity(row["demand"]),
                "optimum": f"{write(row['optimum_before'])} → {write(row['optimum'])}",
                "bottleneck then": _names(row["bottleneck"], row["bottleneck_servers"]),
                **(
                    {"total resistance": f"{row['resistance_before']:,.4g} → {row['resistance']:,.4g}"}
                    if np.isfinite(row["resistance"])
                    else {}
                ),
            }
        )
    return pd.DataFrame(rows).set_index("step") if rows else pd.DataFrame()


def survey_text(
    best: Survey,
    lost: pd.DataFrame | None,
    links: pd.DataFrame | None,
    *,
    run: str,
    distance: int,
    notes: Sequence[str] = (),
) -> str:
    """Return what the command line prints.

    Parameters
    ----------
    best : Survey
    lost, links : pandas.DataFrame or None
        Tables of `labkit.outages` and `labkit.advise_links`; None leaves the part out.
    run : str
        Id of the run.
    distance : int
        What `links` were limited to.
    notes : sequence of str
        What was left out, and why.
    """
    parts = [textwrap.fill(best_in_words(best), 110), _aligned(fact_rows(best)[["value"]])]
    parts.append(_aligned(fullest_rows(best)))
    if lost is not None and len(lost):
        parts += [textwrap.fill(outages_in_words(lost, best), 110), _aligned(outage_rows(lost))]
    if links is not None:
        parts.append(textwrap.fill(links_in_words(links, best, distance), 110))
        if len(links):
            parts += [_aligned(link_rows(links)), _aligned(rerouted_rows(best.fleet, links))]
    parts += [f"note: {note}" for note in notes]
    parts.append(f"run: {run} (labkit rerun RUN repeats it to the bit)")
    return "\n\n".join(parts)


def survey_record(best: Survey, lost: pd.DataFrame | None, links: pd.DataFrame | None) -> pd.DataFrame:
    """Return the survey as one long table of numbers, for a record.

    Parameters
    ----------
    best, lost, links
        As in `survey_text`.

    Returns
    -------
    pandas.DataFrame
        One row a number: `part` ("fleet", "server", "outage" or "link"), `subject` (the server, the servers
        lost, the link with its step before it), `measure`, `value`.
    """
    facts = best.table()
    plain = [not isinstance(value, tuple) for value in facts["value"]]
    parts = [_long("fleet", [""], pd.DataFrame([dict(facts[plain][["fact", "value"]].to_numpy().tolist())]))]
    profile = best.profile
    parts.append(_long("server", profile["server"], profile[["fair_utilisation", "level"]]))
    if lost is not None and len(lost):
        names = lost["server"].astype(str)
        if "second" in lost:
            names += " + " + lost["second"].astype(str)
        columns = ["optimum", "extra_headroom", "mean", "unplaced", "bottleneck_servers"]
        parts.append(_long("outage", names, lost[columns]))
    if links is not None and len(links):
        steps = [f"{row.step}: {row.option_1} - {row.option_2}" for row in links.itertuples()]
        columns = ["demand", "optimum", "bottleneck_servers", "resistance"]
        parts.append(_long("link", steps, links[columns]))
    return pd.concat(parts, ignore_index=True)


def _long(part: str, subjects: Any, values: pd.DataFrame) -> pd.DataFrame:
    numbers = values.astype(np.float64)
    for name in _INEXACT:
        if name in numbers:
            numbers[name] = [float(f"{value:.{_DIGITS}g}") for value in numbers[name]]
    count, measures = numbers.shape
    return pd.DataFrame(
        {
            "part": part,
            "subject": np.repeat([str(each) for each in subjects], measures),
            "measure": np.tile([str(name) for name in numbers.columns], count),
            "value": numbers.to_numpy().ravel(),
        }
    )


def _aligned(table: pd.DataFrame) -> str:
    rows = [[str(table.index.name), *map(str, table.columns)]]
    rows += [[str(label), *map(str, row)] for label, row in zip(table.index, table.to_numpy(), strict=True)]
    widths = [max(len(cell) for cell in column) for column in zip(*rows, strict=True)]
    rows.insert(1, ["-" * width for width in widths])
    return "\n".join(
        "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
    )


def _times(ratio: float) -> str:
    return f"{ratio:,.4g} times"


def _value(fact: str, value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, tuple):
        return _names(value, len(value))
    if fact.endswith("_share"):
        return f"{percent(100 * value)} %"
    if fact == "proof":
        return f"{abs(value):.0e}" if value else "0"
    if fact in ("mean", "optimum"):
        return utilisation(value)
    if fact == "optimum_over_mean":
        return f"{value:,.6g}"
    return f"{value:,}" if isinstance(value, int) else quantity(value)


def _names(names: Sequence[Any], count: int) -> str:
    first = [short(name) for name in names[:3]]
    left = count - len(first)
    more = f"{left:,} more" if first else f"{left:,} servers"
    return ", ".join([*first, *([more] if left > 0 else [])]) or "none"
