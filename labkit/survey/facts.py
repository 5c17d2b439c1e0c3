"""The survey: what is known about a fleet exactly, before anything is simulated."""

from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd

from labkit.cards.shown import Shown
from labkit.compiled import kept
from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet, check_fleet
from labkit.survey.connectivity import algebraic_connectivity, components, weakest_cut
from labkit.survey.demand import as_float, choices_of_law, total_demand
from labkit.survey.fair import FairProfile, fair_profile
from labkit.survey.optimum import AGREEMENT

# What each fact of the table means, in the order of its rows.
MEANINGS = {
    "servers": "servers of the fleet",
    "choices": "choices, those without demand included",
    "total_demand": "sum of all demands, taken as amounts of work",
    "total_capacity": "sum of all capacities, in work units",
    "mean": "mean utilisation when the demand is placed once: total demand ÷ total capacity",
    "optimum": "lowest highest-utilisation that any split of the demand can reach",
    "optimum_over_mean": "optimum ÷ mean; 1 when the fleet is balanceable",
    "balanceable": "whether some split fills all servers alike (optimum = mean)",
    "bottleneck_servers": "servers in the bottleneck, the largest set that attains the optimum",
    "bottleneck_capacity_share": "capacity of the bottleneck ÷ total capacity",
    "bottleneck_demand_share": "demand that can go only to the bottleneck ÷ total demand",
    "bottleneck": "names of these servers",
    "proof": "highest utilisation of a split that was found ÷ optimum − 1: how far the two proofs are apart",
    "levels": "different levels of fair utilisation",
    "components": "parts of the fleet between which no demand is shared",
    "servers_without_demand": "servers that are in no choice with demand",
    "fewest_choices": "least number of choices with demand that a server is in",
    "most_choices": "highest number of choices with demand that a server is in",
    "connectivity": "least demand of the choices between two parts of the fleet (weighted edge connectivity)",
    "weakest_cut_servers": "servers on the smaller side of that cut",
    "weakest_cut": "names of these servers",
    "algebraic_connectivity": "second smallest eigenvalue of the demand-weighted Laplacian (Fiedler 1973)",
}


class Survey(Shown):
    """Exact facts about a fleet; made by `survey`.

    Attributes
    ----------
    optimum : float
        The lowest highest-utilisation that any split can reach when the demands are taken as amounts of work
        and placed once; for other amounts it grows in proportion.
    bottleneck : tuple
        Names of the servers of the largest set S that attains it: (demand that can go only to S) ÷ (capacity
        of S) is the optimum. All servers of a balanceable fleet.
    mean : float
        Mean utilisation when the demand is placed once: what the optimum would be without limits on who can
        take what.
    balanceable : bool
        Whether all servers have one fair level, so that the optimum is the mean.
    proof : float
        Highest utilisation of the split that was found ÷ optimum − 1. The split shows that the optimum is not
        higher, the bottleneck that it is not lower; so this is the most that the number can be wrong by.
    components : int
        Parts of the fleet between which no demand is shared; choices without demand join nothing.
    profile : pandas.DataFrame
        The fair profile, one row a server in table order: server, capacity, component (from 1), choices and
        demand (number and demand of the choices with this server, without those that have no demand),
        fair_load and fair_utilisation (max-min fair, demand placed once), level (number of its level, from 1,
        the fullest), bottleneck.
    split : pandas.DataFrame
        A split that reaches the profile, one row a choice: its options and demand, and for each option the
        share of the demand that goes there (share_1, share_2, ...; NaN where the option is absent).

    Examples
    --------
    A path of three servers: north and east share 18, east and south 12.

    >>> import pandas as pd
    >>> import labkit as lk
    >>> servers = pd.DataFrame({"server": ["north", "east", "south"], "capacity": [10, 10, 40]})
    >>> choices = pd.DataFrame(
    ...     {"option_1": ["north", "east"], "option_2": ["east", "south"], "demand": [18, 12]}
    ... )
    >>> best = lk.survey(lk.Fleet(servers, choices))
    >>> best
    <survey of 3 servers: optimum 0.9 (1.8 × mean, in 2 of 3 servers)>
    >>> best.bottleneck, best.components
    (('north', 'east'), 1)
    >>> best.profile[["server", "fair_load", "bottleneck"]].values.tolist()
    [['north', 9.0, True], ['east', 9.0, True], ['south', 12.0, False]]
    >>> best.split[["option_1", "share_1", "option_2", "share_2"]].values.tolist()
    [['north', 0.5, 'east', 0.5], ['east', 0.0, 'south', 1.0]]
    """

    def __init__(self, fleet: Fleet) -> None:
        self.fleet = check_fleet(fleet)
        self._fair: FairProfile = fair_profile(fleet)
        self.optimum = self._fair.optimum
        self.mean = total_demand(fleet) / fleet.total_capacity
        self.balanceable = len(self._fair.level) == 1
        self.proof = self._fair.agreement()
        if not abs(self.proof) <= AGREEMENT:
            raise InputError(
                f"fleet has demands and capacities so far apart that its optimum, about {self.optimum:.4g}, "
                f"cannot be proved to {AGREEMENT:g}; leave out what is negligible."
            )

    @cached_property
    def bottleneck(self) -> tuple[Any, ...]:
        """Names of the servers that attain the optimum."""
        return tuple(self.fleet.names.take(self._fair.bottleneck).tolist())

    @property
    def components(self) -> int:
        """Parts of the fleet between which no demand is shared."""
        return self._components[0]

    @cached_property
    def profile(self) -> pd.DataFrame:
        """The fair profile, one row a server."""
        fleet, level = self.fleet, self._fair.of_server
        count, demand = self._choices_and_demand
        capacity = np.ones(fleet.size) if fleet.capacity is None else fleet.capacity
        return pd.DataFrame(
            {
                "server": fleet.names,
                "capacity": capacity,
                "component": self._components[1] + 1,
                "choices": count,
                "demand": demand,
                "fair_load": level * capacity,
                "fair_utilisation": level,
                "level": self._fair.block.astype(np.int64) + 1,
                "bottleneck": self._fair.block == 0,
            }
        )

    @cached_property
    def split(self) -> pd.DataFrame:
        """A split that reaches the fair profile, one row a choice."""
        table, fleet = self.fleet.choices, self.fleet
        carried = self._fair.split.by_option()[:, : fleet.options.shape[1]]
        total = carried.sum(axis=1)
        for place in range(fleet.options.shape[1]):
            present = fleet.options[:, place] != ABSENT
            # A choice without demand is split evenly.
            share = 1.0 / np.count_nonzero(fleet.options != ABSENT, axis=1)
            np.divide(carried[:, place], total, out=share, where=total > 0)
            table[f"share_{place + 1}"] = np.where(present, share, np.nan)
        return table

    def table(self) -> pd.DataFrame:
        """Return all facts.

        Returns
        -------
        pandas.DataFrame
            One row a fact: `fact`, `value` (a number, a truth value or a tuple of names) and `meaning`.
            `connectivity` and `algebraic_connectivity` are of the demand-weighted graph, in which a choice of
            k > 2 options is a clique of pairs with demand ÷ (k − 1) each.

        Examples
        --------
        Two choices must be cut to divide a ring:

        >>> import labkit as lk
        >>> facts = lk.survey(lk.ring(4)).table().set_index("fact")["value"]
        >>> facts[["choices", "mean", "optimum", "connectivity"]].tolist()
        [4, 1.0, 1.0, 2.0]
        """
        values = self._facts
        return pd.DataFrame(
            {
                "fact": list(MEANINGS),
                "value": pd.Series([values[fact] for fact in MEANINGS], dtype=object),
                "meaning": list(MEANINGS.values()),
            }
        )

    @cached_property
    def _facts(self) -> dict[str, Any]:
        fleet = self.fleet
        inside = self._fair.block == 0
        room = float(np.count_nonzero(inside) if fleet.capacity is None else fleet.capacity[inside].sum())
        total = total_demand(fleet)
        count, _ = self._choices_and_demand
        connectivity, side = weakest_cut(fleet)
        law = fleet.implicit
        return {
            "servers": fleet.size,
            "choices": len(fleet.options) if law is None else choices_of_law(law),
            "total_demand": total,
            "total_capacity": fleet.total_capacity,
            "mean": self.mean,
            "optimum": self.optimum,
            "optimum_over_mean": self.optimum / self.mean,
            "balanceable": self.balanceable,
            "bottleneck_servers": len(self.bottleneck),
            "bottleneck_capacity_share": room / fleet.total_capacity,
            "bottleneck_demand_share": self.optimum * room / total,
            "bottleneck": self.bottleneck,
            "proof": self.proof,
            "levels": len(self._fair.level),
            "components": self.components,
            "servers_without_demand": int(np.count_nonzero(count == 0)),
            "fewest_choices": int(count.min()),
            "most_choices": int(count.max()),
            "connectivity": connectivity,
            "weakest_cut_servers": len(side),
            "weakest_cut": tuple(fleet.names.take(np.asarray(side, np.int64)).tolist()),
            "algebraic_connectivity": algebraic_connectivity(fleet),
        }

    @cached_property
    def _components(self) -> tuple[int, np.ndarray]:
        return components(self.fleet)

    @cached_property
    def _choices_and_demand(self) -> tuple[np.ndarray, np.ndarray]:
        """Number and demand of the choices with demand that each server is in."""
        fleet = self.fleet
        if fleet.implicit is not None:
            law = fleet.implicit
            # Those that leave a server out have one server less to draw from.
            without = type(law)(law.servers - 1, law.options, law.distinct)
            each = choices_of_law(law) - choices_of_law(without)
            kind = np.int64 if each < 2**63 else np.float64
            return np.full(fleet.size, as_float(each)).astype(kind), np.full(fleet.size, as_float(each))
        count, demand = np.zeros(fleet.size, np.int64), np.zeros(fleet.size)
        given = np.full(len(fleet.options), fleet.equal_demand) if fleet.demand is None else fleet.demand
        kept(gather)(fleet.options, given, count, demand)
        return count, demand

    def __repr__(self) -> str:
        servers = len(self._fair.bottleneck)
        reach = (
            "= mean: balanceable"
            if self.balanceable
            else f"{self.optimum / self.mean:.4g} × mean, in {servers:,} of {self.fleet.size:,} servers"
        )
        return f"<survey of {self.fleet.size:,} servers: optimum {self.optimum:.6g} ({reach})>"


def survey(fleet: Fleet) -> Survey:
    """Work out what any placement rule could reach at best on a fleet, and what stands in the way.

    The optimum is the largest, over server sets S, of (demand that can go only to S) ÷ (capacity of S), by
    linear programming duality. It is found together with a split that reaches it, by flows instead of a
    general linear program: the fleet is divided into blocks of equal level, fullest first (the decomposition
    of Fujishige 1980, flows by Goldberg & Tarjan 1988).

    Parameters
    ----------
    fleet : Fleet
        Any fleet: choices of two or more options, capacities, demands of 0, several components, servers in no
        choice. A fleet without a table of choices (`labkit.complete`) has a demand of 1 for each choice.

    Returns
    -------
    Survey
        Optimum, bottleneck and the fair profile at once; connectivity when `Survey.table` is called.

    Raises
    ------
    InputError
        When `fleet` is no fleet, or its numbers are so far apart (some fifteen orders of magnitude) that the
        optimum cannot be proved to 1e-9.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> servers = pd.DataFrame({"server": ["north", "east", "south"], "capacity": [10, 10, 40]})
    >>> choices = pd.DataFrame(
    ...     {"option_1": ["north", "east"], "option_2": ["east", "south"], "demand": [18, 12]}
    ... )
    >>> best = lk.survey(lk.Fleet(servers, choices))
    >>> best.optimum, best.mean, best.bottleneck
    (0.9, 0.5, ('north', 'east'))
    >>> best.profile["fair_utilisation"].tolist()
    [0.9, 0.9, 0.3]
    """
    return Survey(fleet)


def gather(options, demand, count, received):
    """Count, for each server, the choices with demand and their demand."""
    for row in range(options.shape[0]):
        if demand[row] > 0.0:
            for server in options[row]:
                if server != np.uint32(ABSENT):
                    count[server] += 1
                    received[server] += demand[row]
