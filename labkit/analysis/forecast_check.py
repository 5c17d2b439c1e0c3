"""The forecast beside simulations that are shown to be stationary."""

from collections.abc import Mapping
from typing import Any

import pandas as pd

from labkit.errors import NotStationary
from labkit.fleet.model import Fleet
from labkit.stationary.chains import stationary_gap
from labkit.stationary.forecast import forecast


def forecast_table(
    fleets: Mapping[str, Fleet], *, rounds: int, rng: Any, policy: str = "least-loaded", workers: int = 1
) -> pd.DataFrame:
    """Forecast the mean gap of each fleet, and simulate it from flat and from over-dispersed starts.

    Parameters
    ----------
    fleets : mapping of str to Fleet
        Each with a stationary state (see `labkit.forecast`).
    rounds : int
        Length of the simulated chains, in rounds of one task a server.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
    policy : str
        least-loaded or mixed.
    workers : int
        Threads.

    Returns
    -------
    pandas.DataFrame
        One row a fleet: fleet, servers, forecast, forecast_error (half-width at 95 %), simulated,
        simulated_error (standard error), rhat; the last three are missing where the chains were too short.
    """
    rows = []
    for name, fleet in fleets.items():
        ahead = forecast(fleet, policy, workers=workers)
        row = {"fleet": name, "servers": fleet.size}
        row |= {"forecast": ahead.mean_gap, "forecast_error": ahead.error}
        try:
            found = stationary_gap(fleet, policy, rounds=rounds, rng=rng, workers=workers)
            row |= {"simulated": found.mean_gap, "simulated_error": found.error, "rhat": found.rhat}
        except NotStationary:
            row |= {"simulated": None, "simulated_error": None, "rhat": None}
        rows.append(row)
    return pd.DataFrame(rows).astype({"simulated": float, "simulated_error": float, "rhat": float})
