"""Who shares a choice with whom, and the part of a fleet around some servers."""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from labkit.figures.layout import positions
from labkit.fleet.model import ABSENT, Fleet


class Surroundings:
    """The choices of each server of a fleet, found in time that does not grow with the fleet.

    Parameters
    ----------
    fleet : Fleet
        A fleet whose choices are listed.
    """

    def __init__(self, fleet: Fleet) -> None:
        self.fleet = fleet
        self.options = np.asarray(fleet.options)
        self.demand = (
            np.full(len(self.options), fleet.equal_demand)
            if fleet.demand is None
            else np.asarray(fleet.demand)
        )
        flat = self.options.ravel()
        order = np.argsort(flat, kind="stable")
        self._rows = order // self.options.shape[1]
        self._first = np.searchsorted(flat[order], np.arange(fleet.size + 1))

    def choices_of(self, server: int) -> np.ndarray:
        """Return the rows of the choices that this server is in."""
        return self._rows[self._first[server] : self._first[server + 1]]

    def reach(self, server: int) -> float:
        """Return the demand of the choices that this server is in."""
        return float(self.demand[self.choices_of(server)].sum())

    def members(self, row: int) -> list[int]:
        """Return the servers of a choice."""
        return [int(each) for each in self.options[row] if each != ABSENT]

    def neighbours(self, server: int) -> dict[int, float]:
        """Return the servers that share choices with this one, and the demand they share, most first."""
        shared: dict[int, float] = {}
        for row in self.choices_of(server):
            for other in self.members(row):
                if other != server:
                    shared[other] = shared.get(other, 0.0) + float(self.demand[row])
        return dict(sorted(shared.items(), key=lambda pair: (-pair[1], pair[0])))

    def around(self, centres: Sequence[int], most: int) -> np.ndarray:
        """Return at most `most` servers, nearest to the centres in choices, in table order."""
        if self.fleet.size <= most:
            return np.arange(self.fleet.size)
        queue = list(dict.fromkeys(int(each) for each in centres))[:most]
        reached = set(queue)
        for server in queue:
            if len(queue) >= most:
                break
            for row in self.choices_of(server):
                for other in self.members(row):
                    if other not in reached and len(queue) < most:
                        reached.add(other)
                        queue.append(other)
        return np.sort(np.array(queue))

    def drawn(self, servers: np.ndarray) -> "Part":
        """Return a part of the fleet as it is drawn.

        Parameters
        ----------
        servers : numpy.ndarray, shape (drawn,)
            Their positions in the fleet, in order.
        """
        rows = np.unique(np.concatenate([self.choices_of(int(each)) for each in servers]))
        inside = {int(each): at for at, each in enumerate(servers)}
        members = [[inside[each] for each in self.members(row) if each in inside] for row in rows]
        whole = [len(kept) == len(self.members(row)) for kept, row in zip(members, rows, strict=True)]
        cut = np.zeros(len(servers), dtype=bool)
        for kept, complete in zip(members, whole, strict=True):
            if not complete:
                cut[kept] = True
        pairs: dict[tuple[int, int], float] = {}
        groups = []
        for kept, row in zip(members, rows, strict=True):
            if len(self.members(row)) > 2:
                if len(kept) > 1:
                    groups.append(Group(int(row), tuple(kept), float(self.demand[row])))
            elif len(kept) == 2:
                ends = (min(kept), max(kept))
                pairs[ends] = pairs.get(ends, 0.0) + float(self.demand[row])
        return Part(servers, list(pairs.items()), groups, cut)


@dataclass(frozen=True)
class Group:
    """A choice of three or more options: its row, its servers in the part, its demand."""

    row: int
    members: tuple[int, ...]
    demand: float


@dataclass(frozen=True)
class Part:
    """The servers that are drawn, and where.

    Attributes
    ----------
    servers : numpy.ndarray, shape (drawn,)
        Positions in the fleet.
    pairs : list
        Pairs of servers, as numbers within the part, and the demand of their two-option choices.
    groups : list of Group
        Choices of more options.
    cut : numpy.ndarray, shape (drawn,)
        Whether a server has choices with servers that are not drawn.
    """

    servers: np.ndarray
    pairs: list[tuple[tuple[int, int], float]]
    groups: list[Group]
    cut: np.ndarray

    @cached_property
    def places(self) -> np.ndarray:
        """Places of the servers in the plane, within a square of side 2 around the origin."""
        joined = [ends for ends, _ in self.pairs]
        for group in self.groups:
            joined += [
                (one, other) for at, one in enumerate(group.members) for other in group.members[at + 1 :]
            ]
        found = positions(len(self.servers), np.array(sorted(set(joined)), dtype=np.int64).reshape(-1, 2))
        found = found - (found.max(axis=0) + found.min(axis=0)) / 2
        return found / max(float(np.abs(found).max()), 1e-12)

    def hub(self, group: Group) -> np.ndarray:
        """Return the middle of the servers of a choice, where its spokes meet."""
        return self.places[list(group.members)].mean(axis=0)

    def strokes(self) -> list[tuple[np.ndarray, np.ndarray, float, frozenset[int]]]:
        """Return every line to draw: its two ends, its demand, and the servers of its choice."""
        places = self.places
        lines = [
            (places[one], places[other], demand, frozenset((one, other)))
            for (one, other), demand in self.pairs
        ]
        for group in self.groups:
            lines += [
                (places[each], self.hub(group), group.demand, frozenset(group.members))
                for each in group.members
            ]
        return lines
