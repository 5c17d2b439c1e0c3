"""What tree flow knows of a fleet whatever its strengths."""

import weakref
from dataclasses import dataclass

import numpy as np

from labkit.fleet.model import Fleet
from labkit.survey.efficiency import efficiency
from labkit.survey.hierarchy import Hierarchy, halves, hierarchy
from labkit.survey.orthogonal_flows import Flows, orthogonal_flows
from labkit.survey.strengths import Steerable, steerable_pairs


@dataclass(frozen=True)
class Frame:
    """What tree flow knows of a fleet whatever its strengths.

    Attributes
    ----------
    pairs, tree, flows
        What can be steered, the nested sets, and their flows.
    part : int64 array, shape (sets,)
        The number of the connected part that each set is in.
    first, second : float64 arrays, shape (sets,)
        Capacities of the halves, in whole numbers where that can be.
    weight : float64 array, shape (sets,)
        What the variance of a set's difference adds to the mean square utilisation of its part.
    efficiency : float64 array, shape (parts,)
        See `labkit.survey.efficiency`.
    """

    pairs: Steerable
    tree: Hierarchy
    flows: Flows
    part: np.ndarray
    first: np.ndarray
    second: np.ndarray
    weight: np.ndarray
    efficiency: np.ndarray


_KNOWN: weakref.WeakKeyDictionary[Fleet, Frame] = weakref.WeakKeyDictionary()


def frame_of(fleet: Fleet) -> Frame:
    """Return sets and flows of a fleet, worked out once."""
    if fleet not in _KNOWN:
        pairs = steerable_pairs(fleet)
        ends = pairs.one, pairs.other, pairs.authority
        tree = hierarchy(fleet.size, *ends)
        flows = orthogonal_flows(tree, *ends, pairs.capacity)
        part = np.searchsorted(np.sort(tree.low[tree.level == 0]), tree.low, side="right") - 1
        first, second = halves(tree, whole_capacities(fleet))
        whole = np.zeros(int(part.max(initial=-1)) + 1)
        np.maximum.at(whole, part, first + second)
        _KNOWN[fleet] = Frame(
            pairs,
            tree,
            flows,
            part,
            first,
            second,
            first * second / (first + second) / whole[part],
            efficiency(tree, flows, part, *ends, pairs.capacity),
        )
    return _KNOWN[fleet]


def whole_capacities(fleet: Fleet) -> np.ndarray:
    """Return the capacities with the smallest as unit where that makes them whole: sums are exact then."""
    if fleet.capacity is None:
        return np.ones(fleet.size)
    ratio = fleet.capacity / fleet.capacity.min()
    whole = np.rint(ratio)
    return whole if np.allclose(ratio, whole, rtol=1e-12, atol=0.0) else ratio
