"""Whether a fleet has a stationary state at all."""

import numpy as np
import scipy.sparse
import scipy.sparse.csgraph

from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet
from labkit.survey.connectivity import components
from labkit.survey.demand import total_demand
from labkit.survey.fair import fair_profile


def check_stationary(fleet: Fleet) -> None:
    """Refuse a fleet on which loads have no stationary state whatever the rule."""
    parts = components(fleet)[0]
    if parts > 1:
        raise InputError(
            f"fleet has {parts:,} parts between which no demand is shared, so that their loads drift apart: "
            "there is no stationary state; forecast each part on its own."
        )
    if fleet.size < 2:
        raise InputError("fleet has one server, whose gap is always 0; there is nothing to forecast.")
    fair = fair_profile(fleet)
    if len(fair.level) > 1:
        mean = total_demand(fleet) / fleet.total_capacity
        raise InputError(
            f"fleet is not balanceable (optimum {fair.optimum / mean:.4g} × mean utilisation), so its gap "
            "grows for ever: there is no stationary state; place from a start of your own, and look at the "
            "excess over the optimum."
        )
    if fleet.implicit is not None:
        return  # every two servers share a choice
    carried = fair.split.by_option()[:, : fleet.options.shape[1]]
    tight = _tight_servers(fleet, carried)
    if tight.size:
        names = ", ".join(str(name) for name in fleet.names.take(tight[:5]).tolist())
        more = ", ..." if tight.size > 5 else ""
        raise InputError(
            f"fleet is only just balanceable: {tight.size:,} of its servers ({names}{more}) can exchange no "
            "work with the others, so that loads drift apart: there is no stationary state; add a choice or "
            "capacity there."
        )


def _tight_servers(fleet: Fleet, carried: np.ndarray) -> np.ndarray:
    """Return the smaller side of what a balanced split cannot exchange; none when all can."""
    size = fleet.size
    total = carried.sum(axis=1, keepdims=True)
    rows, columns = [], []
    for one in range(carried.shape[1]):
        movable = (carried[:, one] > 1e-9 * total[:, 0]) & (fleet.options[:, one] != ABSENT)
        for other in range(carried.shape[1]):
            both = movable & (fleet.options[:, other] != ABSENT)
            rows.append(fleet.options[both, one].astype(np.int64))
            columns.append(fleet.options[both, other].astype(np.int64))
    row, column = np.concatenate(rows), np.concatenate(columns)
    graph = scipy.sparse.coo_array((np.ones(row.size, np.int8), (row, column)), shape=(size, size))
    count, label = scipy.sparse.csgraph.connected_components(graph.tocsr(), connection="strong")
    if count == 1:
        return np.empty(0, np.int64)
    largest = np.argmax(np.bincount(label))
    return np.flatnonzero(label != largest)
