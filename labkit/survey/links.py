"""Link advice: which added two-server choices lower the optimum most, and how much demand each must take."""

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from labkit.checks import check_whole
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.sharing.waiting import Waiting
from labkit.survey.demand import total_demand
from labkit.survey.fair import FairProfile, fair_profile, top_of_profile
from labkit.survey.link_candidates import Pool, read_candidates
from labkit.survey.link_reach import TIE, Relief
from labkit.survey.link_tables import add_table, check_listed, named, with_link
from labkit.survey.optimum import AGREEMENT
from labkit.survey.resistance import MOST_SERVERS, Resistances

# Servers up to which resistances are told for unbalanced fleets, where nothing depends on them.
_CHEAP = 500
_HALVINGS = 3
_COLUMNS = (
    *("step", "option_1", "option_2", "demand", "optimum_before", "optimum", "bottleneck_servers"),
    *("bottleneck", "resistance_before", "resistance", "taken_from"),
)


def advise_links(fleet: Fleet, candidates: Any = None, count: int = 5, *, distance: int = 2) -> pd.DataFrame:
    """Advise which links (new choices of two servers) to add, and how much demand each must take over.

    The total demand stays as it is: a link takes demand over from choices at its ends. What counts is the
    optimum, the lowest highest utilisation that any dispatch rule can reach.

    - While the optimum lies above the mean utilisation, each step adds the link that lowers it most. Choices
      of the link's end inside the bottleneck hand over demand. When the bottleneck consists of parts that no
      one link relieves together, a step that takes a part out of it counts as progress.
    - On a balanced fleet (optimum = mean) no link can lower it. Then each step adds the link that lowers the
      total effective resistance of the choice graph most, and with it the spread of loads that least-loaded
      dispatch leaves. The link takes over as much as a choice has on average, in proportion from the choices
      at both ends, but at most half of what these have, and less where the fleet would lose its balance.

    Parameters
    ----------
    fleet : Fleet
        Servers and a table of choices.
    candidates : pandas.DataFrame or sequence of pairs, optional
        The links that could be built: columns `option_1` and `option_2` (others are ignored), or pairs of
        server names. By default all pairs of servers that share no choice and are at most `distance` choices
        apart in the fleet given.
    count : int
        Most links to advise.
    distance : int
        Reach of the default candidates, at least 2: neighbours of neighbours.

    Returns
    -------
    pandas.DataFrame
        One row a step; fewer than `count`, possibly none, when no candidate makes progress:

        - step: 1, 2, ...; each step builds on the ones before.
        - option_1, option_2: the link. Where the optimum falls, `option_1` is the end inside the bottleneck.
        - demand: what it takes over, in the units of the fleet's demand. For the last link that lowers the
          optimum it is the least amount with which the optimum of its row is reached; earlier links take
          what the optimum at the end of the plan asks of them, which can be more than their own row needs.
        - optimum_before, optimum: before and after, utilisation when the demand is placed once.
        - bottleneck_servers, bottleneck: how many servers, and which, attain the optimum afterwards.
        - resistance_before, resistance: total effective resistance of the choice graph (a choice conducts as
          strongly as its demand) over all pairs of servers; infinite when some are not connected. While the
          optimum still falls it is told for connected fleets of at most 500 servers, else NaN.
        - taken_from: pairs (position in `fleet.choices`, counted from 0; amount). Links of earlier steps
          follow the fleet's own choices.

    Raises
    ------
    InputError
        When a candidate names no server, a server twice, or a choice that is there already, or stands twice;
        when there are too many default candidates (200,000 on a balanced fleet, else 5,000,000); when a
        balanced fleet has more than 4,000 servers; for a complete fleet; when demands and capacities are so
        far apart that double precision cannot prove the optimum.

    See Also
    --------
    add_links : The fleet with the links of this table.

    Notes
    -----
    Re-routing is a model: it assumes that any of the demand of a choice could physically use the new link.
    The table says where to look first, not what to build: whether a link is feasible, safe and allowed is for
    local rules and those licensed to decide.

    Each step is the best single one; several links chosen together may do better. A link's new optimum is
    exact (see `labkit.survey.link_reach`), and the fleet after each step is surveyed afresh. Ties go to the
    link that leaves the smaller bottleneck, then the one that can bring its part of the bottleneck lower,
    then table order (default candidates in order of servers).

    On balanced fleets the optimality of each step is exact by a low-rank update of the Laplacian's
    pseudo-inverse. A link between parts that were not connected comes before all others; among such, the one
    that connects more pairs of servers, then the one with less resistance over all pairs then connected. A
    plan that becomes balanced midway goes on so as far as the limits for balanced fleets allow.

    References
    ----------
    D. J. Klein and M. Randić, "Resistance distance", Journal of Mathematical Chemistry 12, 1993.

    Examples
    --------
    >>> import networkx as nx
    >>> import labkit as lk
    >>> graph = nx.Graph()
    >>> graph.add_weighted_edges_from(
    ...     [("north", "east", 6), ("east", "south", 1), ("south", "west", 1)], weight="demand"
    ... )
    >>> fleet = lk.fleet_from_graph(graph)
    >>> advice = lk.advise_links(fleet, count=1)
    >>> advice[["option_1", "option_2", "demand", "optimum_before", "optimum"]].values.tolist()
    [['east', 'west', 2.0, 3.0, 2.0]]
    >>> advice["taken_from"][0]
    ((0, 2.0),)
    >>> lk.survey(lk.add_links(fleet, advice)).optimum
    2.0
    """
    fleet = check_listed(fleet)
    count = check_whole("count", count)
    distance = check_whole("distance", distance, least=2)
    given = None if candidates is None else read_candidates(fleet, candidates)
    pool = Pool(fleet, given, distance)
    steps: list[_Step] = []
    if not _balanced(_proved(fleet)):
        steps = _relieve(fleet, pool, count)
    after = steps[-1].after if steps else fleet
    if len(steps) < count and _balanced(fair_profile(after)):
        try:
            steps += _connect(after, pool, count - len(steps))
        except InputError:
            if not steps:
                raise
    return _table(steps)


def add_links(fleet: Fleet, links: pd.DataFrame) -> Fleet:
    """Return the fleet with advised links added.

    Parameters
    ----------
    fleet : Fleet
        The fleet that the links were advised for.
    links : pandas.DataFrame
        The table of `advise_links`, or its first rows: `option_1`, `option_2`, `demand`, `taken_from`.

    Returns
    -------
    Fleet
        The fleet's own choices keep their places, less the demand that links took over, down to 0; the links
        follow in order. The total demand is the same.

    Raises
    ------
    InputError
        When a column is missing, a name is unknown, or a link takes more than there is, from a choice that
        has neither of its ends, or other than its demand in all.

    Examples
    --------
    >>> import labkit as lk
    >>> fleet = lk.ring(6)
    >>> wider = lk.add_links(fleet, lk.advise_links(fleet, count=2))
    >>> len(wider.choices), float(wider.choices["demand"].sum())
    (8, 6.0)
    """
    return add_table(check_listed(fleet), links)


@dataclass
class _Step:
    """One link: its ends by position, what it takes from which rows, and the fleets around it.

    `level` is the one to which the part of the bottleneck that it relieves came down.
    """

    one: int
    other: int
    rows: np.ndarray
    taken: np.ndarray
    before: Fleet
    after: Fleet
    level: float = math.nan
    resistance_before: float = math.nan
    resistance: float = math.nan


def _proved(fleet: Fleet) -> FairProfile:
    profile = fair_profile(fleet)
    if not abs(profile.agreement()) <= AGREEMENT:
        raise InputError(
            "fleet has demands and capacities so far apart that double precision cannot prove its optimum; "
            "leave out the smallest ones or survey a part of the fleet."
        )
    return profile


def _mean(fleet: Fleet) -> float:
    return total_demand(fleet) / fleet.total_capacity


def _balanced(profile: FairProfile) -> bool:
    return profile.optimum <= _mean(profile.fleet) * (1.0 + AGREEMENT)


def _relieve(fleet: Fleet, pool: Pool, count: int) -> list[_Step]:
    """Return the steps that lower the optimum.

    Where a set of servers elsewhere halts the fall, only the last link may stop there, too: an earlier one
    that did would leave its own part of the bottleneck to be relieved again. So the links are first chosen
    with each taking as much as it can use, and then given the least that the optimum in the end asks for.
    """
    steps: list[_Step] = []
    with Waiting("links chosen", count, "link") as waiting:
        while len(steps) < count and not _balanced(_proved(fleet)):
            most = np.inf if len(steps) + 1 == count else 0.0
            step = _relief(fleet, *pool.across(fair_profile(fleet).block == 0), most)
            if step is None:
                break
            pool.drop(step.one, step.other)
            steps.append(step)
            waiting.add()
            fleet = step.after
    if not steps or count == 1:
        return steps
    last, before = fair_profile(fleet), fair_profile(steps[-1].before)
    lowered = last.optimum < before.optimum * (1.0 - TIE)
    enough = float(last.level[0 if lowered or len(last.level) == 1 else 1])
    same = 0
    while same < len(steps) and steps[same].level >= enough * (1.0 - TIE):
        same += 1
    again = _with_least(steps[same:], enough)
    return steps if again is None else steps[:same] + again


def _with_least(steps: list[_Step], enough: float) -> list[_Step] | None:
    """Return the same links with their parts brought down only to the level `enough`, if that will do."""
    again: list[_Step] = []
    for step in steps:
        fleet = again[-1].after if again else step.before
        inside = fair_profile(fleet).block == 0
        if not inside[step.one] or inside[step.other]:
            return None
        found = _relief(fleet, np.array([step.one], np.int32), np.array([step.other], np.int32), enough)
        if found is None or fair_profile(found.after).optimum > fair_profile(step.after).optimum * (
            1.0 + AGREEMENT
        ):
            return None
        again.append(found)
    return again


def _relief(fleet: Fleet, inner: np.ndarray, outer: np.ndarray, enough: float) -> _Step | None:
    """Return the best step among pairs with one end in the bottleneck, or None when none makes progress.

    The part of the bottleneck that the link relieves comes down as far as the link can bring it, but not
    below the lower of the level `enough` and the next level elsewhere.
    """
    if len(inner) == 0:
        return None
    profile = fair_profile(fleet)
    relief = Relief(profile)
    found = relief.best(inner, outer)
    if found is None:
        return None
    one, other = int(inner[found.pair]), int(outer[found.pair])
    following = float(profile.level[1])
    level = max(found.level, min(enough, following))
    members = found.members
    if found.optimum < following * (1.0 - TIE):
        level, members = found.optimum, relief.above(found.optimum)
    rows, taken = relief.reroute(one, other, members, level)
    after = with_link(fleet, one, other, rows, taken)
    optimum = _proved(after).optimum
    # What is left of a demand after re-routing is known only to the last places of the whole.
    if not math.isclose(optimum, found.optimum, rel_tol=AGREEMENT, abs_tol=1e-13 * profile.optimum):
        raise InputError(
            f"fleet has demands and capacities so far apart that a link between "
            f"{named(fleet, one, other)} gives an optimum of {optimum:.12g} one way and {found.optimum:.12g} "
            "another; leave out the smallest ones or survey a part of the fleet."
        )
    return _Step(one, other, rows, taken, fleet, after, level)


def _connect(fleet: Fleet, pool: Pool, count: int) -> list[_Step]:
    """Return the steps that lower the total effective resistance of a balanced fleet."""
    if fleet.size > MOST_SERVERS:
        raise InputError(
            f"fleet is balanced (its optimum is its mean) and has {fleet.size:,} servers; links for balanced "
            f"fleets are ranked by effective resistance, for at most {MOST_SERVERS:,} servers, so give a "
            "part of the fleet."
        )
    steps: list[_Step] = []
    first, second = pool.all()
    present = Resistances(fleet)
    with Waiting("links chosen", count, "link") as waiting:
        while len(steps) < count and len(first):
            step = _best_connection(fleet, present, first, second)
            if step is None:
                break
            pool.drop(step.one, step.other)
            stays = ~((first == step.one) & (second == step.other))
            first, second = first[stays], second[stays]
            following = Resistances(step.after)
            step.resistance_before, step.resistance = present.total, following.total
            steps.append(step)
            waiting.add()
            fleet, present = step.after, following
    return steps


def _best_connection(
    fleet: Fleet, present: Resistances, first: np.ndarray, second: np.ndarray
) -> _Step | None:
    scale = np.ones(len(first))
    amount, joined, finite = present.after(first, second, scale)
    while True:
        open_pairs = (joined > 0.0) | (finite < present.finite * (1.0 - TIE))
        if not open_pairs.any():
            return None
        most = joined[open_pairs].max()
        leading = open_pairs & (joined == most)
        least = finite[leading].min()
        # Rounding is relative to what is taken away from the whole.
        leading &= finite <= least + 1e-9 * abs(present.finite - least)
        pair = int(np.argmax(leading))
        one, other = int(first[pair]), int(second[pair])
        rows, taken = _shares(present, one, other, float(amount[pair]))
        after = with_link(fleet, one, other, rows, taken)
        if _balanced(top_of_profile(after)):
            return _Step(one, other, rows, taken, fleet, after)
        scale[pair] /= 2.0
        if scale[pair] < 0.5**_HALVINGS:
            joined[pair], finite[pair] = 0.0, np.inf
        else:
            only = slice(pair, pair + 1)
            amount[only], joined[only], finite[only] = present.after(first[only], second[only], scale[only])


def _shares(present: Resistances, one: int, other: int, amount: float) -> tuple[np.ndarray, np.ndarray]:
    """Return the choices at two ends and what each hands over, in proportion to its demand."""
    servers, demand = present.split.servers, present.split.demand
    rows = np.flatnonzero((servers == one).any(axis=1) | (servers == other).any(axis=1))
    rows = rows[demand[rows] > 0]
    return rows, demand[rows] * (amount / math.fsum(demand[rows]))


def _resistance(fleet: Fleet) -> float:
    """Return the total effective resistance of a connected fleet of few servers, else NaN."""
    if fleet.size > _CHEAP:
        return math.nan
    try:
        present = Resistances(fleet)
    except InputError:
        return math.nan
    return present.finite if present.parts == 1 else math.nan


def _table(steps: Iterable[_Step]) -> pd.DataFrame:
    rows = []
    for number, step in enumerate(steps, 1):
        if math.isnan(step.resistance):
            step.resistance_before, step.resistance = _resistance(step.before), _resistance(step.after)
        names, profile = step.before.names, fair_profile(step.after)
        bottleneck = tuple(names.take(profile.bottleneck).tolist())
        taken_from = tuple(zip(step.rows.tolist(), step.taken.tolist(), strict=True))
        rows.append(
            (
                *(number, names[step.one], names[step.other], math.fsum(step.taken)),
                *(fair_profile(step.before).optimum, profile.optimum, len(bottleneck), bottleneck),
                *(step.resistance_before, step.resistance, taken_from),
            )
        )
    table = pd.DataFrame(rows, columns=list(_COLUMNS))
    if not rows:
        table = table.astype({"step": np.int64, "bottleneck_servers": np.int64})
        real = ["demand", "optimum_before", "optimum", "resistance_before", "resistance"]
        table[real] = table[real].astype(np.float64)
    return table
