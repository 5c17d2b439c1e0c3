"""Starts drawn from the forecast law: a run from there need not first build up the slow waves of load."""

import numpy as np

from labkit.engine.placement import zero_loads
from labkit.fleet.model import Fleet
from labkit.policies.base import Policy
from labkit.randomness import STARTS, generator
from labkit.stationary.forecast import Law, law_of
from labkit.stationary.settling import loads_of


def forecast_start(
    fleet: Fleet,
    rule: Policy,
    replicates: int,
    seed: np.random.SeedSequence,
    whole: bool = True,
    first_replicate: int = 0,
) -> np.ndarray:
    """Return starting loads, one independent draw of the stationary law a replicate.

    Parameters
    ----------
    fleet : Fleet
        With a stationary state under the rule (see `labkit.forecast`).
    rule : Policy
        least-loaded or mixed.
    replicates : int
    seed : numpy.random.SeedSequence
        Replicate r draws from its stream 4.
    whole : bool
        Whether loads are kept as whole numbers; they are whole in any case.
    first_replicate : int
        The number of the replicate in the first row.

    Returns
    -------
    int64 or float64 array, shape (replicates, servers)
        The law is that of loads seen fresh. What is local is only roughly right: it settles within some tens
        of rounds of one task a server.
    """
    law = law_of(fleet, rule)
    return draw_loads(law, law.scale, replicates, seed, whole, first_replicate)


def draw_loads(
    law: Law,
    scale: float,
    replicates: int,
    seed: np.random.SeedSequence,
    whole: bool = True,
    first_replicate: int = 0,
) -> np.ndarray:
    """Return starting loads drawn from a law at another scale; see `forecast_start`."""
    room = law.field.network.room
    loads = zero_loads(room.size, replicates, whole)
    for row in range(replicates):
        draws = generator(seed, first_replicate + row, STARTS)
        height = law.field.height + np.sqrt(scale) * law.field.draw(draws, 1)
        loads[row] = loads_of(height, room, draws)[0]
    return loads
