"""A smoothed picture of how loads differ over a fleet: its Laplacian to the power −1/2, where that is slow.

With L the demand-weighted Laplacian and C the capacities over their mean, a rational approximation is used
that needs only solutions of (L + sC) y = x for a few shifts s:

    M^(-1/2) = (2/π) ∫ e^t (M + e^2t)^(-1) dt ≈ (2h/π) Σ √s_p (M + s_p)^(-1),   s_p = s_0 e^(-2hp),

the trapezoidal rule in t (as in N. Hale, N. J. Higham and L. N. Trefethen, "Computing A^α, log(A), and
related matrix functions by contour integrals", SIAM J. Numer. Anal. 46, 2008). Its relative error is below
2 exp(−π²/h), 1.5 % for h = 2. Without the shifts above s_0 the response falls like 1/λ beyond λ = s_0, so
that fast patterns, which are stale before they are used, are left alone.
"""

import math
import weakref
from dataclasses import dataclass
from typing import Any

import numpy as np

from labkit.compiled import compiled
from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet
from labkit.survey.demand import total_demand
from labkit.survey.elimination import Elimination, eliminate
from labkit.survey.elimination import solve as solve_eliminated
from labkit.survey.fair import fair_profile

STEP = 2.0  # h
# Shifts this far below the slowest rate all give the same picture; the last one stands for them.
ENOUGH = 20.0
MOST_SHIFTS = 12
PROBES = 4
# Elimination stops when the graph left has so many entries, or after so much work (`eliminate`).
FILL, ENTRIES = 1.5, 1_000_000
WORK = 400_000_000
# Conjugate gradients: when they stop, and how many entries they may visit in one picture.
TOLERANCE = 0.01
VISITS = 120_000_000
MOST_PAIRS = 20_000_000

_solve = compiled(solve_eliminated)


@dataclass(frozen=True)
class Smoothing:
    """What `smooth` needs to know about a fleet; arrays are not to be changed.

    Attributes
    ----------
    strength, shift : float64 arrays, shape (shifts,)
        Weights and shifts of the sum; none when no pattern is slow.
    pivot, share : float64 arrays, shapes (servers + 1, shifts) and (entries, shifts)
        Eliminations of L + sC, whose row sums go to an extra last vertex; `taken`, `order`, `start` and `far`
        are the same for all (`labkit.survey.elimination`). The other way about where vertices are left.
    steps : int
        Most steps of conjugate gradients for a shift.
    room : float64 array, shape (servers,)
        C.
    part : int64 array, shape (servers,)
        Connected part of each server; between parts nothing is smoothed.
    slow : bool array, shape (parts,)
        Whether there is a picture of a part.
    indptr, neighbour, weight : arrays
        The pairs between which choices are free, by rows.
    """

    strength: np.ndarray
    shift: np.ndarray
    taken: int
    order: np.ndarray
    start: np.ndarray
    far: np.ndarray
    pivot: np.ndarray
    share: np.ndarray
    steps: int
    room: np.ndarray
    part: np.ndarray
    slow: np.ndarray
    indptr: np.ndarray
    neighbour: np.ndarray
    weight: np.ndarray

    def kernel_part(self) -> tuple:
        """Return the arguments of `smooth` that do not change."""
        return (
            self.strength, self.shift, self.taken, self.order, self.start, self.far, self.pivot, self.share,
            self.steps, self.room, self.part, self.slow, self.indptr, self.neighbour, self.weight,
        )  # fmt: skip

    def memory(self) -> tuple[np.ndarray, ...]:
        """Return what `smooth` changes: solutions so far, and room to work."""
        size = len(self.room)
        parts = int(self.part.max()) + 1
        left = size + 1 - self.taken
        return (
            np.zeros(self.pivot.shape),
            np.empty((3, size + 1)),
            np.empty((4, left)),
            np.empty((2, parts)),
        )


@compiled
def sweep(start, far, pivot, share, due, x):
    """Solve for all shifts at once, where all vertices but the last were eliminated; by place, like `due`."""
    size = due.size - 1
    shifts = x.shape[1]
    for place in range(size + 1):
        for pole in range(shifts):
            x[place, pole] = due[place]
    for place in range(size):
        for entry in range(start[place], start[place + 1]):
            other = far[entry]
            for pole in range(shifts):
                x[other, pole] += share[entry, pole] * x[place, pole]
        for pole in range(shifts):
            x[place, pole] /= pivot[place, pole]
    for pole in range(shifts):
        x[size, pole] = 0.0
    for place in range(size - 1, -1, -1):
        for entry in range(start[place], start[place + 1]):
            other = far[entry]
            for pole in range(shifts):
                x[place, pole] += share[entry, pole] * x[other, pole]


@compiled
def smooth(
    strength, shift, taken, order, start, far, pivot, share, steps, room, part, slow,
    indptr, neighbour, weight, known, work, space, sums, field,
):  # fmt: skip
    """Replace `field`, amounts of work beyond a server's due, by its smoothed picture.

    The parts' means are taken out first. Where vertices were left by the elimination, conjugate gradients
    begin with the solutions `known` from the picture before, so that a few steps are enough.
    """
    size = field.size
    due, x, total = work[0], work[1], work[2]
    sums[:] = 0.0
    for server in range(size):
        sums[0, part[server]] += field[server]
        sums[1, part[server]] += room[server]
    square = 0.0
    for server in range(size):
        field[server] -= room[server] * (sums[0, part[server]] / sums[1, part[server]])
        field[server] = field[server] if slow[part[server]] else 0.0
        square += field[server] * field[server]
    # All in the order of elimination from here; the extra vertex has place `ground`.
    ground = 0
    for place in range(size + 1):
        total[place] = 0.0
        if order[place] < size:
            due[place] = field[order[place]]
        else:
            ground, due[place] = place, 0.0
    if taken == size:
        sweep(start, far, pivot, share, due, known)
        for place in range(size + 1):
            for pole in range(shift.size):
                total[place] += strength[pole] * (known[place, pole] - known[ground, pole])
    for pole in range(shift.size if taken < size else 0):
        # What the solution known leaves over.
        before = known[pole]
        over = amiss = 0.0
        for place in range(size + 1):
            x[place] = 0.0
            server = order[place]
            if server < size:
                x[place] = field[server] - shift[pole] * room[server] * before[server]
                for entry in range(indptr[server], indptr[server + 1]):
                    x[place] -= weight[entry] * (before[server] - before[neighbour[entry]])
            over += x[place] * x[place]
            amiss += x[place]
        x[ground] = -amiss
        tolerance = TOLERANCE * np.sqrt(square / over) if over > 0.0 else 1.0
        if tolerance < 1.0:
            _solve(
                taken, pivot[pole], start, far, share[pole], x,
                space[0], space[1], space[2], space[3], tolerance, steps,
            )  # fmt: skip
            for place in range(size + 1):
                before[order[place]] += x[place] - x[ground]
        for place in range(size + 1):
            total[place] += strength[pole] * before[order[place]]
    for place in range(size + 1):
        if place != ground:
            field[order[place]] = total[place]


_KNOWN: weakref.WeakKeyDictionary[Fleet, dict[tuple[float, float], Smoothing]] = weakref.WeakKeyDictionary()


def smoothing(fleet: Fleet, top: float, quick: float = math.inf) -> Smoothing:
    """Prepare the smoothed picture of a fleet, worked out once.

    A choice counts between those of its options that have its lowest fair level, since only among these
    can a rule pick without raising the optimum. One with k of them is a clique of pairs with demand ÷ (k − 1)
    each.

    Parameters
    ----------
    fleet : Fleet
        With a table of choices.
    top : float
        Rate up to which patterns are smoothed as by M^(-1/2), when one task a server arrives per unit of
        time; faster ones are damped.
    quick : float
        The picture is 0 in parts where even the slowest pattern is about as fast as this; without other parts
        there are no shifts.

    Returns
    -------
    Smoothing

    Raises
    ------
    InputError
        When the choices have too many pairs of options.

    Notes
    -----
    Graphs with small separators (roads, rings with chords) are eliminated to the end. Where elimination would
    fill up, it stops early, and conjugate gradients solve for what is left: on graphs without small
    separators they need few steps.
    """
    known = _KNOWN.setdefault(fleet, {})
    if (top, quick) not in known:
        known[top, quick] = _smoothing(fleet, top, quick)
    return known[top, quick]


def _smoothing(fleet: Fleet, top: float, quick: float) -> Smoothing:
    import scipy.sparse
    import scipy.sparse.csgraph

    size = fleet.size
    room = np.ones(size) if fleet.capacity is None else fleet.capacity * (size / fleet.total_capacity)
    row, column, weight = free_pairs(fleet)
    weight = weight * (size / total_demand(fleet))
    graph = _by_rows(size, row, column, weight)
    part = scipy.sparse.csgraph.connected_components(graph, directed=False)[1].astype(np.int64)
    joined = (graph.indptr.astype(np.int64), graph.indices.astype(np.int64), graph.data)
    found: list[Elimination] = []
    shifts: list[float] = []
    server = np.arange(size)
    while len(found) < MOST_SHIFTS:
        shift = top * math.exp(-STEP * (2 * len(found) + 1))
        grounded = _by_rows(
            size + 1,
            np.concatenate([row, server]),
            np.concatenate([column, np.full(size, size)]),
            np.concatenate([weight, shift * room]),
        )
        most = max(ENTRIES, int(FILL * len(grounded.data)))
        found.append(
            eliminate(
                grounded.indptr.astype(np.int64), grounded.indices.astype(np.int64), grounded.data, most, WORK
            )
        )
        shifts.append(shift)
        rates = _slowest(found[-1], room, part, joined)
        slow = rates < quick
        if not slow.any() or rates[slow].min() >= ENOUGH * shift:
            break
    last = found[-1]
    if not slow.any():
        shifts, found = [], []
    strength = (2.0 * STEP / math.pi) * np.sqrt(shifts)
    strength[-1:] /= 1.0 - math.exp(-STEP)  # all those below, too
    left = size + 1 - last.taken
    pivot = np.array([one.pivot for one in found]).reshape(len(found), size + 1)
    share = np.array([one.share for one in found]).reshape(len(found), len(last.far))
    if left == 1:
        pivot, share = np.ascontiguousarray(pivot.T), np.ascontiguousarray(share.T)
    visits = max(1, len(shifts)) * (last.start[-1] - last.start[last.taken] + 8 * left)
    return Smoothing(
        strength, np.array(shifts), last.taken, last.order, last.start, last.far,
        pivot, share,
        max(4, min(1_000, int(VISITS // visits))), room, part, slow, *joined,
    )  # fmt: skip


def _by_rows(size: int, row: np.ndarray, column: np.ndarray, weight: np.ndarray) -> Any:
    import scipy.sparse

    ends = (np.concatenate([row, column]), np.concatenate([column, row]))
    return scipy.sparse.coo_array((np.concatenate([weight, weight]), ends), shape=(size, size)).tocsr()


def _slowest(
    found: Elimination, room: np.ndarray, part: np.ndarray, joined: tuple[np.ndarray, np.ndarray, np.ndarray]
) -> np.ndarray:
    """Return for each part a rate not below its slowest, by inverse iteration; infinite for a single server.

    Where rates are below the shift it is roughly the shift or less, else within a small factor of the
    slowest, which is all that is asked of it.
    """
    size = len(room)
    whole = np.bincount(part, room)
    # Any start does that favours no pattern; the same numbers in every run.
    field = np.random.Generator(np.random.SFC64(1)).random(size) - 0.5
    indptr, neighbour, weight = joined
    rows = np.repeat(np.arange(size), np.diff(indptr))
    for _ in range(PROBES):
        field -= (np.bincount(part, room * field) / whole)[part]
        square = np.bincount(part, room * field * field)
        due = np.append(room * field / np.sqrt(np.where(square > 0.0, square, 1.0))[part], 0.0)
        due[-1] = -due.sum()
        x = due[found.order]
        found.solve(x, TOLERANCE, 200)
        field = np.empty(size + 1)
        field[found.order] = x
        field = field[:size] - field[size]
    field -= (np.bincount(part, room * field) / whole)[part]
    difference = field[rows] - field[neighbour]
    energy = np.bincount(part[rows], weight * difference * difference, minlength=len(whole)) / 2.0
    square = np.bincount(part, room * field * field)
    many = (np.bincount(part) > 1) & (square > 0.0)
    return np.where(many, energy / np.where(many, square, 1.0), math.inf)


def free_pairs(fleet: Fleet) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the pairs of servers between which choices are free, each choice's pairs with their weights.

    Parameters
    ----------
    fleet : Fleet
        With a table of choices.

    Returns
    -------
    row, column : int64 arrays, shape (pairs,)
        Servers; the same pair may come more than once.
    weight : float64 array, shape (pairs,)
        Demand ÷ (options among which the choice is free − 1).

    Raises
    ------
    InputError
        When there would be more than 20 million pairs.
    """
    options = fleet.options
    demand = np.full(len(options), fleet.equal_demand) if fleet.demand is None else fleet.demand
    there = options != ABSENT
    block = np.where(there, fair_profile(fleet).block[np.where(there, options, 0)], -1)
    free = there & (block == block.max(axis=1, keepdims=True)) & (demand > 0)[:, None]
    count = free.sum(axis=1)
    if int((count * (count - 1) // 2).sum()) > MOST_PAIRS:
        raise InputError(
            f"the choices have more than {MOST_PAIRS:,} pairs of options; use least-loaded on such a fleet."
        )
    share = demand / np.maximum(count - 1, 1)
    rows, columns, weights = [], [], []
    for one in range(options.shape[1]):
        for other in range(one + 1, options.shape[1]):
            both = free[:, one] & free[:, other]
            rows.append(options[both, one].astype(np.int64))
            columns.append(options[both, other].astype(np.int64))
            weights.append(share[both])
    return np.concatenate(rows), np.concatenate(columns), np.concatenate(weights)
