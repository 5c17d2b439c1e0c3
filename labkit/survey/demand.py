"""The demand of a fleet as a whole, and whether an even split of it fills all servers alike."""

import math

import numpy as np

from labkit.compiled import kept
from labkit.fleet.model import ABSENT, CompleteLaw, Fleet


def total_demand(fleet: Fleet) -> float:
    """Return the sum of all demands.

    Choices that follow a law (`labkit.complete`) have a demand of 1 each: distinct options make C(n, k)
    choices, options drawn with replacement n^k.
    """
    if fleet.implicit is not None:
        return as_float(choices_of_law(fleet.implicit))
    if fleet.demand is None:
        return fleet.equal_demand * fleet.options.shape[0]
    return math.fsum(fleet.demand)


def choices_of_law(law: CompleteLaw) -> int:
    """Return how many equally likely choices a law has."""
    return math.comb(law.servers, law.options) if law.distinct else law.servers**law.options


def as_float(number: int) -> float:
    """Return a whole number as a float, infinite where it is too large for one."""
    try:
        return float(number)
    except OverflowError:
        return math.inf


def evenly_balanced(fleet: Fleet) -> bool:
    """Tell whether splitting every choice in proportion to capacity fills all servers alike."""
    if fleet.implicit is not None:
        return True
    capacity, demand = (np.empty(0) if given is None else given for given in (fleet.capacity, fleet.demand))
    received = np.zeros(fleet.size)
    kept(split_evenly)(fleet.options, demand, capacity, received)
    return bool(np.ptp(received) <= 1e-12 * np.max(received))


def split_evenly(options, demand, capacity, received):
    """Add to `received` the utilisation that an even split gives (arrays empty where all values are one)."""
    for row in range(options.shape[0]):
        total = 0.0
        for server in options[row]:
            if server != np.uint32(ABSENT):
                total += capacity[server] if capacity.size > 0 else 1.0
        for server in options[row]:
            if server != np.uint32(ABSENT):
                received[server] += (demand[row] if demand.size > 0 else 1.0) / total
