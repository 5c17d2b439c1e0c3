"""The optimum: the lowest highest-utilisation that any fractional split of the demand can reach."""

import math
import weakref

import numpy as np

from labkit.compiled import kept
from labkit.fleet.model import ABSENT, Fleet

# Above this many choices the linear program takes minutes.
PRACTICAL_CHOICES = 50_000
_KNOWN: weakref.WeakKeyDictionary[Fleet, float] = weakref.WeakKeyDictionary()


def optimum_if_practical(fleet: Fleet) -> float:
    """Return the optimum utilisation for one unit of total demand, or NaN when it would take minutes.

    It equals the largest, over server sets S, of (demand confined to S) / (capacity of S), with demand scaled
    to a total of one. A fleet on which the even split of every choice fills all servers alike is balanced,
    whatever its size; others go to a linear program up to `PRACTICAL_CHOICES` choices.
    """
    if fleet not in _KNOWN:
        _KNOWN[fleet] = _optimum(fleet)
    return _KNOWN[fleet]


def _optimum(fleet: Fleet) -> float:
    mean = 1.0 / fleet.total_capacity
    if fleet.implicit is not None or evenly_balanced(fleet):
        return mean
    if fleet.options.shape[0] > PRACTICAL_CHOICES:
        return math.nan
    return solve(fleet)


def evenly_balanced(fleet: Fleet) -> bool:
    """Tell whether splitting every choice in proportion to capacity fills all servers alike."""
    capacity, demand = (np.empty(0) if given is None else given for given in (fleet.capacity, fleet.demand))
    received = np.zeros(fleet.size)
    kept(split_evenly)(fleet.options, demand, capacity, received)
    return bool(np.ptp(received) <= 1e-12 * np.max(received))


def split_evenly(options, demand, capacity, received):
    """Add to `received` the utilisation that an even split gives (arrays empty where all values are one)."""
    for row in range(options.shape[0]):
        total = 0.0
        for server in options[row]:
            if server != np.uint32(ABSENT):
                total += capacity[server] if capacity.size > 0 else 1.0
        for server in options[row]:
            if server != np.uint32(ABSENT):
                received[server] += (demand[row] if demand.size > 0 else 1.0) / total


def solve(fleet: Fleet) -> float:
    """Solve the linear program and return the ratio of the server set that it proves to be the bottleneck.

    Returns
    -------
    float
        NaN when no server set is found whose ratio agrees with the program's value to 1e-6: then the numbers
        are spread too widely for double precision to tell.
    """
    # Half a second of imports that balanced fleets do without.
    import scipy.optimize
    import scipy.sparse

    options = fleet.options
    choices = options.shape[0]
    demand = np.ones(choices) if fleet.demand is None else fleet.demand
    capacity = np.ones(fleet.size) if fleet.capacity is None else fleet.capacity
    demand = demand / demand.sum()
    # Scaled to a mean utilisation of one and a mean demand of one, whatever the user's units.
    amount, room = demand * choices, capacity * (choices / capacity.sum())
    rows, columns = np.nonzero(options != ABSENT)
    servers = options[rows, columns].astype(np.int64)
    count = rows.size
    shares = np.arange(count)
    # Variables: what each (choice, option) carries, then the highest utilisation.
    split = scipy.sparse.csr_array((np.ones(count), (rows, shares)), shape=(choices, count + 1))
    filled = scipy.sparse.csr_array(
        (
            np.concatenate([np.ones(count), -room]),
            (
                np.concatenate([servers, np.arange(fleet.size)]),
                np.concatenate([shares, np.full(fleet.size, count)]),
            ),
        ),
        shape=(fleet.size, count + 1),
    )
    cost = np.zeros(count + 1)
    cost[-1] = 1.0
    answer = scipy.optimize.linprog(
        cost, A_ub=filled, b_ub=np.zeros(fleet.size), A_eq=split, b_eq=amount, method="highs-ipm"
    )
    if not answer.success:
        return math.nan
    # The dual price of a full server is high inside the bottleneck: every cut by price is a candidate, and so
    # is the whole fleet. The ratio of a set is exact to rounding, the program's value only to its tolerance.
    prices = np.maximum(-answer.ineqlin.marginals, 0.0)
    best = 1.0 / float(capacity.sum())
    for price in np.unique(np.round(prices[prices > 0.0] / max(prices.max(), 1e-300), 9)):
        inside = prices >= prices.max() * (price - 1e-9)
        best = max(best, confined_ratio(options, demand, capacity, inside))
    return best if math.isclose(best * capacity.sum(), answer.x[-1], rel_tol=1e-6) else math.nan


def confined_ratio(
    options: np.ndarray, demand: np.ndarray, capacity: np.ndarray, inside: np.ndarray
) -> float:
    """Return (demand confined to the set) / (capacity of the set) for a mask of servers."""
    confined = np.ones(options.shape[0], bool)
    for column in options.T:
        present = column != ABSENT
        confined[present] &= inside[column[present]]
    return float(demand[confined].sum() / capacity[inside].sum())
