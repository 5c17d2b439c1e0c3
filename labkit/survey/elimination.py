"""Elimination of a weighted graph's vertices, one by one, without a subtraction; solving with the result.

Taking a vertex out of a Laplacian joins its neighbours pairwise: edges of weights a and b make one of weight
a · b / (sum of the vertex's weights), the star-mesh transform of electric networks. What is left is the
Laplacian of a smaller graph. All numbers are sums, products and quotients of positive ones, so that each is
right to a few units in the last place times the number of steps, however far apart the weights are (W. K.
Grassmann, M. I. Taksar and D. P. Heyman, "Regenerative analysis and steady state distributions for Markov
chains", Oper. Res. 33, 1985).
"""

from dataclasses import dataclass

import numpy as np

from labkit.compiled import compiled, kept
from labkit.survey.heap import rise, sink, take_first

ALWAYS = 1_000  # vertices that are eliminated whatever it costs


@dataclass
class Elimination:
    """A graph's vertices in order of elimination, and what each was joined to.

    Attributes
    ----------
    taken : int
        Vertices eliminated; the others are left.
    order : int64 array, shape (vertices,)
        The vertices eliminated, in order, then those left.
    pivot : float64 array, shape (vertices,)
        By place in `order`: the sum of a vertex's weights when it was taken, or among those left.
    start : int64 array, shape (vertices + 1,)
        By place in `order`: where a vertex's entries begin.
    far, share : int64 and float64 arrays, shape (entries,)
        Neighbours when the vertex was taken, as places in `order`, and their shares of its pivot; for those
        left, the neighbours left and the weights.
    """

    taken: int
    order: np.ndarray
    pivot: np.ndarray
    start: np.ndarray
    far: np.ndarray
    share: np.ndarray

    def solve(self, x: np.ndarray, tolerance: float, most_steps: int) -> int:
        """Replace x, numbered by place in `order` and of sum 0, by a solution of Laplacian · solution = x.

        Parameters
        ----------
        x : numpy.ndarray
            float64 of shape (vertices,); changed in place.
        tolerance : float
            Conjugate gradients, if vertices are left, stop when the residual is so much shorter than what is
            to be solved.
        most_steps : int
            Steps after which they stop in any case.

        Returns
        -------
        int
            Steps of conjugate gradients taken.
        """
        work = np.empty((4, len(x) - self.taken))
        return kept(solve)(
            self.taken, self.pivot, self.start, self.far, self.share, x, *work, tolerance, most_steps
        )


def eliminate(
    indptr: np.ndarray, neighbour: np.ndarray, weight: np.ndarray, most_entries: int, most_work: int
) -> Elimination:
    """Take vertices out of a connected graph, fewest neighbours first, until one is left or it costs much.

    Parameters
    ----------
    indptr, neighbour, weight : numpy.ndarray
        The graph by rows, symmetric, without loops: int64 of shape (vertices + 1,), then int64 and float64
        of shape (entries,), every weight above 0.
    most_entries : int
        Stop when the graph left has more entries than this, unless it has few vertices.
    most_work : int
        Stop when the squares of the numbers of neighbours met add up to more than this, likewise.
    """
    size = len(indptr) - 1
    start, length = indptr[:-1].copy(), np.diff(indptr)
    key = -length.astype(float)
    heap, place, at, order = np.arange(size), np.arange(size), np.full(size, -1), np.full(size, -1)
    pivot = np.zeros(size)
    far, share, taken = kept(eliminate_some)(
        neighbour.copy(),
        weight.copy(),
        start,
        length,
        length.copy(),
        key,
        heap,
        place,
        at,
        order,
        pivot,
        np.zeros(size, bool),
        most_entries,
        most_work,
        ALWAYS,
    )
    left = np.ones(size, bool)
    left[order[:taken]] = False
    order[taken:] = np.flatnonzero(left)
    # Renumbered by place in `order`, without gaps.
    number = np.empty(size, np.int64)
    number[order] = np.arange(size)
    count = length[order]
    new_start = np.concatenate([[0], np.cumsum(count)])
    source = np.repeat(start[order] - new_start[:-1], count) + np.arange(new_start[-1])
    far, share = number[far[source]], share[source]
    rest = np.repeat(np.arange(taken, size), count[taken:]) - taken
    pivot[taken:] = np.bincount(rest, share[new_start[taken] :], minlength=size - taken)
    return Elimination(int(taken), order, pivot, new_start, far, share)


def eliminate_some(
    far,
    amount,
    start,
    length,
    room,
    key,
    heap,
    place,
    at,
    order,
    pivot,
    gone,
    most_entries,
    most_work,
    always,
):
    """Eliminate; `far` and `amount` hold each vertex's entries from `start` on, and grow.

    Returns
    -------
    tuple
        The two arrays, in which the entries of those eliminated are shares now, and the number eliminated.
    """
    count = len(start)
    end = live = len(far)
    work = taken = 0
    for vertex in range(count):
        rise(heap, place, key, vertex)
    while taken < count - 1:
        vertex = take_first(heap, place, key, count - taken)
        first, degree = start[vertex], compact(far, amount, start[vertex], length[vertex], gone, at)
        live += degree - length[vertex]
        length[vertex] = degree
        work += degree * degree
        if count - taken > always and (live > most_entries or work > most_work):
            break
        live -= degree
        gone[vertex] = True
        order[taken] = vertex
        for entry in range(first, first + degree):
            pivot[taken] += amount[entry]
        total = pivot[taken]
        taken += 1
        for entry in range(first, first + degree):
            other = far[entry]
            live -= length[other]
            if length[other] + degree > room[other]:
                length[other] = compact(far, amount, start[other], length[other], gone, at)
            if length[other] + degree > room[other]:
                room[other] = 2 * (length[other] + degree)
                if end + room[other] > len(far):
                    new_far, new_amount = (
                        np.empty(2 * (end + room[other]), np.int64),
                        np.empty(2 * (end + room[other])),
                    )
                    for position in range(end):
                        new_far[position] = far[position]
                        new_amount[position] = amount[position]
                    far, amount = new_far, new_amount
                for position in range(length[other]):
                    far[end + position] = far[start[other] + position]
                    amount[end + position] = amount[start[other] + position]
                start[other] = end
                end += room[other]
            tail = start[other] + length[other]
            for partner in range(first, first + degree):
                if partner != entry:
                    far[tail] = far[partner]
                    amount[tail] = amount[entry] * amount[partner] / total
                    tail += 1
            length[other] = tail - start[other]
            # The list of a vertex with far more neighbours waits until it is full, or its turn comes.
            if length[other] <= 8 * degree + 16:
                length[other] = compact(far, amount, start[other], length[other], gone, at)
            live += length[other]
            key[other] = -length[other]
            rise(heap, place, key, other)
            sink(heap, place, key, other, count - taken)
        for entry in range(first, first + degree):
            amount[entry] /= total
    for vertex in range(count):
        if not gone[vertex]:
            length[vertex] = compact(far, amount, start[vertex], length[vertex], gone, at)
    return far, amount, taken


@compiled
def compact(far, amount, start, length, gone, at):
    """Merge double neighbours in a vertex's entries and drop those gone; return the new number of entries."""
    end = start
    for entry in range(start, start + length):
        other = far[entry]
        if gone[other]:
            continue
        if at[other] >= 0:
            amount[at[other]] += amount[entry]
        else:
            at[other] = end
            far[end] = other
            amount[end] = amount[entry]
            end += 1
    for entry in range(start, end):
        at[far[entry]] = -1
    return end - start


def solve(taken, pivot, start, far, share, x, residual, solution, direction, image, tolerance, most_steps):
    """Solve in place; see `Elimination.solve`. Four arrays are room for conjugate gradients."""
    count = len(x)
    for vertex in range(taken):
        for entry in range(start[vertex], start[vertex + 1]):
            x[far[entry]] += share[entry] * x[vertex]
        x[vertex] /= pivot[vertex]
    left = count - taken
    mean = square = 0.0
    for vertex in range(left):
        mean += x[taken + vertex] / left
    for vertex in range(left):
        residual[vertex] = x[taken + vertex] - mean
        square += residual[vertex] * residual[vertex]
        solution[vertex] = direction[vertex] = 0.0
    steps = 0
    before = 1.0
    goal = square * tolerance * tolerance
    # Preconditioned by the diagonal. A single vertex has a residual of 0.
    while square > goal and steps < most_steps:
        now = curvature = 0.0
        for vertex in range(left):
            now += residual[vertex] * residual[vertex] / pivot[taken + vertex]
        factor = now / before if steps > 0 else 0.0
        for vertex in range(left):
            direction[vertex] = residual[vertex] / pivot[taken + vertex] + factor * direction[vertex]
        for vertex in range(left):
            value = pivot[taken + vertex] * direction[vertex]
            for entry in range(start[taken + vertex], start[taken + vertex + 1]):
                value -= share[entry] * direction[far[entry] - taken]
            image[vertex] = value
            curvature += direction[vertex] * value
        length = now / curvature
        mean = square = 0.0
        for vertex in range(left):
            solution[vertex] += length * direction[vertex]
            residual[vertex] -= length * image[vertex]
            mean += residual[vertex] / left
        # A constant is what no direction can reduce; rounding would let it grow.
        for vertex in range(left):
            residual[vertex] -= mean
            square += residual[vertex] * residual[vertex]
        before = now
        steps += 1
    for vertex in range(left):
        x[taken + vertex] = solution[vertex]
    for vertex in range(taken - 1, -1, -1):
        for entry in range(start[vertex], start[vertex + 1]):
            x[vertex] += share[entry] * x[far[entry]]
    return steps
