"""A hierarchy of server sets: each connected part of a graph halved again and again, in connected halves."""

import math
from dataclasses import dataclass

import numpy as np

from labkit.compiled import compiled, kept
from labkit.errors import InputError

# Sets up to this size are halved by growing a half from each of their servers.
SMALL = 64
# Sets up to this size may be halved by a dense eigenvector.
DENSE = 400
# A half below this share of its set makes the other ways be tried, too.
EVEN_ENOUGH = 0.4
# Sets deeper than DEEPEST × log2(servers) + SLACK: the tables would no longer be short.
DEEPEST, SLACK = 4, 8


@dataclass(frozen=True)
class Hierarchy:
    """Nested server sets, each but the single servers with two halves.

    Set s holds the servers ``order[low[s]:high[s]]``; its halves end and begin at ``middle[s]``. Sets come
    before the sets inside them.

    Attributes
    ----------
    order : int64 array, shape (servers,)
        All servers; those of one set stand together.
    low, middle, high : int64 arrays, shape (sets,)
        Where the halves of each set begin and end in `order`.
    level : int64 array, shape (sets,)
        0 for a whole connected part, one more for each halving.
    """

    order: np.ndarray
    low: np.ndarray
    middle: np.ndarray
    high: np.ndarray
    level: np.ndarray

    @property
    def place(self) -> np.ndarray:
        """The inverse of `order`: where each server stands in it."""
        place = np.empty_like(self.order)
        place[self.order] = np.arange(self.order.size)
        return place


def halves(tree: Hierarchy, capacity: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the capacities of the first and of the second half of each set, float64 (sets,)."""
    passed = np.concatenate([[0.0], np.cumsum(capacity[tree.order])])
    return passed[tree.middle] - passed[tree.low], passed[tree.high] - passed[tree.middle]


def hierarchy(size: int, one: np.ndarray, other: np.ndarray, weight: np.ndarray) -> Hierarchy:
    """Halve each connected part of a graph, then its halves, down to single servers.

    Parameters
    ----------
    size : int
        Number of servers.
    one, other : int64 arrays, shape (edges,)
        Ends of each edge; parallel edges are allowed.
    weight : float64 array, shape (edges,)
        Above 0; cuts through little weight are preferred.

    Returns
    -------
    Hierarchy
        Both halves of every set are connected. Servers without edges are in no set.

    Raises
    ------
    InputError
        When the halves are so uneven that the sets nest too deeply, as around a hub with many single servers.

    Notes
    -----
    Hierarchical decompositions for routing go back to Räcke (2002, from memory). The halves are those of
    METIS (Karypis & Kumar 1998) where `pymetis` can be imported, else of a sweep along the slowest
    eigenvector or by distance. In small sets a half grows from each server in turn, and the best is kept.
    Whatever a halving leaves unconnected changes sides.
    """
    import scipy.sparse
    import scipy.sparse.csgraph

    joined = scipy.sparse.coo_array((np.ones(one.size, np.int8), (one, other)), shape=(size, size))
    parts, label = scipy.sparse.csgraph.connected_components(joined, directed=False)
    order = np.argsort(label, kind="stable")
    start = np.concatenate([[0], np.cumsum(np.bincount(label, minlength=parts))])
    place = np.empty(size, np.int64)
    place[order] = np.arange(size)
    by_part = np.argsort(label[one], kind="stable") if one.size else np.empty(0, np.int64)
    of_part = np.concatenate([[0], np.cumsum(np.bincount(label[one], minlength=parts))])
    rows: list[tuple[int, int, int, int]] = []
    for part in range(parts):
        low, high = int(start[part]), int(start[part + 1])
        if high - low > 1:
            edges = by_part[of_part[part] : of_part[part + 1]]
            _halve_down(
                order, low, high, place[one[edges]] - low, place[other[edges]] - low, weight[edges], rows
            )
    table = np.array(rows, np.int64).reshape(-1, 4)
    table = table[np.argsort(table[:, 3], kind="stable")]
    return Hierarchy(order, *(np.ascontiguousarray(column) for column in table.T))


def _halve_down(order, low, high, one, other, weight, rows) -> None:
    """Halve a connected set and all sets inside it; rows of (low, middle, high, level) are added."""
    most = DEEPEST * math.log2(high - low) + SLACK
    waiting = [(low, high, 0, one, other, weight)]
    while waiting:
        low, high, level, one, other, weight = waiting.pop()
        if level > most:
            raise InputError(
                f"fleet's choices around server number {int(order[low])} cannot be halved evenly into "
                f"connected parts (sets of servers would nest more than {level} deep, as around a hub); use "
                f"smooth-feedback or least-loaded there."
            )
        second = halve(high - low, one, other, weight)
        members = order[low:high]
        middle = high - int(np.count_nonzero(second))
        order[low:high] = np.concatenate([members[~second], members[second]])
        rows.append((low, middle, high, level))
        # Numbers of the servers inside their own half.
        number = np.where(second, np.cumsum(second), np.cumsum(~second)) - 1
        for begin, end, inside in ((low, middle, ~second), (middle, high, second)):
            if end - begin > 1:
                here = inside[one] & inside[other]
                waiting.append((begin, end, level + 1, number[one[here]], number[other[here]], weight[here]))


def halve(size: int, one: np.ndarray, other: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Return which servers of a connected graph are in the second of two connected halves, bool (size,)."""
    if size == 2:
        return np.array([False, True])
    if size <= SMALL:
        second = np.empty(size, bool)
        kept(grow_halves)(size, one, other, weight, second)
        return second
    graph = _by_rows(size, one, other, weight)
    best, score = None, (0.0, 0.0)
    for way in (_partitioned, _by_eigenvector, _by_distance, _by_one_edge):
        second = way(size, graph)
        if second is None:
            continue
        second = _connected(graph, second)
        least = min(second.sum(), size - second.sum()) / size
        # Evenness comes before the cut, in steps.
        found = (-math.floor(least * 20), float(weight[second[one] != second[other]].sum()))
        if best is None or found < score:
            best, score = second, found
        if least >= EVEN_ENOUGH:
            break
    assert best is not None
    return best if not best[0] else ~best


def grow_halves(size, one, other, weight, second):
    """Halve a small connected set: grow a half from each server in turn, keep the most even, thinnest cut.

    The half takes the server with the largest share of its weight inside, the first of equal ones. What it
    cuts off from the largest rest joins it.
    """
    joined = np.zeros((size, size))
    for edge in range(one.size):
        joined[one[edge], other[edge]] += weight[edge]
        joined[other[edge], one[edge]] += weight[edge]
    whole = joined.sum(axis=1)
    inside, taken = np.empty(size, np.bool_), np.empty(size, np.bool_)
    pull = np.empty(size)
    queue = np.empty(size, np.int64)
    fewest, thinnest = -1, 0.0
    for start in range(size):
        inside[:] = False
        pull[:] = 0.0
        newest = start
        for _ in range(size // 2):
            inside[newest] = True
            best = 0.0
            following = -1
            for server in range(size):
                pull[server] += joined[newest, server]
                if not inside[server] and pull[server] > best * whole[server] * (1.0 + 1e-9):
                    best = pull[server] / whole[server]
                    following = server
            newest = following
        # The largest piece of the rest stays outside.
        taken[:] = inside
        largest, home = 0, -1
        for server in range(size):
            if not taken[server]:
                count = walk(joined, taken, server, queue)
                if count > largest:
                    largest, home = count, server
        taken[:] = inside
        walk(joined, taken, home, queue)
        cut = 0.0
        for place in range(largest):
            cut += whole[queue[place]]
            for other_place in range(largest):
                cut -= joined[queue[place], queue[other_place]]
        least = min(largest, size - largest)
        if least > fewest or (least == fewest and cut < thinnest * (1.0 - 1e-9)):
            fewest, thinnest = least, cut
            second[:] = False
            for place in range(largest):
                second[queue[place]] = True
    if second[0]:
        for server in range(size):
            second[server] = not second[server]


@compiled
def walk(joined, taken, start, queue):
    """Take all servers joined to `start` outside what is taken; return how many, listed in `queue`."""
    taken[start] = True
    queue[0] = start
    count, done = 1, 0
    while done < count:
        for server in range(taken.size):
            if not taken[server] and joined[queue[done], server] > 0.0:
                taken[server] = True
                queue[count] = server
                count += 1
        done += 1
    return count


def _by_rows(size, one, other, weight):
    import scipy.sparse

    ends, starts = np.concatenate([one, other]), np.concatenate([other, one])
    return scipy.sparse.coo_array(
        (np.concatenate([weight, weight]), (ends, starts)), shape=(size, size)
    ).tocsr()


def _partitioned(size, graph):
    """Halve by METIS; None where it is not installed."""
    try:
        import pymetis
    except ImportError:
        return None
    scale = graph.data.max()
    whole = np.maximum(1, np.rint(graph.data * (1000.0 / scale))).astype(np.int64)
    found = pymetis.part_graph(
        2,
        pymetis.CSRAdjacency(graph.indptr, graph.indices),
        eweights=whole.tolist(),
        options=pymetis.Options(seed=1, ncuts=1),
    )
    return np.asarray(found.vertex_part) == 1


def _by_eigenvector(size, graph):
    """Halve at the median of the slowest eigenvector (Fiedler 1973); None for large sets."""
    if size > DENSE:
        return None
    dense = -graph.toarray()
    np.fill_diagonal(dense, 0.0)
    dense[np.diag_indices(size)] = -dense.sum(axis=1)
    vector = np.linalg.eigh(dense)[1][:, 1]
    # Equal entries up to rounding keep the order of the servers.
    return _later_half(np.argsort(np.round(vector, 9), kind="stable"))


def _by_distance(size, graph):
    """Halve by distance from a server at the rim."""
    from scipy.sparse.csgraph import breadth_first_order

    rim = breadth_first_order(graph, 0, directed=False, return_predecessors=False)[-1]
    return _later_half(breadth_first_order(graph, rim, directed=False, return_predecessors=False))


def _by_one_edge(size, graph):
    """Part at the edge of a spanning tree that leaves the most even parts; both are connected."""
    from scipy.sparse.csgraph import breadth_first_order

    walk, before = breadth_first_order(graph, 0, directed=False)
    below = np.ones(size, np.int64)
    for server in walk[:0:-1].tolist():
        below[before[server]] += below[server]
    top = walk[1 + int(np.argmin(np.abs(2 * below[walk[1:]] - size)))]
    second = np.zeros(size, bool)
    second[top] = True
    for server in walk[1:].tolist():
        second[server] |= second[before[server]] and server != top
    return second


def _later_half(order: np.ndarray) -> np.ndarray:
    second = np.zeros(order.size, bool)
    second[order[(order.size + 1) // 2 :]] = True
    return second


def _connected(graph, second: np.ndarray) -> np.ndarray:
    """Move what a half has beside its largest connected piece to the other half: both are connected then."""
    from scipy.sparse.csgraph import connected_components

    second = second.copy()
    if not second.any():
        second[-1] = True
    elif second.all():
        second[0] = False
    # After the first half is in one piece, every piece of the second but the largest touches the first.
    for side in (False, True):
        inside = np.flatnonzero(second == side)
        count, label = connected_components(graph[inside][:, inside], directed=False)
        if count > 1:
            second[inside[label != np.argmax(np.bincount(label))]] = not side
    return second
