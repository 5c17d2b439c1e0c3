"""Flows that move the difference between the halves of one set of a hierarchy, and no other difference."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from labkit.compiled import kept
from labkit.survey.elimination import eliminate
from labkit.survey.hierarchy import Hierarchy

# Sets up to this size get a flow of least congestion, others an electrical flow; so do all sets of larger
# fleets, where linear programs would take minutes (on a torus of 1,024 servers the gap is the same).
CONGESTION, MANY = 16, 20_000
# Sets up to this size are solved as dense systems, up to the next by a sparse factorisation, beyond by
# elimination until the graph left has so many times the entries, or so much work; then so many steps at most.
DENSE, FACTORISED, FILL, WORK, STEPS = 100, 4_000, 1.5, 400_000_000, 5_000
# Amounts below this share of a set's largest are rounding.
NOTHING = 1e-12


@dataclass(frozen=True)
class Flows:
    """One flow for each set of a hierarchy, entry by entry, in the order of the sets.

    Attributes
    ----------
    owner : int32 array, shape (entries,)
        The set whose flow it is.
    edge : int32 array, shape (entries,)
        The edge it runs along.
    amount : float64 array, shape (entries,)
        Work units from the edge's first end to the other; below 0 the other way.
    """

    owner: np.ndarray
    edge: np.ndarray
    amount: np.ndarray


def orthogonal_flows(
    tree: Hierarchy, one: np.ndarray, other: np.ndarray, authority: np.ndarray, capacity: np.ndarray
) -> Flows:
    """Return, for each set, the flow of one work unit from its first half to its second.

    Each server of the first half gives a part of the unit in proportion to its capacity, each of the second
    gets such a part. So the utilisations inside a half rise or fall alike, and no other difference between
    mean utilisations of the halves of a set changes. The flow stays inside the set.

    Parameters
    ----------
    tree : Hierarchy
        Sets whose halves are connected by the edges.
    one, other : int64 arrays, shape (edges,)
        Ends of each edge.
    authority : float64 array, shape (edges,)
        What can be moved along each edge, above 0.
    capacity : float64 array, shape (servers,)
        Above 0.

    Returns
    -------
    Flows
        Of least congestion (largest share of an edge's authority) on sets of up to `CONGESTION` servers in
        fleets of up to `MANY`, otherwise electrical (least sum of squares over authorities).
    """
    place = tree.place
    first, second = place[one], place[other]
    room = capacity[tree.order]
    owner, edge, amount = [], [], []
    known: dict[bytes, np.ndarray] = {}
    most = CONGESTION if capacity.size <= MANY else 0
    edges_of = {}
    if len(tree.low):
        begin = {int(low): index for index, low in enumerate(tree.low) if tree.level[index] == 0}
        starts = np.array(sorted(begin))
        home = np.searchsorted(starts, first, side="right") - 1
        by_home = np.argsort(home, kind="stable")
        bound = np.concatenate([[0], np.cumsum(np.bincount(home, minlength=starts.size))])
        for number, low in enumerate(starts.tolist()):
            edges_of[low, int(tree.high[begin[low]])] = by_home[bound[number] : bound[number + 1]]
    for index, (low, middle, high) in enumerate(
        zip(*(x.tolist() for x in (tree.low, tree.middle, tree.high)), strict=True)
    ):
        edges = edges_of.pop((low, high))
        start, end = first[edges], second[edges]
        for here, there in ((low, middle), (middle, high)):
            if there - here > 1:
                edges_of[here, there] = edges[
                    (start >= here) & (start < there) & (end >= here) & (end < there)
                ]
        gain = room[low:high] / np.where(
            np.arange(low, high) < middle, -room[low:middle].sum(), room[middle:high].sum()
        )
        flow = _flow(start - low, end - low, authority[edges], gain, known, most)
        there = np.flatnonzero(np.abs(flow) > NOTHING * np.abs(flow).max())
        owner.append(np.full(there.size, index, np.int32))
        edge.append(edges[there].astype(np.int32))
        amount.append(flow[there])
    if not owner:
        return Flows(np.empty(0, np.int32), np.empty(0, np.int32), np.empty(0))
    return Flows(np.concatenate(owner), np.concatenate(edge), np.concatenate(amount))


def _flow(one, other, authority, gain, known, most) -> np.ndarray:
    """Return a flow along the edges of a connected set by which each server gains what it must."""
    if one.size == gain.size - 1:
        flow = np.empty(one.size)
        kept(flow_on_tree)(one, other, gain.copy(), flow)
        return flow
    if gain.size > most:
        return electrical_flow(one, other, authority, gain)
    key = b"".join(np.ascontiguousarray(part).tobytes() for part in (one, other, authority, gain))
    if key not in known:
        known[key] = least_congestion(one, other, authority, gain)
    return known[key]


def flow_on_tree(one, other, gain, flow):
    """Work out the only flow there is on a tree, leaf by leaf; `gain` is used up."""
    degree = np.zeros(gain.size, np.int64)
    # The sum (exclusive or) of the edges left at a server is the last one when one is left.
    left = np.zeros(gain.size, np.int64)
    for edge in range(one.size):
        for server in (one[edge], other[edge]):
            degree[server] += 1
            left[server] ^= edge
    for leaf in range(gain.size):
        server = leaf
        while degree[server] == 1:
            edge = left[server]
            neighbour = one[edge] + other[edge] - server
            flow[edge] = gain[server] if other[edge] == server else -gain[server]
            gain[neighbour] += gain[server]
            degree[server] = 0
            degree[neighbour] -= 1
            left[neighbour] ^= edge
            # Servers after this one in the row get their turn later; those before it are followed now.
            if neighbour > leaf:
                break
            server = neighbour


def least_congestion(
    one: np.ndarray, other: np.ndarray, authority: np.ndarray, gain: np.ndarray
) -> np.ndarray:
    """Return the flow whose largest share of an edge's authority is least, by a linear program.

    Parameters
    ----------
    one, other : int64 arrays, shape (edges,)
        Ends of each edge.
    authority : float64 array, shape (edges,)
        Above 0.
    gain : float64 array, shape (servers,)
        What each server is to gain; sums to 0.

    Returns
    -------
    float64 array, shape (edges,)
        Among flows of least congestion one with hardly more shares in all than need be.
    """
    import scipy.sparse
    from scipy.optimize import linprog

    edges = np.arange(one.size)
    authority = authority / authority.mean()
    # Unknowns: flow there, flow back, congestion.
    into = scipy.sparse.coo_array(
        (np.repeat([1.0, -1.0], one.size), (np.concatenate([other, one]), np.concatenate([edges, edges]))),
        shape=(gain.size, one.size),
    )
    none = scipy.sparse.coo_array((gain.size, 1))
    keep = scipy.sparse.hstack([into, -into, none]).tocsr()[1:]
    eye = scipy.sparse.eye_array(one.size)
    below = scipy.sparse.hstack([eye, eye, -authority[:, None]]).tocsr()
    cost = np.concatenate([np.tile(1e-3 / authority / one.size, 2), [1.0]])
    found = linprog(cost, below, np.zeros(one.size), keep, gain[1:], method="highs")
    if found.x is None:
        return electrical_flow(one, other, authority, gain)
    return _mended(one, other, authority, gain, found.x[: one.size] - found.x[one.size : -1])


def electrical_flow(
    one: np.ndarray, other: np.ndarray, authority: np.ndarray, gain: np.ndarray
) -> np.ndarray:
    """Return the flow with the least sum of squares over authorities.

    Parameters
    ----------
    one, other, authority, gain
        As for `least_congestion`.

    Returns
    -------
    float64 array, shape (edges,)
        Authority times the difference of potentials that Kirchhoff's laws give.
    """
    authority = authority / authority.mean()
    flow = _currents(one, other, authority, gain)
    return _mended(one, other, authority, gain, flow)


def _mended(one, other, authority, gain, flow):
    """Take away what a solver's tolerance left over, by one more electrical flow."""
    missing = gain - np.bincount(other, flow, gain.size) + np.bincount(one, flow, gain.size)
    if np.abs(missing).max() <= 1e-12 * np.abs(gain).max():
        return flow
    return flow + _currents(one, other, authority, missing - missing.mean())


def _currents(one, other, authority, gain):
    potential = potentials(one, other, authority, gain)
    return authority * (potential[other] - potential[one])


def solve_dense(one, other, weight, x):
    """Replace gains by potentials on a small graph, the first server's 0: elimination from the last one."""
    joined = np.zeros((x.size, x.size))
    for edge in range(one.size):
        joined[one[edge], other[edge]] += weight[edge]
        joined[other[edge], one[edge]] += weight[edge]
    for server in range(x.size - 1, 0, -1):
        total = 0.0
        for near in range(server):
            total += joined[server, near]
        for near in range(server):
            share = joined[server, near] / total
            if share > 0.0:
                x[near] += share * x[server]
                for third in range(server):
                    if third != near:
                        joined[near, third] += share * joined[server, third]
        for near in range(server):
            joined[server, near] /= total
        x[server] /= total
    x[0] = 0.0
    for server in range(1, x.size):
        for near in range(server):
            x[server] += joined[server, near] * x[near]


def potentials(one: np.ndarray, other: np.ndarray, weight: np.ndarray, gain: np.ndarray) -> np.ndarray:
    """Solve L p = gain on a connected graph, L its weighted Laplacian; the first server's potential is 0."""
    import scipy.sparse
    import scipy.sparse.linalg

    size = gain.size
    if size <= DENSE:
        potential = gain.copy()
        kept(solve_dense)(one, other, weight, potential)
        return potential
    diagonal = np.bincount(one, weight, size) + np.bincount(other, weight, size)
    every = np.arange(size)
    laplacian: Any = scipy.sparse.coo_array(
        (
            np.concatenate([-weight, -weight, diagonal]),
            (np.concatenate([one, other, every]), np.concatenate([other, one, every])),
        ),
        shape=(size, size),
    ).tocsc()
    if size > FACTORISED:
        laplacian.setdiag(0.0)
        laplacian.eliminate_zeros()
        return _by_elimination(laplacian.tocsr(), gain)
    solved = scipy.sparse.linalg.splu(
        laplacian[1:, 1:], permc_spec="MMD_AT_PLUS_A", options={"SymmetricMode": True}
    )
    return np.concatenate([[0.0], solved.solve(gain[1:])])


def _by_elimination(joined, gain):
    """Solve on a large graph: elimination as far as it goes cheaply, conjugate gradients for the rest."""
    potential = solver(joined)(gain, 1e-12)
    return potential - potential[0]


def solver(joined: Any) -> Callable[[np.ndarray, float], np.ndarray]:
    """Return a function that solves L p = gain, to a tolerance, on a connected graph.

    Parameters
    ----------
    joined : sparse array by rows, shape (servers, servers)
        Minus the weight of each edge; nothing on the diagonal.
    """
    done = eliminate(
        joined.indptr.astype(np.int64),
        joined.indices.astype(np.int64),
        -joined.data,
        int(FILL * joined.nnz),
        WORK,
    )

    def solve(gain, tolerance):
        found = gain[done.order]
        done.solve(found, tolerance, STEPS)
        potential = np.empty_like(found)
        potential[done.order] = found
        return potential

    return solve
