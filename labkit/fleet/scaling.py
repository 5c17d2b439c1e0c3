"""The same fleet with more capacity."""

import numpy as np

from labkit.fleet.model import Fleet


def scaled(fleet: Fleet, factor: float) -> Fleet:
    """Return the fleet with all capacities multiplied by a factor; choices and demands are shared."""
    if factor == 1.0:
        return fleet
    capacity = np.full(fleet.size, factor) if fleet.capacity is None else fleet.capacity * factor
    grown = Fleet.__new__(Fleet)
    grown._set(fleet.names, capacity, fleet.options, fleet.demand, fleet.equal_demand, fleet.implicit)
    return grown
