"""How well a fleet hangs together: components, the weakest cut and the algebraic connectivity.

All three count only choices with demand above 0, for work never crosses the others.
"""

import math
from typing import Any

import numpy as np

from labkit.compiled import kept
from labkit.errors import InputError
from labkit.fleet.model import ABSENT, CompleteLaw, Fleet
from labkit.survey.laplacian import second_smallest
from labkit.survey.minimum_cut import minimum_cut
from labkit.survey.union_find import join, number_sets

# Ordered pairs of options, over all choices, up to which the demand-weighted graph is built (some gigabytes).
MOST_PAIRS = 100_000_000
# Weights below this share of the largest are too small to be multiplied with each other.
_LEAST_WEIGHT = 1e-150
# Natural logarithms above this belong to numbers beyond any float.
_LARGEST_LOG = 720.0


def components(fleet: Fleet) -> tuple[int, np.ndarray]:
    """Return the connected components of the choice graph.

    Parameters
    ----------
    fleet : Fleet
        Any fleet.

    Returns
    -------
    count : int
        Number of components. A server that shares no demand is a component of its own.
    label : numpy.ndarray
        int64 of shape (servers,): the component of each server, numbered from 0 in order of their first
        servers.
    """
    label = np.zeros(fleet.size, np.int64)
    if fleet.implicit is None:
        demand = np.empty(0) if fleet.demand is None else fleet.demand
        parent = np.arange(fleet.size)
        kept(join_choices)(fleet.options, demand, parent)
        return int(kept(number_sets)(parent, fleet.size, label)), label
    if fleet.implicit.options == 1:
        return fleet.size, np.arange(fleet.size)
    return 1, label


def join_choices(options, demand, parent):
    """Join the servers of every choice with demand (`demand` empty where all are equal)."""
    for row in range(options.shape[0]):
        if demand.size > 0 and demand[row] <= 0.0:
            continue
        first = np.int64(options[row, 0])
        for place in range(1, options.shape[1]):
            if options[row, place] != np.uint32(ABSENT):
                join(parent, first, np.int64(options[row, place]))


def demand_graph(fleet: Fleet) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the demand-weighted graph of a fleet by rows.

    Two servers are joined by an edge whose weight is the demand of the two-server choices they share. A
    choice of k > 2 options counts as an edge of weight demand / (k - 1) between every two of them, so that
    the weights at a server still sum to the demand of its choices.

    Parameters
    ----------
    fleet : Fleet
        A fleet with a table of choices.

    Returns
    -------
    indptr, neighbour, weight : numpy.ndarray
        int64 of shape (servers + 1,), then int64 and float64 of shape (entries,): server i has the entries
        indptr[i] to indptr[i + 1], sorted by neighbour. Each edge stands in both rows, with equal weights;
        parallel edges are merged.

    Raises
    ------
    InputError
        When no table lists the choices (`labkit.complete`), or their options make too many pairs to list.
    """
    if fleet.implicit is not None:
        raise InputError(f"fleet is {fleet!r}, which lists no choices; give one with a table of choices.")
    pairs = _pairs(fleet)
    if pairs > MOST_PAIRS:
        raise InputError(
            f"fleet is {fleet!r}, whose choices hold {pairs} ordered pairs of servers; "
            f"give one with at most {MOST_PAIRS}."
        )
    indptr, neighbour, weight, unit = _scaled_graph(fleet)
    return indptr, neighbour, weight * unit


def weakest_cut(fleet: Fleet) -> tuple[float, np.ndarray]:
    """Return the edge connectivity of the demand-weighted graph, and where it is attained.

    That is the least total weight of the edges between two parts of the fleet, over all ways to part it (see
    `demand_graph` for the weights and `minimum_cut` for the method).

    Parameters
    ----------
    fleet : Fleet
        Any fleet. Without a table of choices (`labkit.complete`) every choice has a demand of 1.

    Returns
    -------
    value : float
        The demand that crosses the cut; 0.0 when there are several components, infinite when a law's is
        beyond any float, NaN when the choices hold more than `MOST_PAIRS` ordered pairs of servers.
    side : numpy.ndarray
        int64: positions of the servers on the smaller side, ascending; of two equal halves the one with the
        first server. With several components the smallest, of equal ones the first. Where several cuts attain
        the value it is one of them, the same in every run. Empty when the value is NaN.

    Examples
    --------
    Two rooms of three servers each, and one choice between them:

    >>> import pandas as pd
    >>> import labkit as lk
    >>> from labkit.survey.connectivity import weakest_cut
    >>> choices = pd.DataFrame({"option_1": [0, 1, 2, 3, 4, 5, 2], "option_2": [1, 2, 0, 4, 5, 3, 3]})
    >>> value, side = weakest_cut(lk.Fleet(pd.DataFrame({"server": range(6)}), choices))
    >>> value, side.tolist()
    (1.0, [0, 1, 2])
    """
    if fleet.implicit is not None:
        shared, parts = _pair_weight(fleet.implicit)
        return _quotient((fleet.size - 1) * shared, parts), np.zeros(1, np.int64)
    count, label = components(fleet)
    if count > 1:
        return 0.0, np.flatnonzero(label == np.argmin(np.bincount(label)))
    if _pairs(fleet) > MOST_PAIRS:
        return math.nan, np.zeros(0, np.int64)
    indptr, neighbour, weight, _ = _scaled_graph(fleet)
    inside = minimum_cut(indptr, neighbour, weight)
    members = 2 * int(np.count_nonzero(inside))
    if members > fleet.size or (members == fleet.size and not inside[0]):
        inside = ~inside
    return _crossing_demand(fleet, inside), np.flatnonzero(inside)


def algebraic_connectivity(fleet: Fleet) -> float:
    """Return the second smallest eigenvalue of the Laplacian of the demand-weighted graph.

    M. Fiedler, "Algebraic connectivity of graphs", Czechoslovak Math. J. 23, 1973. See `demand_graph` for the
    weights and `second_smallest` for the method.

    Parameters
    ----------
    fleet : Fleet
        Any fleet. Without a table of choices (`labkit.complete`) every choice has a demand of 1.

    Returns
    -------
    float
        Right to a relative 1e-8; 0.0 when there are several components, infinite when a law's is beyond any
        float. NaN when it cannot be had so accurately, when the choices hold more than `MOST_PAIRS` ordered
        pairs of servers, or when demands differ by more than a factor of 1e150.

    Examples
    --------
    >>> import labkit as lk
    >>> from labkit.survey.connectivity import algebraic_connectivity
    >>> round(algebraic_connectivity(lk.hypercube(4)), 9)
    2.0
    """
    if fleet.implicit is not None:
        shared, parts = _pair_weight(fleet.implicit)
        return _quotient(fleet.size * shared, parts)
    if components(fleet)[0] > 1:
        return 0.0
    if _pairs(fleet) > MOST_PAIRS:
        return math.nan
    indptr, neighbour, weight, unit = _scaled_graph(fleet)
    if weight.min() < _LEAST_WEIGHT:
        return math.nan
    return second_smallest(indptr, neighbour, weight) * unit


def _pairs(fleet: Fleet) -> int:
    """Return how many ordered pairs of options all choices hold."""
    most = fleet.options.shape[1]
    if most == 2:
        return 2 * len(fleet.options)
    return sum(
        count * k * (k - 1)
        for k, count in enumerate(np.bincount(_option_counts(fleet.options), minlength=most + 1).tolist())
    )


def _option_counts(options: np.ndarray) -> np.ndarray:
    return np.count_nonzero(options != ABSENT, axis=1)


def _scaled_graph(fleet: Fleet) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
    """Return the demand-weighted graph and the unit of its weights: no result depends on the user's unit."""
    import scipy.sparse

    options, demand, unit = _scaled_choices(fleet)
    count = _option_counts(options)
    start = np.concatenate([[0], np.cumsum(count)])
    servers = options[options != ABSENT].astype(np.int64)
    shape = len(options), fleet.size
    share = scipy.sparse.csr_array((np.repeat(demand / (count - 1), count), servers, start), shape=shape)
    joined = (share.T @ scipy.sparse.csr_array((np.ones(len(servers)), servers, start), shape=shape)).tocsr()
    joined.sort_indices()
    # What a server shares with itself stands on the diagonal.
    others = np.repeat(np.arange(fleet.size), np.diff(joined.indptr)) != joined.indices
    kept_before = np.concatenate([[0], np.cumsum(others)])
    return (
        kept_before[joined.indptr].astype(np.int64),
        joined.indices[others].astype(np.int64),
        joined.data[others],
        unit,
    )


def _scaled_choices(fleet: Fleet) -> tuple[Any, np.ndarray, float]:
    """Return options and demands of the choices with demand, the demands in a unit near the largest."""
    if fleet.demand is None:
        options, demand = fleet.options, np.full(len(fleet.options), fleet.equal_demand)
    else:
        there = fleet.demand > 0.0
        options, demand = fleet.options[there], fleet.demand[there]
    # A power of two, so that dividing by it changes no digit.
    unit = math.ldexp(1.0, math.frexp(float(demand.max()))[1] - 1)
    return options, demand / unit, unit


def _crossing_demand(fleet: Fleet, inside: np.ndarray) -> float:
    """Return the weight between a set of servers and the others, summed choice by choice."""
    options, demand, unit = _scaled_choices(fleet)
    there = options != ABSENT
    within = np.count_nonzero(there & inside[np.where(there, options, 0)], axis=1)
    count = np.count_nonzero(there, axis=1)
    crossing = (within > 0) & (within < count)
    within, count = within[crossing], count[crossing]
    return math.fsum(demand[crossing] * (within * (count - within)) / (count - 1)) * unit


def _pair_weight(law: CompleteLaw) -> tuple[int, int]:
    """Return the weight between two servers when all choices have a demand of 1, as (dividend, divisor).

    Distinct options: C(n - 2, k - 2) choices hold both servers, each with weight 1 / (k - 1). With
    replacement: n^k - (n - 1)^k - 1 draws hold a server and at least one other, however many; their demand
    is shared with n - 1 others alike. The dividend is -1 where it would be too large to write down.
    """
    n, k = law.servers, law.options
    if k == 1:
        return 0, 1
    if law.distinct:
        size = math.lgamma(n - 1) - math.lgamma(k - 1) - math.lgamma(n - k + 1)
        return (math.comb(n - 2, k - 2) if size < _LARGEST_LOG else -1), k - 1
    return (n**k - (n - 1) ** k - 1 if (k - 1) * math.log(n) < _LARGEST_LOG else -1), n - 1


def _quotient(dividend: int, divisor: int) -> float:
    """Return a quotient of whole numbers, infinite where it is beyond any float."""
    try:
        return math.inf if dividend < 0 else dividend / divisor
    except OverflowError:
        return math.inf
