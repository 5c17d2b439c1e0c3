"""The fair profile: how full each server must be when all demand is split as evenly as the choices allow."""

import weakref
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from labkit.compiled import kept
from labkit.fleet.model import Fleet
from labkit.survey.demand import evenly_balanced, total_demand
from labkit.survey.flow import ROUNDING, add
from labkit.survey.split import Split, split_of

EVEN = 1e-9  # levels are checked to this share


@dataclass
class FairProfile:
    """The max-min fair split of all demand.

    Attributes
    ----------
    block : int32 array, shape (servers,)
        Number of each server's block of equal level, from 0, fullest first; −1 where it was not asked for.
    level : float64 array, shape (blocks,)
        Utilisation of each block when the demand is placed once, falling: (demand confined to the block and
        those before it, less what is confined to those before it) / (capacity of the block).
    """

    fleet: Fleet
    block: np.ndarray
    level: np.ndarray
    _split: Split | None

    @property
    def of_server(self) -> np.ndarray:
        """Fair utilisation of each server, float64 of shape (servers,)."""
        return self.level[self.block]

    @property
    def of_unit_work(self) -> np.ndarray:
        """Fair utilisation of each server when one unit of work is placed."""
        if self.fleet.implicit is not None:  # the total may be too large for a float
            return np.full(self.fleet.size, 1.0 / self.fleet.total_capacity)
        return self.of_server / total_demand(self.fleet)

    @property
    def optimum(self) -> float:
        """The optimum: the level of the fullest block."""
        return float(self.level[0])

    @property
    def bottleneck(self) -> np.ndarray:
        """Positions of the servers of the fullest block, the largest set that attains the optimum."""
        return np.flatnonzero(self.block == 0)

    @cached_property
    def split(self) -> Split:
        """A split that reaches the profile; its arrays must not be changed."""
        if self._split is None:
            # On an evenly balanced fleet the split by capacity is fair already.
            self._split = split_of(self.fleet)
            self._split.make_fair()
        return self._split

    def agreement(self) -> float:
        """Return by how much the highest utilisation of the split is above the optimum, relative to it.

        The split shows that the optimum is no higher than that, the bottleneck that it is no lower.
        """
        if self._split is None:
            return 0.0
        return float(np.max(self._split.load / self._split.capacity)) / self.optimum - 1.0


# Rounding may have parted a block where it ought not to be; begun again from the split found, it seldom does.
ATTEMPTS = 4
_KNOWN: weakref.WeakKeyDictionary[Fleet, FairProfile] = weakref.WeakKeyDictionary()


def fair_profile(fleet: Fleet) -> FairProfile:
    """Return the fair profile of a fleet, worked out once.

    The profile is unique; a split that reaches it is not. No choice sends work to a server while one of its
    other options has a lower level. The optimum is the top level, and the servers there are the bottleneck.
    The blocks are the density decomposition of the choices (Fujishige 1980; for graphs Tatti & Gionis 2015).
    """
    if fleet not in _KNOWN:
        _KNOWN[fleet] = _decomposed(fleet, only_top=False)
    return _KNOWN[fleet]


def top_of_profile(fleet: Fleet) -> FairProfile:
    """Return a profile of which only the fullest block is known, or the whole one if it is there already."""
    return _KNOWN[fleet] if fleet in _KNOWN else _decomposed(fleet, only_top=True)


def _decomposed(fleet: Fleet, *, only_top: bool) -> FairProfile:
    if evenly_balanced(fleet):
        level = np.array([total_demand(fleet) / fleet.total_capacity])
        return FairProfile(fleet, np.zeros(fleet.size, np.int32), level, None)
    split = split_of(fleet)
    for _ in range(ATTEMPTS):
        found = split.make_fair(only_top=only_top)
        if _in_order(split, found):
            break
    level, group = _levels(split, found)
    known = split.block >= 0
    split.block[known] = group[split.block[known]]
    return FairProfile(fleet, split.block, level, split)


def _in_order(split: Split, found: int) -> bool:
    """Tell whether every block is filled evenly, and none above one before it."""
    known = split.block >= 0
    utilisation = split.load[known] / split.capacity[known]
    block = split.block[known]
    level = np.bincount(block, split.load[known], found) / np.bincount(block, split.capacity[known], found)
    even = utilisation <= level[block] * (1.0 + EVEN)
    return bool(even.all() and (np.diff(level) <= EVEN * level[:-1]).all())


def _levels(split: Split, found: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the level of each block, with equal ones made one, and the new number of each old block."""
    work, room = np.zeros(found), np.zeros(found)
    kept(sum_blocks)(split.servers, split.carried, split.demand, split.capacity, split.block, work, room)
    level: list[float] = []
    group = np.empty(found, np.int32)
    start = 0
    for number in range(found):
        if level and work[number] / room[number] >= level[-1] * (1.0 - ROUNDING):
            level[-1] = work[start : number + 1].sum() / room[start : number + 1].sum()
        else:
            level.append(work[number] / room[number])
            start = number
        group[number] = len(level) - 1
    return np.array(level), group


def sum_blocks(servers, carried, demand, capacity, block, work, room):
    """Sum demand and capacity by block, without what plain sums lose to rounding."""
    lost = np.zeros(work.size)
    for choice in range(servers.shape[0]):
        for position in range(servers.shape[1]):
            if carried[choice * servers.shape[1] + position] > 0.0:
                number = block[servers[choice, position]]
                if number >= 0:
                    work[number], lost[number] = add(work[number], lost[number], demand[choice])
                break
    work += lost
    lost[:] = 0.0
    for server in range(block.size):
        number = block[server]
        if number >= 0:
            room[number], lost[number] = add(room[number], lost[number], capacity[server])
    room += lost
