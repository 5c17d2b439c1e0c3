"""Tables of measures that look like those of lk.place, made from plain draws."""

import numpy as np
import pandas as pd


def measures(
    policies: dict[str, float], *, replicates: int = 400, tasks: tuple[int, ...] = (100, 800), seed: int = 1
) -> pd.DataFrame:
    """Gaps that grow with the scale of a policy and with sqrt(tasks), on arrivals shared by all policies."""
    rng = np.random.default_rng(seed)
    shared = rng.gumbel(2.0, 0.4, (replicates, len(tasks)))
    tables = []
    for policy, scale in policies.items():
        own = rng.gumbel(0.0, 0.1, shared.shape)
        gap = scale * np.sqrt(np.array(tasks)) / 1000 * np.maximum(shared + own, 0.1)
        mean = np.broadcast_to(np.array(tasks) / 1000, gap.shape)
        tables.append(
            pd.DataFrame(
                {
                    "policy": policy,
                    "replicate": np.repeat(np.arange(replicates), len(tasks)),
                    "tasks": np.tile(tasks, replicates),
                    "mean_load": np.tile(np.array(tasks) / 10, replicates),
                    "max_load": (100 * (mean + gap)).ravel(),
                    "min_load": 0.0,
                    "max_utilisation": (mean + gap).ravel(),
                    "gap": gap.ravel(),
                    "excess": (gap - 0.04 * mean).ravel(),
                    "load_variance": gap.ravel() ** 2,
                    "edge_difference": gap.ravel() / 2,
                }
            )
        )
    return pd.concat(tables, ignore_index=True)
