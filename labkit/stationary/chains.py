"""Whether a gap is stationary: chains from flat and from over-dispersed starts must come to agree."""

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from labkit.checks import check_whole
from labkit.engine.information import Fresh, Information
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
from labkit.stationary.forecast import law_of
from labkit.stationary.settling import spread_moments
from labkit.stationary.start import draw_loads

MOMENTS = 400
# The most that split R-hat may be (Vehtari, Gelman, Simpson, Carpenter & Bürkner 2021).
LARGEST_RHAT = 1.1
# Standard errors by which the means from both kinds of start may differ.
STANDARD_ERRORS = 4.0
# Over-dispersed: this times the variance that the forecast gives the rule itself.
WIDER = 2.0


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

    Half of the chains start flat, the others from loads that vary more than the rule's own do: draws of the
    forecast law at twice its variance for least-loaded and mixed, of least-loaded's law for the rules that
    keep loads closer together. The first half of every chain is left out. Chains from the two kinds of start
    come from below and from above; that they agree, is what makes the gap believable.

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
        When the chains disagree: split R-hat above 1.1, or means from the two kinds of start more than four
        standard errors apart.
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
    information = Fresh() if information is None else information
    seed = seed_sequence(rng)
    own = isinstance(rule, LeastLoaded | Mixed)
    if isinstance(rule, OneChoice | StaticSplit):
        law_of(fleet, rule)  # refuses
    size = fleet.size
    whole = not rule.moves_work
    loads = zero_loads(size, 2 * chains, whole)
    if fleet.implicit is None:
        law = law_of(fleet, rule if own else LeastLoaded(), workers=workers)
        scale = law.scale * (WIDER if own else 1.0)
        loads[chains:] = draw_loads(law, scale, chains, seed)
    else:
        draws = np.random.Generator(np.random.SFC64(seed))
        loads[chains:] = draws.poisson(4.0, (chains, size))
    tasks = rounds * size
    outcome = place_loads(
        fleet, rule, tasks=tasks, seed=seed, checkpoints=spread_moments(tasks // 2, tasks, size, MOMENTS),
        loads=loads, information=information, workers=workers,
    )  # fmt: skip
    gaps = outcome.measures["gap"].to_numpy().reshape(2 * chains, -1)
    return _judge(gaps, chains, rule, information, tasks, rounds)


def _judge(
    gaps: np.ndarray, chains: int, rule: Policy, information: Information, tasks: int, rounds: int
) -> StationaryGap:
    from arviz_stats.base import array_stats

    mean = gaps.mean(axis=1)
    rhat = float(array_stats.rhat(gaps, chain_axis=0, draw_axis=1, method="split"))
    effective = float(array_stats.ess(gaps, chain_axis=0, draw_axis=1, method="mean"))
    flat, wide = float(mean[:chains].mean()), float(mean[chains:].mean())
    apart = abs(flat - wide) / max(
        float(np.sqrt((mean[:chains].var(ddof=1) + mean[chains:].var(ddof=1)) / chains)), 1e-12
    )
    if not (rhat <= LARGEST_RHAT and apart <= STANDARD_ERRORS):
        raise NotStationary(
            f"the gap of {rule.name} is not stationary after {rounds:,} rounds: {flat:.4g} from flat starts, "
            f"{wide:.4g} from wide ones (split R-hat {rhat:.3f}, allowed {LARGEST_RHAT}); give more rounds, "
            'or start from the law itself with start="forecast".'
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
