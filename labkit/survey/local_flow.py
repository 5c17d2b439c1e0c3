"""Short flows that prove, where maximum-adjacency scans do not, that no better cut parts two vertices."""

import numpy as np

from labkit.compiled import compiled
from labkit.survey.heap import rise, take_first
from labkit.survey.union_find import join

NO_PATH, GIVEN_UP = -1, -2


def grow_hubs(indptr, neighbour, weight, count, parent, best, budget, allowance, hub, side):
    """Join vertices that no cut below `best` parts, as far as short flows prove it.

    A hub grows from one vertex. A neighbour joins when at least `best` flows from it into the hub. A flow
    that looks at more than `budget` entries is given up; after `allowance` entries looked at in vain, so is
    the whole. A flow that ends below `best` shows a better cut.

    Parameters
    ----------
    indptr, neighbour, weight, count : numpy.ndarray and int
        The graph by rows and its number of vertices.
    parent : numpy.ndarray
        The sets of vertices joined; hubs are joined here.
    hub : numpy.ndarray
        int64, room for `count` numbers; overwritten.
    side : numpy.ndarray
        bool of shape (count,); marks the side of a better cut when one is met.

    Returns
    -------
    best : float
        The value of the best cut known.
    joined : int
        How many sets fewer there are.
    """
    entries = indptr[count]
    far, amount, twin = np.empty(entries, np.int64), np.empty(entries), np.empty(entries, np.int64)
    seen, queue, came = np.empty(count, np.int64), np.empty(count, np.int64), np.empty(count, np.int64)
    heap, place, owner = np.empty(count, np.int64), np.empty(count, np.int64), np.empty(count, np.int64)
    flow, marked, touched = np.empty(entries), np.empty(entries, np.bool_), np.empty(entries, np.int64)
    key = np.empty(count)
    mirror(indptr, neighbour, weight, count, queue, far, amount, twin)
    for vertex in range(count):
        hub[vertex] = owner[vertex] = place[vertex] = seen[vertex] = -1
    for entry in range(entries):
        flow[entry] = 0.0
        marked[entry] = False
    joined = stamp = 0
    for seed in range(count):
        if hub[seed] >= 0 or allowance <= 0:
            continue
        hub[seed] = seed
        waiting = greet(indptr, far, amount, seed, seed, hub, owner, key, heap, place, 0)
        while waiting > 0 and allowance > 0:
            vertex = take_first(heap, place, key, waiting)
            waiting -= 1
            place[vertex] = -1
            flowing = key[vertex]
            if two_steps(indptr, far, amount, vertex, seed, hub, owner, key) >= best:
                flowing = best
            least = best - flowing
            spent = changed = 0
            while flowing < best:
                stamp += 1
                least = min(least, best - flowing)
                last, met, looked = search(
                    indptr,
                    far,
                    amount,
                    flow,
                    hub,
                    vertex,
                    seed,
                    stamp,
                    seen,
                    queue,
                    came,
                    least,
                    budget - spent,
                )
                spent += looked
                if last == GIVEN_UP:
                    break
                if last >= 0:
                    room = best - flowing
                    sent, changed = send(
                        far, amount, twin, flow, vertex, last, room, came, marked, touched, changed
                    )
                    flowing = best if sent == room else flowing + sent
                elif least > 0.0:
                    # Wide paths first: a light edge must not be filled for the sake of a shorter path.
                    least = least / 8.0 if least > 1e-3 * best else 0.0
                else:
                    value = 0.0
                    for position in range(met):
                        for entry in range(indptr[queue[position]], indptr[queue[position] + 1]):
                            if seen[far[entry]] != stamp:
                                value += amount[entry]
                    if value < best:
                        best = value
                        for other in range(count):
                            side[other] = seen[other] == stamp
                    flowing = best
            for position in range(changed):
                entry = touched[position]
                flow[entry] = flow[twin[entry]] = 0.0
                marked[entry] = False
            if flowing >= best:
                hub[vertex] = seed
                joined += join(parent, vertex, seed)
                waiting = greet(indptr, far, amount, seed, vertex, hub, owner, key, heap, place, waiting)
            else:
                allowance -= spent
    return best, joined


@compiled
def mirror(indptr, neighbour, weight, count, filled, far, amount, twin):
    """Write the graph with sorted rows and equal weights both ways, and where each entry's twin stands."""
    for vertex in range(count):
        filled[vertex] = indptr[vertex]
    for vertex in range(count):
        for entry in range(indptr[vertex], indptr[vertex + 1]):
            row = neighbour[entry]
            far[filled[row]] = vertex
            amount[filled[row]] = weight[entry]
            filled[row] += 1
    # Now the entries of a column are met in the order of its row.
    for vertex in range(count):
        filled[vertex] = indptr[vertex]
    for vertex in range(count):
        for entry in range(indptr[vertex], indptr[vertex + 1]):
            twin[entry] = filled[far[entry]]
            filled[far[entry]] += 1
            if twin[entry] < entry:
                amount[entry] = amount[twin[entry]]


@compiled
def greet(indptr, neighbour, weight, seed, newest, hub, owner, key, heap, place, waiting):
    """Let the newest member's neighbours wait for the hub, most tightly bound first; return how many wait."""
    for entry in range(indptr[newest], indptr[newest + 1]):
        other = neighbour[entry]
        if hub[other] >= 0:
            continue
        if owner[other] != seed:
            owner[other] = seed
            key[other] = 0.0
            place[other] = -1
        key[other] += weight[entry]
        if place[other] < 0:
            place[other] = waiting
            heap[waiting] = other
            waiting += 1
        rise(heap, place, key, other)
    return waiting


@compiled
def two_steps(indptr, neighbour, weight, vertex, seed, hub, owner, key):
    """Return what flows from the vertex into the hub in one or two steps."""
    flowing = key[vertex]
    for entry in range(indptr[vertex], indptr[vertex + 1]):
        other = neighbour[entry]
        if hub[other] < 0 and owner[other] == seed:
            flowing += min(weight[entry], key[other])
    return flowing


@compiled
def search(indptr, neighbour, weight, flow, hub, vertex, seed, stamp, seen, queue, came, least, budget):
    """Find a shortest path from the vertex into the hub with room for at least `least`.

    Returns
    -------
    tuple of int
        Its last entry, or NO_PATH or GIVEN_UP; the number of vertices met, `queue[:met]`; entries looked at.
    """
    seen[vertex] = stamp
    queue[0] = vertex
    head, met, looked = 0, 1, 0
    while head < met:
        if looked > budget:
            return GIVEN_UP, met, looked
        here = queue[head]
        head += 1
        for entry in range(indptr[here], indptr[here + 1]):
            looked += 1
            other = neighbour[entry]
            room = weight[entry] - flow[entry]
            if seen[other] == stamp or room <= 0.0 or room < least:
                continue
            if hub[other] == seed:
                if here == vertex:  # its own edges into the hub are counted beforehand
                    continue
                return entry, met, looked
            seen[other] = stamp
            came[other] = entry
            queue[met] = other
            met += 1
    return NO_PATH, met, looked


@compiled
def send(neighbour, weight, twin, flow, vertex, last, room, came, marked, touched, changed):
    """Send what fits, up to `room`, along the path found; return it and the number of entries touched."""
    sent = room
    narrow = entry = last
    while True:
        if weight[entry] - flow[entry] < sent:
            sent = weight[entry] - flow[entry]
            narrow = entry
        here = neighbour[twin[entry]]
        if here == vertex:
            break
        entry = came[here]
    entry = last
    while True:
        flow[entry] += sent
        if entry == narrow and sent < room:
            # Filled to the brim, so that rounding cannot leave the same path open for ever.
            flow[entry] = weight[entry]
        flow[twin[entry]] = -flow[entry]
        if not marked[entry]:
            marked[entry] = True
            touched[changed] = entry
            changed += 1
        here = neighbour[twin[entry]]
        if here == vertex:
            return sent, changed
        entry = came[here]
