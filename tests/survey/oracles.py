"""Slow and obvious ways to the optimum and the fair profile, and proofs by direct count.

None of them shares code with the survey. The brute force is exact: numbers become fractions, and all server
sets are gone through. The linear program is HiGHS through SciPy, the convex ones are SciPy's.
"""

import heapq
from fractions import Fraction
from math import lcm

import numpy as np
import pandas as pd
from numpy.testing import assert_allclose
from scipy.optimize import linprog, lsq_linear, minimize
from scipy.sparse import coo_array, hstack

import labkit as lk
from labkit.fleet.model import ABSENT


def fleet_of(rows, demand, capacity):
    """Return a fleet of servers 0, 1, ... from rows of options of any length."""
    width = max(2, *map(len, rows)) if len(rows) > 1 else len(rows[0])
    table = pd.DataFrame([list(row) + [None] * (width - len(row)) for row in rows], dtype="Int64")
    table.columns = [f"option_{place + 1}" for place in range(width)]
    servers = pd.DataFrame({"server": range(len(capacity)), "capacity": np.array(capacity, float)})
    return lk.Fleet(servers, table.assign(demand=np.array(demand, float)))


def demand_of(fleet):
    """Return the demand of each choice."""
    return np.full(len(fleet.options), fleet.equal_demand) if fleet.demand is None else fleet.demand


def capacity_of(fleet):
    """Return the capacity of each server."""
    return np.ones(len(fleet)) if fleet.capacity is None else fleet.capacity


def confined(fleet, chosen):
    """Return the demand of the choices all of whose options are chosen, summed one by one."""
    inside = np.append(np.asarray(chosen, bool), True)  # an absent option hinders nothing
    position = np.where(fleet.options == ABSENT, len(fleet), fleet.options.astype(np.int64))
    return sum((Fraction(amount) for amount in demand_of(fleet)[inside[position].all(axis=1)]), Fraction(0))


def ratio_of(fleet, servers):
    """Return (demand confined to the servers) / (their capacity) for positions of servers, exactly."""
    chosen = np.isin(np.arange(len(fleet)), servers)
    return confined(fleet, chosen) / sum(Fraction(amount) for amount in capacity_of(fleet)[chosen])


class BruteForce:
    """The confined demand and the capacity of every server set, as exact whole numbers.

    A set is a number whose bit v tells whether server v is in it. The demand of each choice is added to its
    own set; then, server by server, what a set without the server holds is added to the set with it.
    """

    def __init__(self, rows, demand, capacity):
        demand, capacity = [Fraction(value) for value in demand], [Fraction(value) for value in capacity]
        self.size = len(capacity)
        demand_unit = lcm(*(value.denominator for value in demand))
        capacity_unit = lcm(*(value.denominator for value in capacity))
        self.unit = Fraction(capacity_unit, demand_unit)
        self.confined = np.zeros(2**self.size, object)
        for row, amount in zip(rows, demand, strict=True):
            self.confined[sum(1 << server for server in row)] += int(amount * demand_unit)
        self.capacity = np.zeros(2**self.size, object)
        for server, amount in enumerate(capacity):
            halves = self.confined.reshape(-1, 2, 2**server)
            halves[:, 1] += halves[:, 0]
            self.capacity.reshape(-1, 2, 2**server)[:, 1] += int(amount * capacity_unit)

    def fullest(self, within=0):
        """Return the highest ratio of what a larger set adds to the set `within`, and the largest such set.

        The union of two sets that attain the highest ratio attains it, too.
        """
        sets = np.arange(2**self.size)
        larger = sets[(sets & within == within) & (sets != within)]
        work = self.confined[larger] - self.confined[within]
        room = self.capacity[larger] - self.capacity[within]
        best, union = Fraction(-1), within
        for chosen, added, space in zip(larger.tolist(), work, room, strict=True):
            left, right = added * best.denominator, space * best.numerator
            if left > right:
                best, union = Fraction(added, space), chosen
            elif left == right:
                union |= chosen
        return best * self.unit, union

    def profile(self):
        """Return the fair level of each server, and the number of its block."""
        level, block = [Fraction(0)] * self.size, [-1] * self.size
        done = number = 0
        while done != 2**self.size - 1:
            ratio, union = self.fullest(done)
            for server in range(self.size):
                if (union & ~done) >> server & 1:
                    level[server], block[server] = ratio, number
            done, number = union, number + 1
        return level, block


def _entries(fleet):
    choice, place = np.nonzero(fleet.options != ABSENT)
    return choice, fleet.options[choice, place].astype(np.int64)


def linear_program(fleet, *, method="highs", time_limit=None, tolerance=1e-10):
    """Return the optimum from the plain linear program, or None when the time is up.

    One variable an option (what it carries) and the highest utilisation, which is made as small as can be.
    """
    choice, server = _entries(fleet)
    demand, capacity = demand_of(fleet), capacity_of(fleet)
    count, total = len(choice), demand.sum()
    column, one = np.arange(count), np.ones(count)
    unit = total / capacity.sum()
    loads = hstack(
        [
            coo_array((one, (server, column)), (len(fleet), count)),
            coo_array(-capacity[:, None] * unit),
        ]
    )
    rows = coo_array((one, (choice, column)), (len(demand), count + 1))
    options = {
        "time_limit": time_limit,
        "primal_feasibility_tolerance": tolerance,
        "dual_feasibility_tolerance": tolerance,
    }
    solved = linprog(
        np.append(np.zeros(count), 1.0),
        A_ub=loads,
        b_ub=np.zeros(len(fleet)),
        A_eq=rows,
        b_eq=demand,
        method=method,
        options={name: value for name, value in options.items() if value is not None},
    )
    if solved.status == 1 and time_limit is not None:
        return None
    assert solved.status == 0, solved.message
    return solved.fun * unit


def least_squares_profile(fleet):
    """Return the fair level of each server of a fleet of two-option choices, by bounded least squares.

    The fair split is the one with the least Σ load² / capacity. Each choice has one variable, what its first
    option carries, between 0 and its demand.
    """
    demand, capacity = demand_of(fleet), capacity_of(fleet)
    change = np.zeros((len(fleet), len(demand)))
    fixed = np.zeros(len(fleet))
    for number, (one, other) in enumerate(fleet.options.astype(int)):
        change[one, number] += 1
        change[other, number] -= 1
        fixed[other] += demand[number]
    weight = 1 / np.sqrt(capacity)
    some = demand > 0  # bounds must not meet
    solved = lsq_linear(
        weight[:, None] * change[:, some],
        -weight * fixed,
        (np.zeros(some.sum()), demand[some]),
        method="bvls",
        tol=1e-15,
        max_iter=1000,
    )
    assert solved.success, solved.message
    return (change[:, some] @ solved.x + fixed) / capacity


def convex_profile(fleet):
    """Return the fair level of each server by sequential quadratic programming, good to about 1e-6."""
    choice, server = _entries(fleet)
    demand, capacity = demand_of(fleet), capacity_of(fleet)
    total = demand.sum()
    sums = np.zeros((len(demand), len(choice)))
    sums[choice, np.arange(len(choice))] = 1
    loads = np.zeros((len(fleet), len(choice)))
    loads[server, np.arange(len(choice))] = 1

    def spread(carried):
        load = loads @ carried
        return load @ (load / capacity), 2 * loads.T @ (load / capacity)

    share = demand / total
    start = share[choice] / sums.sum(axis=1)[choice]
    solved = minimize(
        spread,
        start,
        jac=True,
        method="SLSQP",
        bounds=[(0, share[number]) for number in choice],
        constraints={"type": "eq", "fun": lambda x: sums @ x - share, "jac": lambda x: sums},
        options={"ftol": 1e-15, "maxiter": 1000},
    )
    assert solved.success, solved.message
    return loads @ solved.x / capacity * total


def peeled(fleet):
    """Return the best ratio that simple peeling sees: the server of least demand per capacity goes first.

    M. Charikar, "Greedy approximation algorithms for finding dense components in a graph", 2000: at least
    half the optimum on graphs of unit capacity. Two-option choices only.
    """
    demand, capacity = demand_of(fleet).tolist(), capacity_of(fleet).tolist()
    beside = [[] for _ in capacity]
    for (one, other), amount in zip(fleet.options.tolist(), demand, strict=True):
        beside[one].append((other, amount))
        beside[other].append((one, amount))
    degree = [sum(amount for _, amount in ends) for ends in beside]
    heap = [(degree[server] / capacity[server], server) for server in range(len(capacity))]
    heapq.heapify(heap)
    gone = [False] * len(capacity)
    work, room = sum(demand), sum(capacity)
    best = work / room
    while heap:
        key, server = heapq.heappop(heap)
        if gone[server] or key != degree[server] / capacity[server]:
            continue
        gone[server] = True
        work, room = work - degree[server], room - capacity[server]
        for other, amount in beside[server]:
            if not gone[other]:
                degree[other] -= amount
                heapq.heappush(heap, (degree[other] / capacity[other], other))
        if not all(gone[other] for _, other in heap):
            best = max(best, work / room)
    return best


def assert_fair(fleet, profile, tolerance=1e-9):
    """Prove a fair profile by its definition, at any size.

    Whatever the way to it, a profile is the fair one when a split of the demand reaches it in which no choice
    sends work to a server while another of its options has a lower level. The block of each level is counted
    directly: a choice belongs to the lowest level among its options.
    """
    demand, capacity = demand_of(fleet), capacity_of(fleet)
    options = fleet.options
    there = options != ABSENT
    position = np.where(there, options, 0).astype(np.int64)
    level, block = profile.level, profile.block

    assert (np.diff(level) < 0).all()
    assert (np.unique(block) == np.arange(len(level))).all()
    assert (profile.of_server == level[block]).all()

    carried = profile.split.by_option()[:, : options.shape[1]]
    assert (profile.split.by_option()[:, options.shape[1] :] == 0).all()
    assert (carried >= 0).all()
    assert (carried[~there] == 0).all()
    assert_allclose(carried.sum(axis=1), demand, rtol=1e-11, atol=0)

    of_option = np.where(there, level[block[position]], np.inf)
    lowest = of_option.min(axis=1, keepdims=True)
    assert ((carried == 0) | (of_option <= lowest * (1 + tolerance))).all()

    load = np.bincount(position[there], carried[there], minlength=len(fleet))
    assert_allclose(load, level[block] * capacity, rtol=tolerance, atol=0)

    belongs = np.where(there, block[position], -1).max(axis=1)
    counted = np.bincount(belongs, demand, minlength=len(level))
    room = np.bincount(block, capacity, minlength=len(level))
    assert_allclose(level, counted / room, rtol=1e-11, atol=0)
    assert_allclose((level * room).sum(), demand.sum(), rtol=1e-11, atol=0)
