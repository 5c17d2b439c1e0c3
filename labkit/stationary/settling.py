"""A short simulation that starts from the free field: it settles what is local, and measures the scale.

The linear field has the right shape, but loads are whole numbers and ties count: its variances are too small
by a factor near 1.2 (graphs of degree 3 and more) to 1.35 (rings). The factor is measured in waves that the
short run has had time to settle, and that are long enough not to show single tasks.
"""

from dataclasses import dataclass

import numpy as np
import scipy.sparse

from labkit.engine.placement import Outcome, place_loads, zero_loads
from labkit.fleet.model import Fleet
from labkit.policies.base import Policy
from labkit.randomness import STARTS
from labkit.stationary.linearised import Field

# What the factor usually is, and the values that are believed.
USUAL, LEAST, MOST = 1.25, 1.0, 1.8
# Relative error of a factor that is not believed as it was measured.
DOUBT = 0.5
# Share of the conductance that must be on level pairs for them to be enough.
FEW = 0.05
# Waves that count take between these times to relax, in rounds, and at most a share of the run.
LONGEST, SHORTEST, SHARE = 40.0, 3.0, 0.25
# Pairs that turn more than this share of their demand on average answer otherwise.
LEVEL = 0.4
MOST_STEPS = 200
# Replicates × servers beyond which waves are not measured in more replicates.
ENOUGH = 400_000


@dataclass(frozen=True)
class Settled:
    """A short run.

    Attributes
    ----------
    outcome : Outcome
        Measured in the second half.
    draws : float64 array, shape (replicates, servers)
        The draws of the field that the replicates started from.
    scale, error : float
        Factor on the linear field's variances that the settled waves have, and its standard error.
    """

    outcome: Outcome
    draws: np.ndarray
    scale: float
    error: float


def loads_of(height: np.ndarray, room: np.ndarray, generator: np.random.Generator) -> np.ndarray:
    """Return whole loads whose utilisations are `height` above a common level, rounded by fair chance.

    Parameters
    ----------
    height : float64 array, shape (replicates, servers)
        In tasks, at a server of mean capacity.
    room : float64 array, shape (servers,)
        Capacities over their mean.
    generator : numpy.random.Generator

    Returns
    -------
    int64 array, shape (replicates, servers)
        At least 0 everywhere.
    """
    loads = zero_loads(room.size, len(height), True)
    lowest = height.min(axis=1, keepdims=True)
    loads[:] = np.floor(room * (height - lowest + 1.0) + generator.random(height.shape))
    return loads


def settle(
    fleet: Fleet,
    rule: Policy,
    field: Field,
    scale: float,
    *,
    rounds: int,
    replicates: int,
    seed: np.random.SeedSequence,
    moments: int,
    workers: int,
) -> Settled:
    """Run every replicate for some rounds of one task a server from a draw of the field."""
    size = fleet.size
    generator = np.random.Generator(
        np.random.SFC64(np.random.SeedSequence(seed.entropy, spawn_key=(*seed.spawn_key, STARTS)))
    )
    draws = field.draw(generator, replicates)
    loads = loads_of(field.height + np.sqrt(scale) * draws, field.network.room, generator)
    tasks = rounds * size
    outcome = place_loads(
        fleet, rule, tasks=tasks, seed=seed, checkpoints=spread_moments(tasks // 2, tasks, size, moments),
        loads=loads, workers=workers,
    )  # fmt: skip
    counted = max(2, min(replicates, ENOUGH // size))
    height = field.network.centred(outcome.loads[:counted] / field.network.room)
    band = _Band(field, rounds)
    found = band.energy(height - height.mean(axis=0)) * (counted / (counted - 1))
    reference = band.energy(draws[:counted])
    if not np.all(reference > 0):
        return Settled(outcome, draws, scale, DOUBT * scale)
    ratio = found.mean() / reference.mean()
    error = ratio * np.hypot(
        found.std(ddof=1) / found.mean() if found.mean() > 0 else 0.0,
        reference.std(ddof=1) / reference.mean(),
    )
    ratio, error = float(ratio), float(error) / counted**0.5
    believed = min(max(ratio, LEAST), MOST)
    if believed != ratio or band.doubted:
        error = max(error, DOUBT * believed)
    return Settled(outcome, draws, believed, error)


def spread_moments(first: int, last: int, period: int, count: int) -> np.ndarray:
    """Return increasing numbers of tasks in (first, last] that stand in every phase of the period alike."""
    near = np.linspace(first, last - period, count + 1)[1:]
    return np.unique((near + np.arange(count) * (period / count)).astype(np.int64) + 1)


class _Band:
    """The energy of waves within a band, by diffusion for a shorter and a longer time."""

    def __init__(self, field: Field, rounds: int) -> None:
        network = field.network
        conductance = network.demand * field.gain
        self.times = (SHORTEST, max(min(LONGEST, SHARE * rounds) - SHORTEST, SHORTEST))
        self.rate = scipy.sparse.diags_array(1.0 / network.room) @ field.solve.matrix
        self.step = 0.5 / float((field.solve.diagonal / network.room).max())
        level = np.abs(field.turned) <= LEVEL * field.authority
        # Where hardly any pair is level, all must serve, and are believed less.
        self.doubted = (conductance * level).sum() < FEW * conductance.sum()
        self.weight = conductance * (level | self.doubted)
        self.slope = network.slope

    def energy(self, height: np.ndarray) -> np.ndarray:
        """Return the energy of each row."""
        short = self._diffused(height.T, self.times[0])
        slope = self.slope((short - self._diffused(short, self.times[1])).T)
        return np.asarray((slope * slope) @ self.weight)

    def _diffused(self, wave: np.ndarray, time: float) -> np.ndarray:
        steps = max(1, min(int(np.ceil(time / self.step)), MOST_STEPS))
        for _ in range(steps):
            wave = wave - min(self.step, time / steps) * (self.rate @ wave)
        return wave
