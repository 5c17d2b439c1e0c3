"""How much of each choice's demand can be steered, and how strongly each set of a hierarchy should steer."""

import weakref
from dataclasses import dataclass

import numpy as np

from labkit.fleet.model import ABSENT, Fleet
from labkit.survey.demand import evenly_balanced, total_demand
from labkit.survey.fair import fair_profile
from labkit.survey.orthogonal_flows import Flows, potentials

# Authorities below this share of the demand are rounding.
NO_AUTHORITY = 1e-9
# An electrical split that would carry less than nothing goes only so far of the way there.
MOST_OF_THE_WAY = 0.95
# Variance of load differences under least-loaded, over that of a free field whose conductances are the
# demands: 2.1 on long rings (simulated; the Gaussian gain alone gives π/2).
ROUGHNESS = 2.1
# Gain of a rule for the authority it takes, for differences that are normal with unit variance: sgn is
# sqrt(2/π); min(1, |z| / 2) takes 0.391 on average and has slope P(|z| < 2) / 2 = 0.477.
SIGN_GAIN, LINEAR_GAIN, LINEAR_USE = 0.798, 1.22, 0.391
# Sets that vary less than this under least-loaded, over the root of the forecast mean square, are left to it
# (simulated on rings of 16 to 1,024 servers; on the largest 0.15 gives the same gap).
SMALL = 0.3
# Steering costs more than it wins up to the first efficiency and pays in full from the second on (simulated:
# networks of three and more dimensions are below, those of two between, rings and ladders above).
USELESS, FULL = 0.3, 0.5


@dataclass(frozen=True)
class Steerable:
    """Pairs of options between which a rule is free, and how much it may move.

    Attributes
    ----------
    choice, one_place, other_place : int64 arrays, shape (pairs,)
        The choice of each pair, and the positions of the two options in it.
    one, other : int64 arrays, shape (pairs,)
        The servers there.
    authority : float64 array, shape (pairs,)
        Twice what can be moved from one option to the other and back, starting from `carried`. The
        authorities in a choice sum to its demand where `carried` is even.
    usable : float64 array, shape (pairs,)
        Authority × its share of what an even split would have: what is left to a local rule then exceeds what
        it needs for the fair split.
    carried : float64 array, shape (choices, width)
        A fair split of the demand, as even as the fleet allows.
    capacity : float64 array, shape (servers,)
        Capacities with mean 1. Demands above sum to the number of servers.
    """

    choice: np.ndarray
    one_place: np.ndarray
    other_place: np.ndarray
    one: np.ndarray
    other: np.ndarray
    authority: np.ndarray
    usable: np.ndarray
    carried: np.ndarray
    capacity: np.ndarray


_KNOWN: weakref.WeakKeyDictionary[Fleet, Steerable] = weakref.WeakKeyDictionary()


def steerable_pairs(fleet: Fleet) -> Steerable:
    """Return what a rule may move between the options of each choice without leaving the fair profile.

    Only options of a choice's lowest fair level count (a rule that uses others raises the optimum).

    Parameters
    ----------
    fleet : Fleet
        With a table of choices.

    Returns
    -------
    Steerable
        Worked out once for each fleet; its arrays must not be changed.
    """
    if fleet not in _KNOWN:
        _KNOWN[fleet] = _steerable_pairs(fleet)
    return _KNOWN[fleet]


def _steerable_pairs(fleet: Fleet) -> Steerable:
    options = fleet.options
    unit = fleet.size / total_demand(fleet)
    demand = np.full(len(options), fleet.equal_demand) if fleet.demand is None else fleet.demand
    demand = demand * unit
    capacity = (
        np.ones(fleet.size)
        if fleet.capacity is None
        else fleet.capacity * (fleet.size / fleet.total_capacity)
    )
    there = options != ABSENT
    servers = np.where(there, options, 0).astype(np.int64)
    block = np.where(there, fair_profile(fleet).block[servers], -1)
    free = there & (block == block.max(axis=1, keepdims=True))
    carried = _even_split(fleet, servers, free, demand, unit)
    share = np.divide(carried, demand[:, None], out=np.zeros_like(carried), where=demand[:, None] > 0)
    found: list[tuple[np.ndarray, ...]] = []
    for first in range(options.shape[1]):
        for second in range(first + 1, options.shape[1]):
            least = np.minimum(share[:, first], share[:, second])
            # So the moves away from an option never exceed what it carries, and use all of it in even splits.
            authority = 2.0 * demand * share[:, first] * share[:, second] / np.maximum(1.0 - least, 0.5)
            rows = np.flatnonzero(
                free[:, first] & free[:, second] & (demand > 0) & (authority > NO_AUTHORITY * demand)
            )
            places = np.full(rows.size, first), np.full(rows.size, second)
            many = free[rows].sum(axis=1)
            usable = authority[rows] * np.minimum(
                1.0, authority[rows] * many * (many - 1) / (2.0 * demand[rows])
            )
            found.append(
                (rows, *places, servers[rows, first], servers[rows, second], authority[rows], usable)
            )
    choice, one_place, other_place, one, other, authority, usable = (
        np.concatenate(parts) for parts in zip(*found, strict=True)
    )
    order = np.argsort(choice, kind="stable")
    return Steerable(
        choice[order],
        one_place[order],
        other_place[order],
        one[order],
        other[order],
        authority[order],
        usable[order],
        carried,
        capacity,
    )


def _even_split(fleet, servers, free, demand, unit):
    """Return a fair split with the least sum of squares, or one on the way to it from any fair split."""
    import scipy.sparse
    from scipy.sparse.csgraph import connected_components

    fair = fair_profile(fleet).split.by_option()[:, : servers.shape[1]] * unit
    if evenly_balanced(fleet):
        return fair
    even = np.where(free, (demand / free.sum(axis=1))[:, None], 0.0)
    gain = np.bincount(servers.ravel(), (fair - even).ravel(), fleet.size)
    ones, others, weights = [], [], []
    for first in range(servers.shape[1]):
        for second in range(first + 1, servers.shape[1]):
            rows = np.flatnonzero(free[:, first] & free[:, second] & (demand > 0))
            ones.append(servers[rows, first])
            others.append(servers[rows, second])
            weights.append(even[rows, first])
    one, other, weight = (np.concatenate(parts) for parts in (ones, others, weights))
    joined = scipy.sparse.coo_array((np.ones(one.size), (one, other)), shape=(fleet.size, fleet.size))
    parts, label = connected_components(joined, directed=False)
    members = np.argsort(label, kind="stable")
    number = np.empty(fleet.size, np.int64)
    start = np.concatenate([[0], np.cumsum(np.bincount(label, minlength=parts))])
    number[members] = np.arange(fleet.size) - np.repeat(start[:-1], np.diff(start))
    by_part = np.argsort(label[one], kind="stable")
    bound = np.concatenate([[0], np.cumsum(np.bincount(label[one], minlength=parts))])
    level = np.zeros(fleet.size)
    for part in range(parts):
        inside, edges = members[start[part] : start[part + 1]], by_part[bound[part] : bound[part + 1]]
        if inside.size > 1:
            missing = gain[inside] - gain[inside].mean()
            level[inside] = potentials(number[one[edges]], number[other[edges]], weight[edges], missing)
    across = np.where(free, level[servers], 0.0)
    electrical = even + even * (across * free.sum(axis=1, keepdims=True) - across.sum(axis=1, keepdims=True))
    electrical = np.where(free, electrical, 0.0)
    short = electrical < 0
    way = 1.0
    if short.any():
        way = MOST_OF_THE_WAY * float(np.min(fair[short] / (fair[short] - electrical[short])))
    return np.maximum(fair + way * (electrical - fair), 0.0)


def equal_strengths(flows: Flows, authority: np.ndarray, part: np.ndarray) -> np.ndarray:
    """Return one strength for all sets of a connected part, the largest that the authorities allow.

    Parameters
    ----------
    flows : Flows
        Of a hierarchy.
    authority : float64 array, shape (edges,)
        Of each edge.
    part : int64 array, shape (sets,)
        Number of the connected part that each set is in.

    Returns
    -------
    float64 array, shape (sets,)
        The sum of strength × |flow| over the sets is at most the authority of each edge.
    """
    use = np.bincount(flows.edge, np.abs(flows.amount), authority.size)
    most = np.full(int(part.max(initial=-1)) + 1, np.inf)
    np.minimum.at(most, part[flows.owner], (authority / np.maximum(use, 1e-300))[flows.edge])
    return most[part]


def strengths_with_coin(
    flows: Flows, authority: np.ndarray, weight: np.ndarray, part: np.ndarray
) -> np.ndarray:
    """Return strengths for fixed probabilities beside them, where a set's variance is 1 / (G e)².

    Σ weight / e² is least for a given use of authority, Σ e Σ |f|, where e³ is in proportion to weight over
    Σ |f|.

    Parameters
    ----------
    flows, authority, part
        As for `equal_strengths`.
    weight : float64 array, shape (sets,)
        What a set's variance adds to the mean square utilisation.

    Returns
    -------
    float64 array, shape (sets,)
        The largest strengths in these ratios, in each connected part.
    """
    size = np.abs(flows.amount)
    ratio = np.cbrt(weight / np.bincount(flows.owner, size, weight.size))
    scaled = Flows(flows.owner, flows.edge, ratio[flows.owner] * size)
    return ratio * equal_strengths(scaled, authority, part)


def free_variance(flows: Flows, authority: np.ndarray) -> np.ndarray:
    """Return the forecast variance of each set's difference under least-loaded alone.

    Parameters
    ----------
    flows, authority
        As for `equal_strengths`; the authorities sum to about the number of servers.

    Returns
    -------
    float64 array, shape (sets,)
        `ROUGHNESS` × Σ f² / authority, in tasks² when each server has got one a unit of time.
    """
    sets = int(flows.owner.max(initial=-1)) + 1
    energy = np.bincount(flows.owner, flows.amount**2 / authority[flows.edge], sets)
    return ROUGHNESS * sets / authority.sum() * energy


def forecast_spread(
    flows: Flows, authority: np.ndarray, strength: np.ndarray, *, local: bool, linear: bool
) -> np.ndarray:
    """Return the forecast standard deviation of each set's difference.

    A set's difference D has noise and two pulls: its own flow's (strength e, linearised: G e / σ), and that
    of least-loaded. Statistical linearisation gives its variance v from ``1 / v = G e / sqrt(v) + 1 / V``, V
    the variance under least-loaded alone.

    Parameters
    ----------
    flows, authority
        As for `free_variance`.
    strength : float64 array, shape (sets,)
        Strengths in use.
    local : bool
        Whether tasks left over go to the lower utilisation, not by fixed probabilities.
    linear : bool
        Whether the response is a saturated linear one.

    Returns
    -------
    float64 array, shape (sets,)
        In tasks when each server has got one a unit of time; infinite where nothing pulls.
    """
    # A linear response that is full at two standard deviations takes LINEAR_USE of its strength on average.
    pull = (LINEAR_GAIN * LINEAR_USE if linear else SIGN_GAIN) * strength
    stiffness = 1.0 / free_variance(flows, authority) if local else np.zeros(strength.size)
    inverse = (pull + np.sqrt(pull**2 + 4.0 * stiffness)) / 2.0
    return np.divide(1.0, inverse, out=np.full(strength.size, np.inf), where=inverse > 0)


def optimised_strengths(
    flows: Flows,
    authority: np.ndarray,
    usable: np.ndarray,
    weight: np.ndarray,
    part: np.ndarray,
    efficiency: np.ndarray,
) -> np.ndarray:
    """Return strengths for sets beside which least-loaded evens out what is near.

    Small differences are the local rule's business: sets whose difference would vary little under it alone
    are left out. The others share what is usable equally, those with more room have more. Where sets are a
    poor image of the network, as on an expander, they win less by steering than the local rule loses:
    strengths are lower there, or 0.

    Parameters
    ----------
    flows, authority, part
        As for `equal_strengths`.
    usable : float64 array, shape (edges,)
        The part of each authority that may be used, so that the local rule can still carry the fair split.
    weight : float64 array, shape (sets,)
        What a set's variance adds to the mean square utilisation of its part.
    efficiency : float64 array, shape (parts,)
        See `labkit.survey.efficiency`.

    Returns
    -------
    float64 array, shape (sets,)
        Strengths from 0 up; the sum of strength × |flow| is at most the authority of each edge.
    """
    variance = free_variance(flows, authority)
    square = np.bincount(part, weight * variance)
    chosen = variance >= SMALL * np.sqrt(square)[part]
    # At each edge the chosen sets would share equally; each goes by the fullest edge of its own flow.
    use = np.bincount(flows.edge, chosen[flows.owner] * np.abs(flows.amount), usable.size)
    strength = np.full(variance.size, np.inf)
    np.minimum.at(strength, flows.owner, (usable / np.maximum(use, 1e-300))[flows.edge])
    reward = np.clip((efficiency - USELESS) / (FULL - USELESS), 0.0, 1.0)
    return np.where(chosen, reward[part] * strength, 0.0)
