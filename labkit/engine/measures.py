"""What is measured at a checkpoint, in compiled code."""

import numpy as np

from labkit.compiled import compiled, kept
from labkit.fleet.model import ABSENT

# The columns that a kernel writes, in order.
MEASURED = ("mean_load", "max_load", "min_load", "max_utilisation", "load_variance", "edge_difference")


@compiled
def difference_over_rows(loads, options, demand):
    """Return the demand-weighted mean absolute difference of load over two-server choices."""
    total = 0.0
    weight = 0.0
    for row in range(options.shape[0]):
        here = np.uint64(row)
        if options.shape[1] > 2 and options[here, np.uint64(2)] != np.uint32(ABSENT):
            continue
        share = demand[here] if demand.size > 0 else 1.0
        one = loads[np.uint64(options[here, np.uint64(0)])]
        other = loads[np.uint64(options[here, np.uint64(1)])]
        total += share * abs(one - other)
        weight += share
    return total / weight if weight > 0.0 else np.nan


@compiled
def difference_over_all(loads):
    """Return the sum of absolute differences of load over all ordered pairs of servers."""
    ranked = np.sort(loads)
    total = 0.0
    for rank in range(ranked.size):
        total += (2.0 * rank - (ranked.size - 1.0)) * ranked[rank]
    return 2.0 * total


@kept
def measure(loads, capacity, options, demand, pairs_of, out):
    """Write the measures of one moment into `out`, float64 of shape (len(MEASURED),).

    Parameters
    ----------
    loads : int64 or float64 array, shape (servers,)
    capacity : float64 array, shape (servers,), or None for equal capacities of one
    options : uint32 array, shape (choices, options)
    demand : float64 array, shape (choices,), empty when all are equal
    pairs_of : int
        0: two-server choices are rows of `options`; 1: all pairs of distinct servers; 2: all pairs, a server
        with itself included; 3: there are none.
    out : float64 array
    """
    total = loads[0] - loads[0]
    highest = loads[0]
    lowest = loads[0]
    for load in loads:
        total += load
        highest = max(highest, load)
        lowest = min(lowest, load)
    mean = total / loads.size
    squares = 0.0
    for load in loads:
        squares += (load - mean) * (load - mean)
    fullest = float(highest)
    if capacity is not None:
        fullest = 0.0
        for server in range(loads.size):
            fullest = max(fullest, loads[server] / capacity[server])
    out[0] = mean
    out[1] = highest
    out[2] = lowest
    out[3] = fullest
    out[4] = squares / loads.size
    if pairs_of == 0:
        out[5] = difference_over_rows(loads, options, demand)
    elif pairs_of == 3:
        out[5] = np.nan
    else:
        pairs = loads.size * (loads.size - 1.0) if pairs_of == 1 else loads.size * float(loads.size)
        out[5] = difference_over_all(loads) / pairs
