"""Statistical linearisation: mean heights, gains and spreads of the load field under a comparing rule.

Utilisation differences over the pairs are taken as normal. A rule that sends a task to the lower of two
servers then carries, over a pair with mean difference s and standard deviation d, the share erf(s / (d √2))
of its demand, and answers small changes of s with the gain k = 2 φ(s / d) / d. With these gains the loads
obey a linear equation whose stationary law is a Gaussian free field: covariance of utilisations = inverse of
the Laplacian with conductances demand × gain (drift −½ L, noise by arrivals). Its own differences must have
the d that was assumed.

Whole loads and ties weaken the answer, so that the field's variances and the slopes that carry a given flow
are larger than this by one factor, the scale; measured on rings, the factor on slopes falls to 1 as the share
b that is carried nears 1, about like 1 + (scale − 1)(1 − |b|³).
"""

from dataclasses import dataclass

import numpy as np
from scipy.special import erf

from labkit.stationary.network import Network
from labkit.stationary.solver import DENSE, Solver

ROUNDS = 40
NEWTON = 60
SETTLED, NEARLY = 3e-3, 1e-2
# For more than `DENSE` servers spreads are estimated from so many draws of the field.
DRAWS = 24
LOCAL_STEPS = 25
_ROOT = np.sqrt(2.0)


@dataclass(frozen=True)
class Field:
    """The stationary law in linear approximation.

    Attributes
    ----------
    network : Network
    height : float64 array, shape (servers,)
        Mean utilisation of each server beyond the fleet's, in tasks (capacities over their mean).
    turned : float64 array, shape (pairs,)
        Share of each pair's demand that is turned from its first to its second server on average.
    gain : float64 array, shape (pairs,)
        Before scaling: share of the demand of a pair that turns per unit of difference.
    spread : float64 array, shape (pairs,)
        Before scaling: standard deviation of the difference over each pair.
    authority : float
        Share of the demand that the rule can turn.
    solve : Solver
        For the conductances demand × gain.
    left : float
        What the mean heights do not carry away, as a share of the surplus: 0 but where there is too much.
    """

    network: Network
    height: np.ndarray
    turned: np.ndarray
    gain: np.ndarray
    spread: np.ndarray
    authority: float
    solve: Solver
    left: float

    def draw(self, generator: np.random.Generator, count: int) -> np.ndarray:
        """Return draws of the field, before scaling, without its mean: float64 of shape (count, servers)."""
        conductance = np.sqrt(self.network.demand * self.gain)
        flow = generator.standard_normal((count, conductance.size)) * conductance
        return self.network.centred(self.solve(self.network.divergence(flow)))


def linearise(network: Network, authority: float, scale: float, generator: np.random.Generator) -> Field:
    """Return the self-consistent field of a rule that turns up to `authority` of each pair's demand.

    Parameters
    ----------
    network : Network
    authority : float
        In (0, 1].
    scale : float
        Factor on slopes that carry little, at least 1.
    generator : numpy.random.Generator
        For spreads of large fleets.
    """
    size = network.room.size
    pairs = network.demand.size
    height = np.zeros(size)
    # Foster (1949): conductance × resistance sums to servers − 1; alike on alike pairs.
    start = np.sqrt(np.pi / 2.0) * (size - 1) / (network.demand.sum() * authority)
    spread = np.full(pairs, start)
    wider = np.full(pairs, scale)
    noise = None if size <= DENSE else generator.standard_normal((DRAWS, pairs))
    for _ in range(ROUNDS):
        height = _carry(network, authority, spread * wider, height)
        part = network.slope(height) / (spread * wider)
        wider = 1.0 + (scale - 1.0) * (1.0 - np.abs(erf(part / _ROOT)) ** 3)
        gain = _gain(part, authority) / spread
        solve = network.solver(network.demand * gain)
        square = _resistances(network, network.demand * gain, solve, noise)
        # The geometric mean of the old and the new converges fast: a spread falls where its gain rises.
        new = np.sqrt(spread * np.sqrt(square))
        change = float(np.mean(np.abs(new / spread - 1.0)))
        spread = new
        if change < (SETTLED if noise is None else NEARLY):
            break
    height = _carry(network, authority, spread * wider, height)
    part = network.slope(height) / (spread * wider)
    gain = _gain(part, authority) / spread
    turned = authority * erf(part / _ROOT)
    left = network.surplus - network.divergence(0.5 * network.demand * turned)
    left_share = float(np.abs(left).sum() / max(np.abs(network.surplus).sum(), 1e-3 * size))
    solve = network.solver(network.demand * gain)
    return Field(network, height, turned, gain, spread, authority, solve, left_share)


def _gain(part: np.ndarray, authority: float) -> np.ndarray:
    """Return the gain times the spread, by the slope over the spread."""
    part = np.minimum(np.abs(part), 8.0)
    return authority * np.sqrt(2.0 / np.pi) * np.exp(-0.5 * part * part)


def _carry(network: Network, authority: float, spread: np.ndarray, height: np.ndarray) -> np.ndarray:
    """Return the mean heights whose flows carry the surplus away, by Newton's method on a convex function."""
    surplus, demand = network.surplus, network.demand
    scale = float(np.abs(surplus).sum())
    if scale < 1e-9 * network.room.size:
        return np.zeros_like(height)

    def cost(at: np.ndarray) -> float:
        slope = network.slope(at)
        part = slope / (spread * _ROOT)
        inside = slope * erf(part) + spread * np.sqrt(2.0 / np.pi) * np.exp(-part * part)
        return float(0.5 * authority * (demand @ inside) - surplus @ at)

    lowest = cost(height)
    for _ in range(NEWTON):
        slope = network.slope(height)
        flow = 0.5 * demand * authority * erf(slope / (spread * _ROOT))
        left = surplus - network.divergence(flow)
        if float(np.abs(left).sum()) < 1e-6 * scale:
            break
        step = 2.0 * network.solver(demand * _gain(slope / spread, authority) / spread)(left)
        length = 1.0
        while length > 1e-6:
            tried = cost(height + length * step)
            if tried < lowest:
                break
            length /= 2.0
        else:
            break
        height, lowest = height + length * step, tried
    return network.centred(height)


def _resistances(
    network: Network, conductance: np.ndarray, solve: Solver, noise: np.ndarray | None
) -> np.ndarray:
    """Return the effective resistance over each pair, exactly or from draws of the field."""
    if noise is None:
        return solve.resistances(network.first, network.second)
    right = network.divergence(noise * np.sqrt(conductance)).T
    # A resistance is a local matter, so few steps do.
    field = solve.descend(right, LOCAL_STEPS, 1e-3).T
    square = np.mean(network.slope(field) ** 2, axis=0)
    # What draws cannot know better: no resistance is above that of the pair alone.
    return np.minimum(square, 1.0 / conductance)
