"""A fleet as a network of flows: pairs of servers between which a rule can shift work."""

from dataclasses import dataclass

import numpy as np

from labkit.fleet.model import ABSENT, Fleet
from labkit.stationary.solver import Solver
from labkit.survey.connectivity import demand_graph
from labkit.survey.demand import total_demand


@dataclass(frozen=True)
class Network:
    """Pairs of servers that share choices, in units in which one task a server arrives per unit of time.

    Attributes
    ----------
    first, second : int64 arrays, shape (pairs,)
        The servers of each pair, first < second.
    demand : float64 array, shape (pairs,)
        Tasks per unit of time that come on the pair; a choice of k > 2 options is a pair between any two of
        them with 1 / (k - 1) of its demand.
    room : float64 array, shape (servers,)
        Capacities over their mean.
    surplus : float64 array, shape (servers,)
        Tasks per unit of time that a server gets when all utilisations are equal, less its room: what the
        rule must carry away on average. Sums to 0.
    """

    first: np.ndarray
    second: np.ndarray
    demand: np.ndarray
    room: np.ndarray
    surplus: np.ndarray

    def solver(self, conductance: np.ndarray) -> Solver:
        """Return a solver for conductances on the pairs."""
        return Solver(self.first, self.second, conductance, self.room.size)

    def divergence(self, flow: np.ndarray) -> np.ndarray:
        """Return what leaves each server when `flow`, shape (..., pairs), goes from first to second."""
        size = self.room.size
        if flow.ndim == 1:
            return np.bincount(self.first, flow, minlength=size) - np.bincount(
                self.second, flow, minlength=size
            )
        return np.array([self.divergence(each) for each in flow])

    def slope(self, height: np.ndarray) -> np.ndarray:
        """Return the difference of height, first − second, over each pair."""
        return height[..., self.first] - height[..., self.second]

    def centred(self, height: np.ndarray) -> np.ndarray:
        """Return heights less their mean, weighted by room: no work is added or lost."""
        return height - (height @ self.room / self.room.sum())[..., None]


def network_of(fleet: Fleet, authority: float = 1.0) -> Network:
    """Return the pairs of a fleet with a table of choices.

    Parameters
    ----------
    fleet : Fleet
    authority : float
        Share of the tasks that go to the least loaded option, equal ones by a fair coin; the others go to one
        of the options in proportion to capacity.
    """
    size = fleet.size
    indptr, neighbour, weight = demand_graph(fleet)
    row = np.repeat(np.arange(size), np.diff(indptr))
    once = row < neighbour
    scale = size / total_demand(fleet)
    room = np.ones(size) if fleet.capacity is None else fleet.capacity * (size / fleet.total_capacity)
    there = fleet.options != ABSENT
    demand = np.full(len(there), fleet.equal_demand) if fleet.demand is None else fleet.demand
    weight_of = np.where(there, room[np.where(there, fleet.options, 0)], 0.0)
    share = authority * there / there.sum(axis=1, keepdims=True)
    share += (1.0 - authority) * weight_of / weight_of.sum(axis=1, keepdims=True)
    share *= (demand * scale)[:, None]
    drawn = np.bincount(fleet.options[there].astype(np.int64), share[there], minlength=size)
    return Network(row[once], neighbour[once], weight[once] * scale, room, drawn - room)
