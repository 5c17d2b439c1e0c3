"""The global minimum cut of a weighted graph, exact, on arrays."""

import math

import numpy as np

from labkit.compiled import kept
from labkit.survey.heap import rise, take_first
from labkit.survey.local_flow import grow_hubs
from labkit.survey.union_find import join, number_sets

# A round that joins less than one vertex in so many calls for the next, dearer means.
FEW_AFTER_HEAVY = 4
FEW_AFTER_SCAN = 16
# Entries that a flow may look at, at first and at most; entries that a round may look at in vain, per entry.
FIRST_BUDGET = 64
MOST_BUDGET = 2**60
ALLOWANCE = 16


def minimum_cut(indptr: np.ndarray, neighbour: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Return one side of a minimum cut of a connected graph.

    Parameters
    ----------
    indptr, neighbour, weight : numpy.ndarray
        The graph by rows, symmetric, without loops: int64 of shape (vertices + 1,), then int64 and float64
        of shape (entries,), every weight above 0. At least two vertices.

    Returns
    -------
    numpy.ndarray
        bool of shape (vertices,): the vertices on one side.

    Notes
    -----
    H. Nagamochi, T. Ono and T. Ibaraki, "Implementing an efficient minimum capacity cut algorithm", Math.
    Programming 67, 1994: vertices are scanned in maximum-adjacency order. When an edge is met, the weight
    between its far end and the vertices scanned so far bounds from below every cut that parts its two ends.
    Edges whose bound reaches the best cut known are contracted, and so on until one vertex is left. Known
    cuts are single vertices and beginnings of the scanning order.

    Two additions keep the number of rounds small. Before a scan, a vertex with an edge of at least half its
    total weight joins the other end (M. Padberg and G. Rinaldi, "An efficient algorithm for the minimum
    capacity cut problem", Math. Programming 47, 1990). Where many cuts are about as small as the best, as in
    regular graphs, a scan contracts little; then short flows prove what can be contracted (`grow_hubs`).

    Every round contracts at least the last two vertices scanned, whatever the rounding, and bounds are sums
    of weights, never differences: the cut is right to a few units in the last place times the number of
    weights, however far apart they are. The worst case known is a long ring of nearly equal heavy edges with
    light chords everywhere: every proof goes round the ring, and time grows with the square of its length (5
    seconds for 20,000 vertices).
    """
    size = count = len(indptr) - 1
    indptr, neighbour, weight = indptr.copy(), neighbour.copy(), weight.copy()
    spare = np.empty_like(indptr), np.empty_like(neighbour), np.empty_like(weight)
    group, side, best = np.arange(size), np.zeros(size, bool), math.inf
    parent, total, key, bound = (
        np.empty(size, np.int64),
        np.empty(size),
        np.empty(size),
        np.empty(len(weight)),
    )
    heap, place, scanned, hub = np.empty((4, size), np.int64)
    budget = FIRST_BUDGET
    while count > 1:
        lightest = kept(weigh)(indptr, weight, count, parent, total)
        if total[lightest] < best:
            best, side = float(total[lightest]), group == lightest
        joined = kept(join_heavy)(indptr, neighbour, weight, count, parent, total)
        if FEW_AFTER_HEAVY * joined < count:
            best, length, more = kept(scan)(
                indptr, neighbour, weight, count, parent, total, best, key, heap, place, scanned, hub, bound
            )
            joined += more
            if length:
                side = scanned[group] < length
        if FEW_AFTER_SCAN * joined < count:
            better = np.zeros(count, bool)
            allowance = ALLOWANCE * int(indptr[count])
            best, more = kept(grow_hubs)(
                indptr, neighbour, weight, count, parent, best, budget, allowance, hub, better
            )
            joined += more
            if better.any():
                side = better[group]
            if FEW_AFTER_SCAN * joined < count:
                budget = min(4 * budget, MOST_BUDGET)
        count, group = _contracted(indptr, neighbour, weight, count, parent, group, spare)
        (indptr, neighbour, weight), spare = spare, (indptr, neighbour, weight)
    return side


def _contracted(
    indptr: np.ndarray,
    neighbour: np.ndarray,
    weight: np.ndarray,
    count: int,
    parent: np.ndarray,
    group: np.ndarray,
    target: tuple[np.ndarray, np.ndarray, np.ndarray],
) -> tuple[int, np.ndarray]:
    """Write the contracted graph into `target`; return its number of vertices and each vertex's new place."""
    number = np.empty(count, np.int64)
    sets = kept(number_sets)(parent, count, number)
    members = np.argsort(number, kind="stable")
    first = np.searchsorted(number[members], np.arange(sets + 1))
    kept(merge)(indptr, neighbour, weight, number, members, first, np.full(sets, -1), *target)
    return sets, number[group]


def weigh(indptr, weight, count, parent, total):
    """Put every vertex into a set of its own, sum its weights, and return the vertex with least."""
    lightest = 0
    for vertex in range(count):
        parent[vertex] = vertex
        total[vertex] = 0.0
        for entry in range(indptr[vertex], indptr[vertex + 1]):
            total[vertex] += weight[entry]
        if total[vertex] < total[lightest]:
            lightest = vertex
    return lightest


def join_heavy(indptr, neighbour, weight, count, parent, total):
    """Join every vertex to a neighbour with at least half its weight; return how many sets fewer there are.

    A cut below every single vertex's does not grow when such a vertex is moved to that neighbour's side. As
    there is one neighbour a vertex, moves can be made from the root of each tree of joins outwards, so that
    all joins hold at once.
    """
    joined = 0
    for vertex in range(count):
        heaviest = indptr[vertex]
        for entry in range(indptr[vertex], indptr[vertex + 1]):
            if weight[entry] > weight[heaviest]:
                heaviest = entry
        if 2.0 * weight[heaviest] >= total[vertex]:
            joined += join(parent, vertex, neighbour[heaviest])
    return joined


def scan(indptr, neighbour, weight, count, parent, total, best, key, heap, place, scanned, order, bound):
    """Scan once in maximum-adjacency order and join what no better cut parts.

    Returns
    -------
    best : float
        The value of the best cut known.
    length : int
        How many of the vertices scanned first are the side of that cut, 0 when it was known before.
    joined : int
        How many sets fewer there are.
    """
    for vertex in range(count):
        key[vertex] = 0.0
        heap[vertex] = place[vertex] = vertex
        scanned[vertex] = count
    value, lowest, length = 0.0, best, 0
    for step in range(count):
        vertex = take_first(heap, place, key, count - step)
        order[step] = vertex
        scanned[vertex] = step
        # The cut around the vertices scanned so far, by differences: good enough to choose a candidate.
        value += total[vertex] - 2.0 * key[vertex]
        if value < lowest and step < count - 1:
            lowest = value
            length = step + 1
        for entry in range(indptr[vertex], indptr[vertex + 1]):
            other = neighbour[entry]
            bound[entry] = 0.0
            if scanned[other] == count:
                key[other] += weight[entry]
                bound[entry] = key[other]
                rise(heap, place, key, other)
    if length > 0:
        value = 0.0
        for step in range(length):
            for entry in range(indptr[order[step]], indptr[order[step] + 1]):
                if scanned[neighbour[entry]] >= length:
                    value += weight[entry]
        if value < best:
            best = value
        else:
            length = 0
    joined = join(parent, order[count - 2], order[count - 1])
    for vertex in range(count):
        for entry in range(indptr[vertex], indptr[vertex + 1]):
            if bound[entry] >= best:
                joined += join(parent, vertex, neighbour[entry])
    return best, length, joined


def merge(indptr, neighbour, weight, number, members, first, at, new_indptr, new_neighbour, new_weight):
    """Write the graph of the sets: `members` by set, those of set i from place `first[i]` on."""
    end = 0
    for vertex in range(len(first) - 1):
        start = end
        new_indptr[vertex] = start
        for position in range(first[vertex], first[vertex + 1]):
            old = members[position]
            for entry in range(indptr[old], indptr[old + 1]):
                other = number[neighbour[entry]]
                if other == vertex:
                    continue
                if at[other] >= start:
                    new_weight[at[other]] += weight[entry]
                else:
                    at[other] = end
                    new_neighbour[end] = other
                    new_weight[end] = weight[entry]
                    end += 1
    new_indptr[len(first) - 1] = end
