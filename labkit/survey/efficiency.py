"""How well the nested sets of a hierarchy stand for the whole network."""

import numpy as np

from labkit.survey.hierarchy import Hierarchy, halves
from labkit.survey.orthogonal_flows import Flows, solver

# Energies need few digits.
TOLERANCE = 1e-3
# Signs by which four sets of a level share solutions: no product of two of them counts on average.
SIGNS = np.array([[1.0, 1, 1, 1], [1, -1, 1, -1], [1, 1, -1, -1], [1, -1, -1, 1]])
# Efficiencies are rounded to one part in so many, so that the last bits of a solver do not show.
PARTS = 64


def efficiency(
    tree: Hierarchy,
    flows: Flows,
    part: np.ndarray,
    one: np.ndarray,
    other: np.ndarray,
    authority: np.ndarray,
    capacity: np.ndarray,
) -> np.ndarray:
    """Return the energy of free flows between the halves of sets, over that of flows inside the sets.

    Both are means over all sets, weighted by what a set's difference adds to the mean square utilisation.

    Parameters
    ----------
    tree : Hierarchy
    flows : Flows
        Of its sets.
    part : int64 array, shape (sets,)
        Number of the connected part that each set is in.
    one, other : int64 arrays, shape (edges,)
        Ends of each edge.
    authority : float64 array, shape (edges,)
        Conductance of each edge, above 0.
    capacity : float64 array, shape (servers,)
        Above 0.

    Returns
    -------
    float64 array, shape (parts,)
        1 where a part is a tree, 0.8 on rings, 0.4 on a torus of two dimensions, 0.2 on random regular
        graphs. The sets of a level share four solutions, with random signs that are the same in every run, so
        it is an estimate, right to some parts in a hundred.
    """
    parts = int(part.max(initial=-1)) + 1
    first, second = halves(tree, capacity)
    weight = first * second / (first + second)
    inside = np.bincount(
        part[flows.owner], weight[flows.owner] * flows.amount**2 / authority[flows.edge], parts
    )
    free = np.zeros(parts)
    if parts == 0:
        return free
    whole = np.flatnonzero(tree.level == 0)
    whole = whole[np.argsort(tree.low[whole])]
    solve = _solver(one, other, authority, tree.order[tree.low[whole]], capacity.size)
    sign = np.random.Generator(np.random.SFC64(1)).choice([-1.0, 1.0], weight.size)
    for level in range(int(tree.level.max(initial=-1)) + 1):
        # The sets of a level have no server in common.
        sets = np.flatnonzero(tree.level == level)
        sets = sets[np.argsort(tree.low[sets])]
        turn = np.arange(sets.size) % len(SIGNS)
        tries = SIGNS[: 1 if sets.size == 1 else len(SIGNS)]
        for signs in tries:
            height = (
                signs[turn] * sign[np.arange(sets.size) // len(SIGNS)] * np.sqrt(weight[sets] / len(tries))
            )
            slope = np.zeros(capacity.size + 1)
            np.add.at(slope, tree.low[sets], height / first[sets])
            np.add.at(slope, tree.middle[sets], -height / first[sets] - height / second[sets])
            np.add.at(slope, tree.high[sets], height / second[sets])
            gain = np.zeros(capacity.size)
            gain[tree.order] = np.cumsum(slope[:-1]) * capacity[tree.order]
            worked = np.concatenate([[0.0], np.cumsum((gain * solve(gain, TOLERANCE))[tree.order])])
            free += worked[tree.high[whole]] - worked[tree.low[whole]]
    return np.minimum(1.0, np.rint(PARTS * free / inside) / PARTS)


def _solver(one, other, authority, begin, size):
    """Return a function that solves L p = gain, the gains of each part summing to 0."""
    import scipy.sparse

    # A chain through the parts, single servers too, carries nothing, as the gains of each part sum to 0.
    alone = np.flatnonzero(np.bincount(one, minlength=size) + np.bincount(other, minlength=size) == 0)
    chain = np.concatenate([begin, alone])
    ends = np.concatenate([one, other, chain[:-1], chain[1:]])
    others = np.concatenate([other, one, chain[1:], chain[:-1]])
    weight = np.concatenate([authority, authority, np.ones(2 * (chain.size - 1))])
    return solver(scipy.sparse.coo_array((-weight, (ends, others)), shape=(size, size)).tocsr())
