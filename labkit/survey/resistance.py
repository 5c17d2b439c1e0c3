"""The total effective resistance of the choice graph, and what a link does to it.

Each two-server choice is a conductor as strong as its demand; a choice of k servers is one between every two
of them, each of strength demand / (k − 1). With L the Laplacian of one connected part of n servers, the
effective resistances of all its pairs of servers sum to n · trace(L⁺), the Kirchhoff index (D. J. Klein and
M. Randić, "Resistance distance", J. Math. Chem. 12, 1993).
"""

from functools import cached_property

import numpy as np

from labkit.compiled import kept
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.survey.split import Split, split_of

# Servers up to which a dense inverse is quick and fits in memory.
MOST_SERVERS = 4_000
_ACCURATE = 1e-7


class Resistances:
    """The pseudo-inverse of a fleet's Laplacian, part by part.

    Attributes
    ----------
    finite : float
        Sum of the effective resistances over all pairs of servers in the same connected part.
    parts : int
        Number of connected parts.
    """

    def __init__(self, fleet: Fleet) -> None:
        from scipy.sparse import coo_array
        from scipy.sparse.csgraph import connected_components

        self.split: Split = split_of(fleet)
        size = fleet.size
        matrix = np.zeros((size, size))
        kept(add_laplacian)(self.split.servers, self.split.demand, matrix)
        one, other = np.nonzero(matrix)
        graph = coo_array((np.ones(len(one), np.int8), (one, other)), (size, size))
        self.parts, label = connected_components(graph, directed=False)
        self.part = label.astype(np.int32)
        self.size = np.bincount(label).astype(np.float64)
        self.trace = np.zeros(self.parts)
        self.inverse = np.zeros((size, size))
        for number in range(self.parts):
            members = np.flatnonzero(label == number)
            solved = _pseudo_inverse(matrix[np.ix_(members, members)])
            self.trace[number] = np.trace(solved)
            self.inverse[np.ix_(members, members)] = solved
        self.finite = float(self.size @ self.trace)

    @cached_property
    def square(self) -> np.ndarray:
        """The product of the pseudo-inverse with itself."""
        return self.inverse @ self.inverse

    @property
    def total(self) -> float:
        """Sum of the effective resistances over all pairs of servers, infinite when not all are connected."""
        return self.finite if self.parts == 1 else np.inf

    def after(
        self, first: np.ndarray, second: np.ndarray, scale: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return what a link between each pair of servers would do, fed by the choices at its ends.

        Parameters
        ----------
        first, second : int32 arrays, shape (pairs,)
        scale : float64 array, shape (pairs,)
            The link takes this times the mean demand of a choice, at most half of what is at its ends.

        Returns
        -------
        amount : float64 array
            What the link takes in all.
        joined : float64 array
            Pairs of servers that were not connected before and then are.
        finite : float64 array
            Sum of the effective resistances over all connected pairs afterwards.
        """
        amount, joined, finite = (np.empty(len(first)) for _ in range(3))
        split = self.split
        kept(after_links)(
            first, second, scale * split.demand.mean(), split.servers, split.head, split.following,
            split.demand, self.inverse, self.square, self.part, self.size, self.trace, amount, joined, finite,
        )  # fmt: skip
        return amount, joined, finite


def _pseudo_inverse(laplacian: np.ndarray) -> np.ndarray:
    """Return the pseudo-inverse of the Laplacian of one connected part."""
    from scipy.linalg import LinAlgError, cho_factor, cho_solve

    size = len(laplacian)
    # L + (w/n)·11ᵀ has the inverse L⁺ + 1/(w·n)·11ᵀ; w keeps both of one scale.
    weight = float(np.trace(laplacian)) / size if size > 1 else 1.0
    try:
        factor = cho_factor(laplacian + weight / size, check_finite=False)
    except LinAlgError:
        found = np.full((size, size), np.nan)
    else:
        found = cho_solve(factor, np.eye(size), check_finite=False)
        found = (found + found.T) / 2 - 1.0 / (weight * size)
    trial = np.arange(size) / size - (size - 1) / (2 * size)
    if not np.abs(laplacian @ (found @ trial) - trial).max() <= _ACCURATE:
        raise InputError(
            "fleet has demands so far apart that double precision cannot tell its effective resistances; "
            "leave out the smallest ones or survey a part of the fleet."
        )
    return found


def add_laplacian(servers, demand, matrix):
    """Add the conductors of all choices to a matrix of zeros, shape (servers, servers)."""
    for choice in range(servers.shape[0]):
        options = 0
        while servers[choice, options] >= 0:
            options += 1
        strength = demand[choice] / (options - 1)
        for place in range(options):
            for later in range(place + 1, options):
                one = servers[choice, place]
                other = servers[choice, later]
                matrix[one, one] += strength
                matrix[other, other] += strength
                matrix[one, other] -= strength
                matrix[other, one] -= strength


def after_links(
    first, second, wanted, servers, head, following, demand, inverse, square, part, size, trace,
    amount, joined, finite,
):  # fmt: skip
    """Work out every link on its own, see `Resistances.after`; the last three arrays are filled.

    A link changes L by E D Eᵀ, where E picks the servers of the choices at its ends. Then the trace of L⁺
    falls by tr((1 + D G)⁻¹ D H) with G = Eᵀ L⁺ E and H = Eᵀ (L⁺)² E (Woodbury's identity).
    """
    width = servers.shape[1]
    total = 0.0
    for number in range(size.size):
        total += size[number] * trace[number]
    place = np.full(head.size, -1, np.int64)
    touched = np.empty(head.size, np.int64)
    seen = np.full(servers.shape[0], -1, np.int64)
    rows = np.empty(servers.shape[0], np.int64)
    for number in range(first.size):
        ends = (first[number], second[number])
        at_ends = 0.0
        found = 0
        count = 0
        for end in ends:
            entry = head[end]
            while entry >= 0:
                choice = entry // width
                if seen[choice] != number:
                    seen[choice] = number
                    at_ends += demand[choice]
                    rows[found] = choice
                    found += 1
                    for server in servers[choice]:
                        if server >= 0 and place[server] < 0:
                            place[server] = count
                            touched[count] = server
                            count += 1
                entry = following[entry]
        taken = min(wanted[number], at_ends / 2.0)
        amount[number] = taken
        change = np.zeros((count, count))
        for choice in rows[:found]:
            options = 0
            while servers[choice, options] >= 0:
                options += 1
            strength = taken * (demand[choice] / at_ends) / (options - 1)
            for one in servers[choice, :options]:
                for other in servers[choice, :options]:
                    if one != other:
                        change[place[one], place[one]] -= strength
                        change[place[one], place[other]] += strength
        one = place[ends[0]]
        other = place[ends[1]]
        near = part[ends[0]] == part[ends[1]]
        if near:
            change[one, one] += taken
            change[other, other] += taken
            change[one, other] -= taken
            change[other, one] -= taken
        between = np.empty((count, count))
        system = np.empty((count, count))
        for row in range(count):
            for column in range(count):
                between[row, column] = inverse[touched[row], touched[column]]
        system[:] = np.dot(change, between)
        for row in range(count):
            system[row, row] += 1.0
        solved = np.linalg.solve(system, change)
        # By how much the trace falls in the part of each end.
        fall_one = 0.0
        fall_other = 0.0
        for row in range(count):
            fall = 0.0
            for column in range(count):
                fall += solved[row, column] * square[touched[column], touched[row]]
            if part[touched[row]] == part[ends[0]]:
                fall_one += fall
            else:
                fall_other += fall
        joined[number] = 0.0
        finite[number] = total - size[part[ends[0]]] * fall_one
        if not near:
            here = size[part[ends[0]]]
            there = size[part[ends[1]]]
            joined[number] = here * there
            finite[number] -= there * fall_other
            # Every new pair is connected through the link: sums of resistances to its two ends, and its own.
            left = np.dot(between[one], np.dot(solved, between[:, one].copy()))
            right = np.dot(between[other], np.dot(solved, between[:, other].copy()))
            finite[number] += there * (trace[part[ends[0]]] - fall_one + here * (between[one, one] - left))
            finite[number] += here * (
                trace[part[ends[1]]] - fall_other + there * (between[other, other] - right)
            )
            finite[number] += here * there / taken
        for server in touched[:count]:
            place[server] = -1
