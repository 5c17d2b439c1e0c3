"""The fleet that is left when servers are lost, built afresh."""

import numpy as np

from labkit.fleet.model import ABSENT, Fleet


def left_over(fleet, lost):
    """Return the fleet without the servers at the positions lost; its choices may have a single option.

    Tables with such choices are refused, so the fleet is put together from arrays.
    """
    stays = ~np.isin(np.arange(fleet.size), lost)
    position = np.append(np.where(stays, np.cumsum(stays) - 1, ABSENT), ABSENT)
    options = position[np.where(fleet.options == ABSENT, fleet.size, fleet.options.astype(np.int64))]
    options = np.sort(options, axis=1).astype(np.uint32)  # ABSENT is the largest number
    placed = options[:, 0] != ABSENT
    left = Fleet.__new__(Fleet)
    left._set(
        fleet.names[stays],
        None if fleet.capacity is None else fleet.capacity[stays],
        np.ascontiguousarray(options[placed]),
        None if fleet.demand is None else fleet.demand[placed],
        fleet.equal_demand,
        None,
    )
    return left
