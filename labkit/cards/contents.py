"""What is shown of each kind of object: what it already holds, or what takes a glance; nothing is computed.

Objects are read by their attributes alone, since their rooms lie below this one.
"""

from collections.abc import Callable
from typing import Any

import numpy as np

from labkit.cards.fragment import ROWS, Card, Listing, names, number, span

_FEW = 5
# Replicates whose measures take no notable time to put into a table.
_MANY = 2_000
# The first columns of what a run measures at a checkpoint.
_MEASURED = ("mean_load", "max_load", "min_load", "max_utilisation")
MODEL = "A result of a model: local rules and the judgement of licensed practice come first."


def fleet(thing: Any) -> Card:
    """Return the card of a Fleet."""
    capacity = (1.0, 1.0) if thing.capacity is None else (thing.capacity.min(), thing.capacity.max())
    total = number(float(thing.total_capacity))
    facts: list[tuple[str, Any, str]] = [
        ("servers", int(thing.size), ""),
        ("capacity", span(*map(float, capacity)), f"work units; {total} in total"),
    ]
    shown = range(min(_FEW, thing.size))
    each = np.ones(_FEW) if thing.capacity is None else thing.capacity[:_FEW]
    rows = [(str(thing.names[at]), float(each[at])) for at in shown]
    listings = [Listing("Servers", ("server", "capacity"), rows, thing.size)]
    if thing.implicit is not None:
        law = thing.implicit
        kind = "different servers" if law.distinct else "servers, drawn with replacement"
        facts.append(("choices", f"any {law.options} {kind}", "all equally likely; never listed"))
        return Card("Fleet", facts, listings)
    count, most = thing.options.shape
    facts.append(("choices", int(count), f"of up to {most} options" if most > 2 else f"of {most} options"))
    if thing.demand is None:
        demand = f"{number(thing.equal_demand)} each"
        sum_of = float(count * thing.equal_demand)
    else:
        demand = span(float(thing.demand.min()), float(thing.demand.max()))
        sum_of = float(thing.demand.sum())
    facts.append(("demand", demand, f"of a choice; {number(sum_of)} in total"))
    listings.append(_choices(thing, count, most))
    return Card("Fleet", facts, listings)


def _choices(thing: Any, count: int, most: int) -> Listing:
    rows = []
    for at in range(min(_FEW, count)):
        # An option that is absent has the highest number of its kind, which no server has.
        options = [int(each) for each in thing.options[at]]
        named = [str(thing.names[each]) if 0 <= each < thing.size else "–" for each in options]
        demand = thing.equal_demand if thing.demand is None else thing.demand[at]
        rows.append((*named[: ROWS - 2], float(demand)))
    heads = [f"option {at + 1}" for at in range(min(most, ROWS - 2))]
    left_out = f", the first {ROWS - 2} of {most} options" if most > ROWS - 2 else ""
    return Listing(f"Choices{left_out}", (*heads, "demand"), rows, count)


def survey(thing: Any) -> Card:
    """Return the card of a Survey."""
    inside = thing._fair.bottleneck
    first = thing.fleet.names.take(inside[:ROWS]).tolist()
    facts: list[tuple[str, Any, str]] = [
        ("optimum", float(thing.optimum), "lowest highest utilisation (load ÷ capacity) of any split"),
        ("mean", float(thing.mean), "utilisation (load ÷ capacity) with the demand placed once"),
        ("optimum ÷ mean", _ratio(thing.optimum, thing.mean), "1: all servers can be equally full"),
        ("balanceable", bool(thing.balanceable), "whether some split fills all servers alike"),
        ("fair levels", len(thing._fair.level), "different levels of fair utilisation"),
        ("bottleneck", len(inside), f"servers, of {number(int(thing.fleet.size))}, that reach the optimum"),
    ]
    if not thing.balanceable:
        facts.append(("in it", names(first, len(inside)), "names of these servers"))
    facts.append(("proof", f"{float(thing.proof):.1e}", "how far two proofs of it are apart"))
    return Card("Survey: what any rule could reach at best", facts)


def outcome(thing: Any) -> Card:
    """Return the card of an Outcome."""
    replicates, servers = thing.loads.shape
    facts: list[tuple[str, Any, str]] = [
        ("rule", thing.policy, ""),
        ("load reports", thing.information, "what the rule could see"),
        ("fleet", int(servers), "servers"),
        ("replicates", int(replicates), "independent repetitions"),
        ("tasks", int(thing.tasks), f"placed in each; {thing.checkpoints.size:,} checkpoints"),
    ]
    if thing.measured.size:
        ending = dict(zip(_MEASURED, thing.measured[:, -1].T, strict=False))
        highest = ending["max_utilisation"]
        gap = highest - ending["mean_load"] * servers / thing.fleet.total_capacity
        rows = [
            (words, *(float(each) for each in np.quantile(values, (0.5, 0.9, 1.0))))
            for words, values in (("highest utilisation", highest), ("gap above the mean", gap))
        ]
        heads = ("utilisation (load ÷ capacity)", "median", "90 % of replicates within", "highest")
        listing = [Listing("After the last task", heads, rows)]
        return Card("Placed work", facts, listing, MODEL)
    return Card("Placed work", facts)


def service(thing: Any) -> Card:
    """Return the card of a ServiceOutcome."""
    facts: list[tuple[str, Any, str]] = [
        ("rule", thing.policy, ""),
        ("load reports", thing.information, "what the rule could see"),
        ("discipline", thing.discipline, f"work of a task: {thing.service}"),
        ("fleet", int(thing.fleet.size), "servers"),
        ("replicates", len(thing.results), "independent repetitions"),
        ("measured from", float(thing.origin + thing.warmup), f"units of time; {thing.warmup_found_by}"),
        ("to", float(thing.origin + thing.horizon), "units of time"),
    ]
    if np.isfinite(thing.load_factor):
        facts.insert(3, ("load factor", float(thing.load_factor), "arriving work ÷ capacity"))
    listings = []
    if 0 < len(thing.results) <= _MANY:
        table = thing.measures
        wanted = [name for name in _SERVED if name in table and np.isfinite(table[name].mean())]
        rows = [
            (_SERVED[name], float(table[name].mean()), float(table[name].min()), float(table[name].max()))
            for name in wanted
        ]
        heads = ("measure", "mean", "lowest", "highest")
        listings = [Listing("Over the replicates", heads, rows)]
    return Card("Served work", facts, listings, MODEL)


_SERVED = {
    "sojourn_mean": "mean sojourn, units of time",
    "sojourn_p99": "sojourn that 1 % of the tasks exceed, units of time",
    "queue_mean": "tasks on a server, mean",
    "utilisation": "share of the capacity in use",
    "max_utilisation": "highest load ÷ capacity",
    "late_share": "share of late tasks",
    "blocked_share": "share of blocked tasks",
}


def provision(thing: Any) -> Card:
    """Return the card of a Provision."""
    row = thing.table.iloc[0]
    limits = f"{100 * float(row['confidence']):g} % limits"
    facts: list[tuple[str, Any, str]] = [
        ("rule", row["policy"], ""),
        ("load reports", row["information"], "what the rule could see"),
        ("what must hold", row["criterion"], f"at a risk of {100 * float(row['risk']):g} % at most"),
        ("capacity", float(row["capacity"]), "work units in total that hold it"),
        ("factor", float(row["scale"]), "on the capacity of every server today"),
        (limits, f"{number(float(row['lower']))} to {number(float(row['upper']))}", "of the factor"),
    ]
    if np.isfinite(row["load_factor"]):
        facts.append(("load factor", float(row["load_factor"]), "arriving work ÷ this capacity"))
    facts.append(("runs", len(thing.curve), "capacities tried; 0: one run tells all"))
    return Card("Capacity that holds a risk down", facts, note=MODEL)


def growth(thing: Any) -> Card:
    """Return the card of a GrowthFit."""
    low, high = float(thing.sizes["x"].iloc[0]), float(thing.sizes["x"].iloc[-1])
    held = thing.held_out
    facts: list[tuple[str, Any, str]] = [
        ("measure", thing.y, f"against {thing.x}"),
        ("sizes", len(thing.sizes), f"{thing.x} from {number(low)} to {number(high)}"),
        ("misfit", float(thing.misfit), "1: at least one law agrees with the means within their errors"),
    ]
    if held.get("inside") is not None:
        between = f"{number(float(held['lower']))} to {number(float(held['upper']))}"
        said = f"{between} foretold for {thing.x} {number(float(held['x']))} from the smaller sizes"
        facts.append(("largest size", float(held["mean"]), f"measured; {said}"))
    rows = [(str(law), float(weight)) for law, weight in thing.weights.iloc[:ROWS].items()]
    means = [
        (float(x), int(count), float(mean), float(error))
        for x, count, mean, error in thing.sizes.iloc[:ROWS].itertuples(index=False)
    ]
    heads = (thing.x, "replicates", f"mean {thing.y}", "standard error")
    listings = [
        Listing("How far the sizes speak for each law", ("law", "weight"), rows, len(thing.weights)),
        Listing("What was measured", heads, means, len(thing.sizes)),
    ]
    return Card("Growth", facts, listings, MODEL)


def forecast(thing: Any) -> Card:
    """Return the card of a Forecast."""
    facts = [("rule", thing.policy, ""), ("fleet", int(thing.servers), "servers")]
    facts += [
        (str(row["fact"]).replace("_", " "), float(row["value"]), row["meaning"])
        for row in thing.table().to_dict("records")
    ]
    facts.append(("method", thing.method, "how it was forecast"))
    return Card("Forecast of the stationary state", facts, note=MODEL)


def plan(thing: Any) -> Card:
    """Return the card of a Plan."""
    header = thing.header
    facts = [
        ("rule", header["policy"]["name"], ""),
        ("servers", header["fleet"]["servers"], ""),
        ("choices", header["fleet"]["choices"], ""),
        ("digest", header["digest"], "SHA-256 of the whole plan"),
    ]
    rows = [(name, len(table), len(table.columns)) for name, table in thing.tables.items()]
    listing = Listing("Tables", ("file", "rows", "columns"), rows[:ROWS], len(rows))
    return Card("Plan for a dispatcher", facts, [listing])


def _ratio(one: float, other: float) -> float:
    return float(one) / float(other) if other else float("nan")


# Name of a class → what makes its card.
CARDS: dict[str, Callable[[Any], Card]] = {
    "Fleet": fleet,
    "Survey": survey,
    "Outcome": outcome,
    "ServiceOutcome": service,
    "Provision": provision,
    "GrowthFit": growth,
    "Forecast": forecast,
    "Plan": plan,
}
