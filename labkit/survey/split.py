"""The state that the compiled moves work on: how much of each choice's demand each option carries."""

from dataclasses import dataclass

import numpy as np

from labkit.compiled import kept
from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet
from labkit.survey.first_split import even_out, share_by_capacity, thread_entries
from labkit.survey.flow import decompose

# Rounds in which each choice evens out its own options, before work moves further. They are cheap, and leave
# the moves over longer distances little to do.
SWEEPS = 30
_MOST_ENTRIES = 2**31  # they are numbered in 32 bits


@dataclass
class Split:
    """A split of a fleet's demand among the options, and the arrays by which it is changed.

    An entry is a choice and one of its places: entry = choice × width + position.

    Attributes
    ----------
    servers : int32 array, shape (choices, width)
        Positions of servers, −1 where absent. There is at least one free place in each row.
    head : int32 array, shape (servers,)
        First entry of each server, −1 when it is in no choice.
    following : int32 array, shape (choices × width,)
        The next entry of the same server, −1 after the last.
    carried : float64 array, shape (choices × width,)
        Work units that an entry carries; those of one choice sum to its demand.
    load : float64 array, shape (servers,)
        What a server's entries carry together.
    demand, capacity : float64 arrays
        In the fleet's units, shapes (choices,) and (servers,).
    block : int32 array, shape (servers,)
        Servers of equal fair level, numbered from the fullest; see `make_fair`.
    order : int32 array, shape (servers,)
        Servers by block.
    """

    servers: np.ndarray
    head: np.ndarray
    following: np.ndarray
    carried: np.ndarray
    load: np.ndarray
    demand: np.ndarray
    capacity: np.ndarray
    block: np.ndarray
    order: np.ndarray

    def make_fair(self, *, only_top: bool = False) -> int:
        """Turn the split into the fair one and return the number of blocks (see `flow.decompose`)."""
        return int(
            kept(decompose)(
                self.servers, self.head, self.following, self.carried, self.capacity, self.load, self.block,
                self.order, only_top,
            )
        )  # fmt: skip

    def by_option(self) -> np.ndarray:
        """Return what each option carries, shape (choices, width)."""
        return self.carried.reshape(self.servers.shape)


def split_of(fleet: Fleet) -> Split:
    """Return a first split of the demand of a fleet with a table of choices: fair nearby, not yet far off."""
    choices, most = fleet.options.shape
    if choices * (most + 1) >= _MOST_ENTRIES:
        raise InputError(
            f"fleet has {choices:,} choices of up to {most} options; an exact survey takes at most "
            f"{_MOST_ENTRIES:,} options in all, so survey a part of the fleet."
        )
    servers = np.full((choices, most + 1), -1, np.int32)
    present = fleet.options != ABSENT
    servers[:, :most][present] = fleet.options[present]
    demand = np.full(choices, fleet.equal_demand) if fleet.demand is None else np.array(fleet.demand)
    capacity = np.ones(fleet.size) if fleet.capacity is None else np.array(fleet.capacity)
    split = Split(
        servers,
        head=np.empty(fleet.size, np.int32),
        following=np.full(servers.size, -1, np.int32),
        carried=np.empty(servers.size),
        load=np.empty(fleet.size),
        demand=demand,
        capacity=capacity,
        block=np.empty(fleet.size, np.int32),
        order=np.empty(fleet.size, np.int32),
    )
    kept(thread_entries)(servers, split.head, split.following)
    kept(share_by_capacity)(servers, demand, capacity, split.carried, split.load)
    kept(even_out)(servers, capacity, split.carried, split.load, SWEEPS)
    return split
