"""Whether a gap is stationary: chains from flat and from over-dispersed starts must come to agree."""

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from labkit.checks import check_whole
from labkit.engine.information import Information, checked_information
from labkit.engine.placement import place_loads, zero_loads
from labkit.errors import NotStationary
from labkit.fleet.model import Fleet, check_fleet
from labkit.policies.base import Policy
from labkit.policies.least_loaded import LeastLoaded
from labkit.policies.mixed import Mixed
from labkit.policies.naming import parse_policy
from labkit.policies.one_choice import OneChoice
from labkit.policies.static_split import StaticSplit
from labkit.randomness import seed_sequence
from labkit.stationary.forecast import LEAST_BETA, Law, checked_rule, law_of
from labkit.stationary.settling import spread_moments
from labkit.stationary.start import draw_loads

MOMENTS = 400
# The most that split R-hat may be, and the fewest effective samples (Vehtari, Gelman, Simpson, Carpenter &
# Bürkner 2021 advise 1.01 and 400 for quantities known to three digits; a gap seldom needs more than two).
LARGEST_RHAT, FEWEST = 1.05, 100.0
# Standard errors by which the means from both kinds of start may differ.
STANDARD_ERRORS = 4.0
# Over-dispersed: at least this times the variance of the forecast, and this times the gap of the flat chains.
WIDER, HIGHER = 2.0, 1.5


@dataclass(frozen=True)
class StationaryGap:
    """A gap that is shown to be stationary; made by `stationary_gap`.

    Attributes
    ----------
    policy, information : str
    mean_gap, error : float
        In utilisation; `error` is one standard error, from the effective sample size.
    rhat, effective : float
        Split R-hat over all chains, and the effective number of samples.
    chains : pandas.DataFrame
        One row a chain: start ("flat" or "wide"), chain, mean_gap.
    burn_in, tasks : int
        Tasks left out, and tasks placed in all, in each chain.
    """

    policy: str
    information: str
    mean_gap: float
    error: float
    rhat: float
    effective: float
    chains: pd.DataFrame
    burn_in: int
    tasks: int

    def __repr__(self) -> str:
        return (
            f"<stationary gap of {self.policy}, information {self.information}: {self.mean_gap:.4g}, "
            f"standard error {self.error:.2g}, split R-hat {self.rhat:.3f}, "
            f"{self.effective:,.0f} effective samples>"
        )


def stationary_gap(
    fleet: Fleet,
    policy: Policy | str,
    *,
    rounds: int,
    chains: int = 4,
    rng: Any,
    information: Information | None = None,
    workers: int = 1,
) -> StationaryGap:
    """Simulate the stationary gap of a rule, and refuse to name one when the run is too short.

    Half of the chains start flat. The others start from draws of the forecast law of least-loaded (or of
    the rule itself, for mixed), so widened that their gap is at least 1.5 times the one that the flat chains
    end with. The first half of every chain is left out. Chains from the two kinds of start come from below
    and from above; that they agree, is what makes the gap believable.

    Parameters
    ----------
    fleet : Fleet
        With a stationary state (see `labkit.forecast`).
    policy : Policy or str
    rounds : int
        Length of each chain, in rounds of one task a server; at least 100.
    chains : int
        Chains from each kind of start, at least 2.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
    information : Fresh, Snapshot or Dispatchers, optional
        Default: ``Fresh()``.
    workers : int
        Threads.

    Returns
    -------
    StationaryGap

    Raises
    ------
    NotStationary
        When the chains disagree: split R-hat above 1.05, fewer than 100 effective samples, or means from the
        two kinds of start more than four standard errors apart.
    InputError
        When there is no stationary state, or an argument is refused.

    Examples
    --------
    >>> import labkit as lk
    >>> found = lk.stationary_gap(lk.ring(10), "least-loaded", rounds=20_000, rng=1)
    >>> abs(found.mean_gap - 1.642) < 5 * found.error
    True
    """
    check_fleet(fleet)
    rule = parse_policy(policy)
    rounds = check_whole("rounds", rounds, least=100)
    chains = check_whole("chains", chains, least=2)
    workers = check_whole("workers", workers)
    information = checked_information(information, in_tasks=True)
    seed = seed_sequence(rng)
    if isinstance(rule, OneChoice | StaticSplit) or (isinstance(rule, Mixed) and rule.beta == 0):
        checked_rule(fleet, rule)  # refuses
    law = None
    if fleet.implicit is None:
        known = isinstance(rule, LeastLoaded) or (isinstance(rule, Mixed) and rule.beta >= LEAST_BETA)
        law = law_of(fleet, rule if known else LeastLoaded(), workers=workers)
    size, tasks = fleet.size, rounds * fleet.size
    moments = spread_moments(tasks // 2, tasks, size, MOMENTS)

    def run(loads: np.ndarray, kind: int) -> np.ndarray:
        """Return the gaps of chains of one kind; the two kinds meet different arrivals."""
        own = np.random.SeedSequence(seed.entropy, spawn_key=(*seed.spawn_key, kind))
        outcome = place_loads(
            fleet, rule, tasks=tasks, seed=own, checkpoints=moments, loads=loads, information=information,
            workers=workers,
        )  # fmt: skip
        return outcome.measures["gap"].to_numpy().reshape(chains, -1)

    whole = not rule.moves_work
    flat = run(zero_loads(size, chains, whole), 0)
    start = zero_loads(size, chains, whole)
    start[:] = _wide_start(fleet, law, HIGHER * float(flat.mean()), chains, seed)
    return _judge(np.concatenate([flat, run(start, 1)]), chains, rule, information, tasks, rounds)


def _wide_start(
    fleet: Fleet, law: Law | None, least: float, chains: int, seed: np.random.SeedSequence
) -> np.ndarray:
    """Return loads whose gap is at least `least` on average."""
    scale = WIDER * (1.0 if law is None else law.scale)
    draws = np.random.Generator(np.random.SFC64(seed))
    while True:
        if law is None:
            loads = draws.poisson(scale, (chains, fleet.size))
        else:
            loads = draw_loads(law, scale, chains, seed)
        level = loads.sum(axis=1) / fleet.total_capacity
        capacity = 1.0 if fleet.capacity is None else fleet.capacity
        if np.mean((loads / capacity).max(axis=1) - level) >= least:
            return loads
        scale *= 2.0


def _judge(
    gaps: np.ndarray, chains: int, rule: Policy, information: Information, tasks: int, rounds: int
) -> StationaryGap:
    from arviz_stats.base import array_stats

    mean = gaps.mean(axis=1)
    if np.ptp(gaps) > 0.0:
        rhat = float(array_stats.rhat(gaps, chain_axis=0, draw_axis=1, method="split"))
        effective = float(array_stats.ess(gaps, chain_axis=0, draw_axis=1, method="mean"))
    else:
        rhat, effective = 1.0, float(gaps.size)
    flat, wide = float(mean[:chains].mean()), float(mean[chains:].mean())
    apart = abs(flat - wide) / max(
        float(np.sqrt((mean[:chains].var(ddof=1) + mean[chains:].var(ddof=1)) / chains)), 1e-12
    )
    if not (rhat <= LARGEST_RHAT and apart <= STANDARD_ERRORS and effective >= FEWEST):
        raise NotStationary(
            f"the gap of {rule.name} is not shown stationary after {rounds:,} rounds: {flat:.4g} from flat "
            f"starts, {wide:.4g} from wide ones (split R-hat {rhat:.3f}, allowed {LARGEST_RHAT}; "
            f"{effective:.0f} effective samples, needed {FEWEST:.0f}); give more rounds."
        )
    table = pd.DataFrame(
        {
            "start": np.repeat(["flat", "wide"], chains),
            "chain": np.arange(2 * chains),
            "mean_gap": mean,
        }
    )
    return StationaryGap(
        rule.name, information.name, float(gaps.mean()), float(gaps.std(ddof=1) / np.sqrt(effective)), rhat,
        effective, table, tasks // 2, tasks,
    )  # fmt: skip
