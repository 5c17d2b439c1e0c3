"""What is looked at: the selected server, the two sides, and the part of the fleet that is drawn."""

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd

from labkit.checks import shown
from labkit.errors import InputError
from labkit.explorer.sides import NEAR, Side, capacities
from labkit.explorer.surroundings import Part, Surroundings
from labkit.fleet.model import Fleet, positions_of
from labkit.survey.facts import Survey

MEAN, HIGHEST = "mean", "highest"


class State:
    """The choices of whoever looks, and what follows from them; it draws nothing.

    Parameters
    ----------
    fleet : Fleet
    sides : dict of str to Side
        What can be shown, the fair split last.
    best : Survey
    most : int
        Servers drawn at most.
    """

    def __init__(self, fleet: Fleet, sides: dict[str, Side], best: Survey, most: int) -> None:
        self.fleet, self.sides, self.best, self.most = fleet, sides, best, most
        self.surroundings = Surroundings(fleet)
        self.capacity = capacities(fleet)
        inside = best.profile["bottleneck"].to_numpy()
        self.bottleneck = np.flatnonzero(inside) if not best.balanceable else np.empty(0, np.int64)
        self.shown = tuple(list(sides)[:2])
        self.measure = MEAN
        self.selected: int | None = None
        self.whole_bottleneck = False
        self.part: Part
        self.draw_around(self.bottleneck if len(self.bottleneck) else self._fullest())

    def _fullest(self) -> Sequence[int]:
        return [int(np.argmax(self.values(self.shown[0])))]

    def name(self, server: int) -> str:
        """Return the name of a server."""
        return str(self.fleet.names[server])

    def draw_around(self, centres: Sequence[int] | np.ndarray) -> None:
        """Draw the servers nearest to some."""
        self.part = self.surroundings.drawn(self.surroundings.around(list(centres), self.most))

    def select(self, server: int) -> bool:
        """Select a server; tell whether another part of the fleet is drawn for it."""
        self.selected, self.whole_bottleneck = server, False
        return self._moved([server])

    def select_bottleneck(self) -> bool:
        """Select the bottleneck; tell whether another part of the fleet is drawn for it."""
        if not len(self.bottleneck):
            raise InputError(
                "fleet has no bottleneck: some split fills all servers alike; select a server by its name."
            )
        self.selected, self.whole_bottleneck = None, True
        return self._moved(self.bottleneck[: self.most])

    def _moved(self, centres: Sequence[int] | np.ndarray) -> bool:
        if np.isin(centres, self.part.servers).all():
            return False
        self.draw_around(centres)
        return True

    def values(self, name: str) -> np.ndarray:
        """Return the utilisation of every server under a rule, as it is coloured."""
        side = self.sides[name]
        return (side.highest if self.measure == HIGHEST else side.load) / self.capacity

    def limits(self) -> tuple[float, float]:
        """Return the ends of the colour scale, the same for both sides: those of the whole fleet."""
        values = [self.values(name) for name in self.shown]
        low, high = min(each.min() for each in values), max(each.max() for each in values)
        if high - low <= 1e-6 * abs(high):  # all equally full: a middle shade
            low, high = low - 0.1 * (abs(low) or 1.0), high + 0.1 * (abs(high) or 1.0)
        return float(low), float(high)

    def highlighted(self) -> frozenset[int]:
        """Return the servers that share a choice with the selected one."""
        return (
            frozenset() if self.selected is None else frozenset(self.surroundings.neighbours(self.selected))
        )

    def loads(self) -> pd.DataFrame:
        """Return what is selected under each rule, one row a rule.

        Columns: rule, load (work units), utilisation, highest (utilisation in any replicate), fullest (share
        of the replicates in which it, or a server of the bottleneck, is the fullest), replicates. Of a
        bottleneck, load and utilisation are of all its servers together.
        """
        inside = self.bottleneck if self.selected is None else np.array([self.selected])
        rows = []
        for side in self.sides.values():
            load, room = side.load[inside].sum(), self.capacity[inside].sum()
            known = side.replicates > 0
            rows.append(
                {
                    "rule": side.name,
                    "load": load,
                    "utilisation": load / room,
                    "highest": (side.highest[inside] / self.capacity[inside]).max() if known else np.nan,
                    "fullest": _share(side.fullest[inside]) if known else np.nan,
                    "replicates": side.replicates,
                }
            )
        return pd.DataFrame(rows)

    def facts(self) -> dict[str, Any]:
        """Return what is known about the selection without any rule; empty when nothing is selected."""
        if self.whole_bottleneck:
            room = float(self.capacity[self.bottleneck].sum())
            return {
                "servers": len(self.bottleneck),
                "capacity": room,
                "confined": self.best.optimum * room,
                "optimum": self.best.optimum,
                "mean": self.best.mean,
            }
        if self.selected is None:
            return {}
        server, about = self.selected, self.best.profile.iloc[self.selected]
        return {
            "capacity": float(self.capacity[server]),
            "reach": self.surroundings.reach(server),
            "choices": len(self.surroundings.choices_of(server)),
            "neighbours": len(self.surroundings.neighbours(server)),
            "fair_utilisation": float(about["fair_utilisation"]),
            "level": int(about["level"]),
            "levels": int(self.best.profile["level"].max()),
            "bottleneck": bool(about["bottleneck"]) and not self.best.balanceable,
        }

    def choices(self) -> pd.DataFrame:
        """Return the choices of the selected server, most demand first.

        Columns: options (a tuple of names) and demand.
        """
        rows: Any = [] if self.selected is None else self.surroundings.choices_of(self.selected)
        table = pd.DataFrame(
            {
                "options": [tuple(map(self.name, self.surroundings.members(row))) for row in rows],
                "demand": [float(self.surroundings.demand[row]) for row in rows],
            }
        )
        return table.sort_values("demand", ascending=False, kind="stable", ignore_index=True)

    def neighbours(self) -> pd.DataFrame:
        """Return the neighbours of the selected server, most shared demand first.

        Columns: server, capacity, shared (demand of the choices with both), and the utilisation under each
        side that is shown, named after it.
        """
        shared = {} if self.selected is None else self.surroundings.neighbours(self.selected)
        at = np.array(list(shared), dtype=np.int64)
        demand = np.array(list(shared.values()), dtype=np.float64)
        about = zip(NEAR, (self.fleet.names.take(at), self.capacity[at], demand), strict=True)
        return pd.DataFrame(dict(about) | {name: self.values(name)[at] for name in self.shown})

    def show(self, left: str, right: str) -> None:
        """Put two rules side by side."""
        self.shown = (left, right)


def _share(shares: np.ndarray) -> float:
    """Return the highest share in which one of some servers was the fullest."""
    return float(shares.max())


def server_called(fleet: Fleet, name: Any) -> int:
    """Return the position of a server by name."""
    try:
        return int(positions_of(fleet, [name], "server")[0])
    except InputError as refusal:
        _, found, hint = str(refusal).partition("did you mean ")
        ending = f"{found}{hint}" if found else "give the name of a server of this fleet."
        raise InputError(f"no server is called {shown(name)}; {ending}") from None
