"""The slow modes of a fleet: patterns of load that local choices level out only slowly."""

import math
import weakref
from dataclasses import dataclass
from typing import Any

import numpy as np

from labkit.fleet.model import ABSENT, Fleet
from labkit.survey.demand import total_demand
from labkit.survey.fair import fair_profile

# Servers up to which all modes are worked out at once.
DENSE = 2_000
# Modes whose eigenvalue is below this share of the largest are constants of a component.
STILL = 1e-10


@dataclass(frozen=True)
class Modes:
    """Eigenvectors of the demand-weighted Laplacian, slowest first, without the constant ones.

    Attributes
    ----------
    rate : float64 array, shape (modes,)
        Eigenvalues, rising, when one task a server arrives per unit of time.
    pattern : float64 array, shape (servers, modes)
        Orthonormal eigenvectors of C^(-1/2) L C^(-1/2), C the capacities over their mean.
    """

    rate: np.ndarray
    pattern: np.ndarray


_KNOWN: weakref.WeakKeyDictionary[Fleet, dict[int, Modes]] = weakref.WeakKeyDictionary()


def slow_modes(fleet: Fleet, count: int) -> Modes:
    """Return the slowest modes of the choices that have a say in the fair split.

    A choice counts between those of its options that have its lowest fair level, since only among these
    can a rule pick without raising the optimum. One with k of them is a clique of pairs with demand ÷ (k − 1)
    each.

    Parameters
    ----------
    fleet : Fleet
        With a table of choices.
    count : int
        Most modes wanted.

    Returns
    -------
    Modes
        Fewer than `count` where the fleet has fewer.
    """
    known = _KNOWN.setdefault(fleet, {})
    if count not in known:
        known[count] = _slow_modes(fleet, count)
    return known[count]


def _slow_modes(fleet: Fleet, count: int) -> Modes:
    import scipy.sparse
    import scipy.sparse.csgraph

    size = fleet.size
    row, column, weight = _pairs(fleet)
    capacity = np.ones(size) if fleet.capacity is None else fleet.capacity * (size / fleet.total_capacity)
    scale = 1.0 / np.sqrt(capacity)
    weight = weight * (size / total_demand(fleet)) * scale[row] * scale[column]
    joined = scipy.sparse.coo_array(
        (np.concatenate([weight, weight]), (np.concatenate([row, column]), np.concatenate([column, row]))),
        shape=(size, size),
    ).tocsr()
    # The diagonal of C^(-1/2) L C^(-1/2): sums of the weights without the neighbour's factor.
    own = np.zeros(size)
    np.add.at(own, row, weight * scale[row] / scale[column])
    np.add.at(own, column, weight * scale[column] / scale[row])
    laplacian = scipy.sparse.diags_array(own).tocsr() - joined
    parts, label = scipy.sparse.csgraph.connected_components(joined, directed=False)
    rates, patterns, homes = [], [], []
    for members in np.split(
        np.argsort(label, kind="stable"), np.cumsum(np.bincount(label, minlength=parts))[:-1]
    ):
        if len(members) > 1:
            rate, pattern = _of_component(laplacian[members][:, members], count)
            rates.append(rate)
            patterns.append(pattern)
            homes.append(members)
    if not rates:
        return Modes(np.empty(0), np.empty((size, 0)))
    rate = np.concatenate(rates)
    first = np.argsort(rate, kind="stable")[:count]
    column = np.full(rate.size, -1)
    column[first] = np.arange(first.size)
    found = np.zeros((size, first.size))
    start = 0
    for members, pattern in zip(homes, patterns, strict=True):
        place = column[start : start + pattern.shape[1]]
        found[np.ix_(members, place[place >= 0])] = pattern[:, place >= 0]
        start += pattern.shape[1]
    return Modes(rate[first], found)


def _of_component(laplacian: Any, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the slowest rates and patterns of a connected part, without the constant one."""
    import scipy.linalg
    import scipy.sparse.linalg

    size = laplacian.shape[0]
    if size <= DENSE:
        rate, pattern = scipy.linalg.eigh(laplacian.toarray(), subset_by_index=(1, min(count, size - 1)))
    else:
        start = np.cos(np.arange(size) * math.sqrt(2.0))
        top = float(laplacian.diagonal().max())
        rate, pattern = scipy.sparse.linalg.eigsh(
            laplacian.tocsc(), min(count, size - 2) + 1, sigma=-1e-6 * top, which="LM", v0=start
        )
        order = np.argsort(rate, kind="stable")[1:]
        rate, pattern = rate[order], pattern[:, order]
    kept = rate > STILL * laplacian.diagonal().max()
    return rate[kept], pattern[:, kept]


def _pairs(fleet: Fleet) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the pairs of servers between which choices are free, each choice's pairs with their weights."""
    options = fleet.options
    demand = np.full(len(options), fleet.equal_demand) if fleet.demand is None else fleet.demand
    there = options != ABSENT
    block = np.where(there, fair_profile(fleet).block[np.where(there, options, 0)], -1)
    free = there & (block == block.max(axis=1, keepdims=True))
    share = demand / np.maximum(free.sum(axis=1) - 1, 1)
    rows, columns, weights = [], [], []
    for one in range(options.shape[1]):
        for other in range(one + 1, options.shape[1]):
            both = free[:, one] & free[:, other] & (demand > 0)
            rows.append(options[both, one].astype(np.int64))
            columns.append(options[both, other].astype(np.int64))
            weights.append(share[both])
    return np.concatenate(rows), np.concatenate(columns), np.concatenate(weights)
