"""A single first-come-first-served queue in NumPy, measured as `labkit.serve` measures a fleet."""

import numpy as np
import pandas as pd


def one_queue(rng, *, load, horizon, warmup, intervals=100, replicate=0, policy="one-choice"):
    """Return measures and by_interval of one run: Poisson arrivals, exponential service of mean 1."""
    tasks = int(load * horizon + 8 * np.sqrt(load * horizon) + 50)
    arrive = np.cumsum(rng.exponential(1 / load, tasks))
    need = rng.exponential(1.0, tasks)
    # Lindley's recursion, unrolled: the wait is how far the walk is above its lowest point so far
    walk = np.r_[0.0, np.cumsum(need[:-1] - np.diff(arrive))]
    wait = walk - np.minimum.accumulate(walk)
    leave = arrive + wait + need
    edges = np.linspace(warmup, horizon, intervals + 1)
    place = np.searchsorted(edges, leave, side="left") - 1
    inside = (place >= 0) & (place < intervals)

    def sums(values):
        return np.bincount(place[inside], values[inside], intervals)

    def integral(times):
        """Return the integral, up to each edge, of the number of times that have passed."""
        passed = np.searchsorted(times, edges)
        return edges * passed - np.r_[0.0, np.cumsum(times)][passed]

    area = np.diff(integral(arrive) - integral(leave))
    table = pd.DataFrame(
        {
            "policy": policy,
            "replicate": replicate,
            "interval": np.arange(intervals),
            "start": edges[:-1],
            "end": edges[1:],
            "arrivals": np.diff(np.searchsorted(arrive, edges)),
            "completed": np.bincount(place[inside], minlength=intervals),
            "delayed": sums((wait > 0).astype(float)),
            "sojourn_sum": sums(wait + need),
            "waiting_sum": sums(wait),
            "area": area,
            "blocked": 0,
        }
    )
    total = table.sum(numeric_only=True)
    measures = pd.DataFrame(
        {
            "policy": [policy],
            "replicate": replicate,
            "load_factor": load,
            "warmup": warmup,
            "horizon": horizon,
            "sojourn_mean": total["sojourn_sum"] / total["completed"],
            "sojourn_p99": np.quantile((wait + need)[inside], 0.99),
            "waiting_mean": total["waiting_sum"] / total["completed"],
            "waiting_share": total["delayed"] / total["completed"],
            "blocked_share": 0.0,
            "queue_mean": total["area"] / (horizon - warmup),
        }
    )
    return measures, table
