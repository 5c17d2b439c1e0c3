"""What links out of the bottleneck of an unbalanced fleet can do, exactly and without trying each.

Let a link join a server a of the bottleneck S to a server b outside, and let every choice of a also use b. A
server set that holds only one of the two confines what it confined before, less the choices of a; so the new
optimum is the larger of two numbers (q: demand confined to a set, c: capacity of a set):

- the highest ratio q(Z)/c(Z) of all sets Z without a: it depends on a alone (`link_moves.drain`);
- the highest ratio of all sets with a and b. Adding S to such a set never lowers its ratio, because q is
  supermodular and no set has a higher ratio than S. So it depends on b alone (`link_moves.pour`).

The least demand to re-route for a new optimum λ is what the servers above λ hold too much: the sum of
(level − λ) × capacity over them, since all of it has to go over the link.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from labkit.compiled import kept
from labkit.survey.fair import FairProfile
from labkit.survey.link_moves import drain, pour, reroute
from labkit.survey.link_walks import bound_inside, reachers, relieved

# Share within which two numbers count as equal.
TIE = 1e-12
# What a level is multiplied by so that all sets that are tight at it stand out above it.
_BELOW = 1.0 - 1e-11


@dataclass
class Found:
    """The best link of a step.

    Attributes
    ----------
    pair : int
        Its place among the pairs.
    optimum : float
        The new optimum, with as much demand re-routed as it needs.
    level : float
        The level to which the link can bring the part of the bottleneck whose work reaches it.
    members : int32 array
        That part.
    """

    pair: int
    optimum: float
    level: float
    members: np.ndarray


class Relief:
    """The fair split of an unbalanced fleet, made ready for moving work out of its bottleneck."""

    def __init__(self, profile: FairProfile) -> None:
        split = profile.split
        self.profile, self.capacity, self.load = profile, split.capacity, split.load
        self.head, self.level_of = split.head, profile.of_server
        width = split.servers.shape[1]
        # One more choice, for the work that is poured into an outer end.
        self.servers = np.vstack([split.servers, np.full((1, width), -1, np.int32)])
        self.following = np.append(split.following, np.full(width, -1, np.int32))
        self.carried = np.append(split.carried, np.zeros(width))
        # Servers from the fullest; their number, capacity and confined demand down to each level.
        self.order = np.argsort(profile.block, kind="stable").astype(np.int32)
        self.count = np.cumsum(np.bincount(profile.block))
        room = np.bincount(profile.block, self.capacity)
        self.room, self.work = np.cumsum(room), np.cumsum(profile.level * room)
        self.bottleneck = self.order[: self.count[0]]

    def above(self, level: float) -> np.ndarray:
        """Return the servers whose level is above the given one."""
        blocks = int(np.count_nonzero(self.profile.level > level))
        return self.order[: self.count[blocks - 1]]

    def best(self, inner: np.ndarray, outer: np.ndarray) -> Found | None:
        """Return the best of some pairs, or None when none makes progress.

        Parameters
        ----------
        inner, outer : int32 arrays, shape (pairs,)
            Servers inside and outside the bottleneck.

        Notes
        -----
        The order: new optimum; capacity of the largest set that stays at it; the level to which the link can
        bring the part of the bottleneck whose work reaches it; place among the pairs. Where the optimum falls
        to the same value, the least demand to re-route is the same, too.
        """
        ends, which = np.unique(inner, return_inverse=True)
        count, room = np.empty(len(ends), np.int64), np.empty(len(ends))
        kept(relieved)(
            ends, self.bottleneck, self.servers, self.head, self.following, self.carried, self.capacity,
            self.load, count, room,
        )  # fmt: skip
        optimum = float(self.profile.level[0])
        pairs = np.flatnonzero(count[which] == len(self.bottleneck))
        if len(pairs):
            optimum, pairs = self._lowest_optimum(inner, outer, pairs)
            if optimum >= self.profile.level[0] * (1.0 - TIE):
                return None
        else:
            # A part of the bottleneck stays, whatever the link: the smaller, the better.
            pairs = np.flatnonzero(room[which] >= room[which].max() * (1.0 - TIE))
        level, pairs = self._lowest_level(inner, outer, pairs, float(room[which[pairs[0]]]))
        return Found(int(pairs[0]), optimum, level, self._part(int(inner[pairs[0]])))

    def _lowest_optimum(
        self, inner: np.ndarray, outer: np.ndarray, pairs: np.ndarray
    ) -> tuple[float, np.ndarray]:
        """Return the lowest new optimum, and those of the pairs that reach it and leave the least at it."""
        elsewhere = np.ones(len(self.head), bool)
        elsewhere[
            kept(reachers)(
                self.bottleneck, self.order, self.servers, self.head, self.following, self.carried, self.load
            )
        ] = False
        # No work of these servers reaches the bottleneck, so no link from there lowers their level.
        least = float(self.level_of[elsewhere].max()) if elsewhere.any() else 0.0
        least = max(least, float(np.max(self.work / (self.room + self.capacity.max()))))
        ends, which = np.unique(outer[pairs], return_inverse=True)
        start = np.maximum(least, self.work[0] / (self.room[0] + self.capacity[ends]))
        behind = self._poured(ends, start, self.profile.level, self.work, self.room)
        outside = behind[which]
        start_level = float(outside.min())
        drained = self._drained(self.above(start_level * _BELOW), start_level)
        lowest, tied, within = _lowest(outside, inner[pairs], drained, self._bounds)
        if len(tied) == 1:
            return lowest, pairs[tied]

        by_outer = outside[tied] >= within[tied] * (1.0 - TIE)
        left = np.empty(len(tied))
        ends, which = np.unique(outer[pairs[tied]], return_inverse=True)
        tight = np.full(len(ends), lowest * _BELOW)
        if by_outer.any():
            held = self._poured(ends, tight, self.profile.level, self.work, self.room, only_tight=True)
            left[by_outer] = held[which][by_outer]
        members = self.above(lowest * _BELOW)
        held_within = self._drained(members, lowest * _BELOW, only_tight=True)
        known: dict[int, float] = {}
        for place in np.flatnonzero(~by_outer):
            end = int(inner[pairs[tied[place]]])
            if end not in known:
                known[end] = held_within(end, np.inf)
            left[place] = known[end]
        return lowest, pairs[tied[left <= left.min() * (1.0 + TIE)]]

    def _lowest_level(
        self, inner: np.ndarray, outer: np.ndarray, pairs: np.ndarray, room: float
    ) -> tuple[float, np.ndarray]:
        """Return the lowest level to which a pair can bring its part, of the given capacity, and which do."""
        top = self.profile.level[:1]
        ends, which = np.unique(outer[pairs], return_inverse=True)
        held, space = top * room, np.array([room])
        start = held[0] / (room + self.capacity[ends])
        behind = self._poured(ends, start, top, held, space, alone=True)[which]
        least = float(behind.min())
        whole = self._drained(self.bottleneck, least)

        def part_drained(end: int, cutoff: float) -> float:
            part = self._part(end)
            return (whole if part is self.bottleneck else self._drained(part, least))(end, cutoff)

        bounds = self._bounds if self._part(int(inner[pairs[0]])) is self.bottleneck else np.zeros_like
        lowest, tied, _ = _lowest(behind, inner[pairs], part_drained, bounds)
        return lowest, pairs[tied]

    def _bounds(self, ends: np.ndarray) -> np.ndarray:
        """Return levels below which the bottleneck cannot come by links from each inner end."""
        bound = np.empty(len(ends))
        kept(bound_inside)(
            ends, self.profile.block == 0, self.work[0], self.room[0], self.servers[:-1], self.head,
            self.following, self.profile.split.demand, self.capacity, bound,
        )  # fmt: skip
        # Differences of large sums have lost some places.
        return bound * _BELOW

    def _part(self, end: int) -> np.ndarray:
        """Return the servers of the bottleneck whose work reaches an inner end within it."""
        ends = np.array([end], np.int32)
        found: np.ndarray = kept(reachers)(
            ends, self.bottleneck, self.servers, self.head, self.following, self.carried, self.load
        )
        return self.bottleneck if len(found) == len(self.bottleneck) else found

    def _poured(
        self,
        ends: np.ndarray,
        start: np.ndarray,
        levels: np.ndarray,
        work: np.ndarray,
        room: np.ndarray,
        *,
        alone: bool = False,
        only_tight: bool = False,
    ) -> np.ndarray:
        found = np.empty(len(ends))
        kept(pour)(
            ends, start, only_tight, alone, levels, work, room, self.servers, self.head, self.following,
            self.carried, self.capacity, self.load, self.level_of, found,
        )  # fmt: skip
        return found

    def _drained(
        self, members: np.ndarray, level: float, *, only_tight: bool = False
    ) -> Callable[[int, float], float]:
        """Return a function of an inner end and a cutoff: `drain` among these members, from this level on."""
        # Each end may start from where the last one left the work of the members.
        carried, load, capacity = self.carried.copy(), self.load.copy(), self.capacity.copy()

        def drained(end: int, cutoff: float) -> float:
            return float(
                kept(drain)(
                    end, members, level, cutoff, only_tight, self.servers, self.head, self.following, carried,
                    capacity, load,
                )
            )  # fmt: skip

        return drained

    def reroute(
        self, inner: int, outer: int, members: np.ndarray, level: float
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return which choices send how much over a link when the members are brought down to a level."""
        taken = np.empty(len(self.servers) - 1)
        kept(reroute)(
            inner, outer, members, level, self.servers[:-1].copy(), self.head.copy(), self.following.copy(),
            self.carried.copy(), self.capacity.copy(), self.load.copy(), taken,
        )  # fmt: skip
        demand = self.profile.split.demand
        rows = np.flatnonzero(taken > TIE * taken.sum())
        # What is left of a choice by rounding alone is nothing.
        return rows, np.where(taken >= demand * (1.0 - TIE), demand, taken)[rows]


def _lowest(
    outside: np.ndarray,
    inner: np.ndarray,
    inside: Callable[[int, float], float],
    bounds: Callable[[np.ndarray], np.ndarray],
) -> tuple[float, np.ndarray, np.ndarray]:
    """Find the pairs whose larger number is lowest, without working out all inner ends.

    Parameters
    ----------
    outside : float64 array, shape (pairs,)
        What the outer ends allow.
    inner : int32 array, shape (pairs,)
    inside : callable
        What an inner end allows; above the cutoff, its second argument, not exactly.
    bounds : callable
        Bounds from below of what inner ends allow.

    Returns
    -------
    float
        The lowest larger number.
    int64 array
        Pairs that reach it.
    float64 array, shape (pairs,)
        What the inner ends allow, infinite where not worked out.
    """
    ends, which = np.unique(inner, return_inverse=True)
    nearest = np.full(len(ends), np.inf)
    np.minimum.at(nearest, which, outside)
    least = np.maximum(nearest, bounds(ends))
    allowed = np.full(len(ends), np.inf)
    lowest = np.inf
    for place in np.argsort(least, kind="stable"):
        if least[place] > lowest * (1.0 + TIE):
            break
        allowed[place] = inside(int(ends[place]), lowest * (1.0 + TIE))
        lowest = min(lowest, max(nearest[place], allowed[place]))
    value = np.maximum(outside, allowed[which])
    return float(lowest), np.flatnonzero(value <= lowest * (1.0 + TIE)), allowed[which]
