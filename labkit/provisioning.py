"""How much capacity holds a risk down where work leaves: a search over a common factor of all capacities."""

import inspect
import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from labkit.analysis.block_bootstrap import block_bootstrap
from labkit.analysis.capacity_search import Share, find_scale
from labkit.analysis.headroom import headroom, replicates_needed
from labkit.analysis.service_limits import service_limits
from labkit.cards.shown import Shown
from labkit.checks import check_fraction, check_positive, nearest
from labkit.engine.failures import checked_failures
from labkit.engine.placement import Outcome
from labkit.engine.service_checks import checked_discipline, lasting_availability
from labkit.engine.service_measures import ServiceOutcome
from labkit.errors import InputError, TooFewReplicates
from labkit.fleet.model import Fleet, check_fleet
from labkit.fleet.scaling import scaled
from labkit.policies.base import Policy
from labkit.policies.naming import parse_policy
from labkit.policies.one_choice import OneChoice
from labkit.randomness import seed_sequence
from labkit.replaying import replay
from labkit.serving import serve
from labkit.survey.stability import highest_load_factor

# So close to the stability limit, runs are too short to tell anything.
CLOSEST = 1.02
RESAMPLES = 1_999


@dataclass(frozen=True)
class Provision(Shown):
    """The capacity that holds a risk down, and what was run to find it.

    Attributes
    ----------
    table : pandas.DataFrame
        One row: policy, information, criterion, risk, scale (factor on all capacities), lower, upper (its
        confidence limits), capacity (total capacity at the scale), load_factor (at the scale; NaN for
        traces), confidence.
    curve : pandas.DataFrame
        One row a scale that was run: scale, share (how often the criterion failed), lower, upper; empty when
        one run tells all.

    Examples
    --------
    Three servers, made for one session at a time each: in nine runs of ten at most three meet on one server.

    >>> import labkit as lk
    >>> found = lk.serve_headroom(
    ...     lk.ring(3), "least-loaded", load_factor=0.5, risk=0.1, discipline="sessions", horizon=100.0,
    ...     warmup=10.0, replicates=50, rng=1,
    ... )
    >>> found.table[["scale", "lower", "upper", "capacity"]].values.tolist()
    [[3.0, 3.0, 4.0, 9.0]]
    >>> found.curve.empty
    True
    """

    table: pd.DataFrame
    curve: pd.DataFrame

    def __repr__(self) -> str:
        row = self.table.iloc[0]
        return (
            f"<{row['policy']}: {row['capacity']:,.4g} units of capacity ({row['scale']:.4g} x, limits "
            f"{row['lower']:.4g} to {row['upper']:.4g}) for {row['criterion']} at a risk of {row['risk']:g}>"
        )


def serve_headroom(
    fleet: Fleet,
    policy: Policy | str,
    *,
    load_factor: float,
    risk: float,
    target: float | None = None,
    confidence: float = 0.95,
    tolerance: float = 0.005,
    **serving: Any,
) -> Provision:
    """Find the capacity at which arriving work meets a risk, by the factor that all capacities need.

    Arrivals and requirements stay as they are, number by number (common random numbers), while the capacities
    of all servers are multiplied by one factor.

    - With `target`: at most a share `risk` of the tasks takes longer than `target` from arrival to departure.
      The factor is searched for by runs; the limits are the factors at which the confidence limits of the
      share meet the risk.
    - Without, for ``discipline="sessions"`` and no `limit`: the highest utilisation within the window goes
      beyond 1 with a probability of at most `risk`. What rules decide does not depend on the factor, so that
      one call tells it: a quantile over replicates, with limits that assume no distribution.
    - Without, and with a `limit`: at most a share `risk` of the tasks is blocked; the limit is then the
      capacity of each server, rounded down.

    Parameters
    ----------
    fleet : Fleet
    policy : Policy or str
    load_factor : float
        Arriving work ÷ total capacity at the capacities as they are (factor 1). It may be above what they can
        serve.
    risk : float
        The accepted probability, or share of tasks, in (0, 1).
    target : float, optional
        Longest sojourn that counts as in time, in units of time.
    confidence : float
        Coverage of the limits, in (0, 1).
    tolerance : float
        How exactly the factor is searched for, as a share of it; it meets the risk, and is too large by that
        share at most. Where the least capacity that makes sense meets it already (1.02 × what the stability
        limit asks for, or one place a server), that is the answer, and `criterion` says so.
    **serving
        All else that `labkit.serve` takes: horizon, warmup, service, discipline, replicates, rng, ...

    Returns
    -------
    Provision

    Raises
    ------
    InputError
        When an argument is refused, or no factor up to 64 meets the risk.
    TooFewReplicates
        When the replicates do not suffice for the risk.

    Examples
    --------
    >>> import labkit as lk
    >>> found = lk.serve_headroom(
    ...     lk.ring(10), "least-loaded", load_factor=1.0, risk=0.01, target=8.0,
    ...     horizon=600.0, warmup=60.0, replicates=4, rng=1,
    ... )
    >>> bool(1.1 < found.table["scale"].item() < 1.6)
    True
    """
    check_fleet(fleet)
    risk, confidence, tolerance = _checked(risk, confidence, tolerance)
    load_factor = check_positive("load_factor", load_factor)
    sessions = checked_discipline(serving.get("discipline", "fcfs")) == "sessions"
    limited = serving.get("limit") is not None
    _check_names(serve, serving, ("fleet", "policy", "load_factor", "target"))
    # A Generator would give each factor other arrivals.
    serving["rng"] = seed_sequence(serving["rng"])
    if target is not None and sessions:
        raise InputError(
            f"target is {target!r}, but sessions stay for their time whatever the capacity; leave it out."
        )
    if target is None and not sessions:
        raise InputError('target is missing; give the longest sojourn, or discipline="sessions".')
    if limited and not isinstance(serving["limit"], str):
        raise InputError(f'limit is {serving["limit"]!r}; give "capacity", which grows with the capacities.')

    def run(factor: float) -> ServiceOutcome:
        grown = scaled(fleet, factor)
        return serve(grown, policy, load_factor=load_factor / factor, target=target, **serving)

    if target is None and not limited:
        return _of_highest(run(1.0), load_factor, risk, confidence)
    of = "late_share" if target is not None else "blocked_share"
    failures, on_failure = checked_failures(serving.get("failures")), serving.get("on_failure", "wait")
    if target is not None and (limited or (failures is not None and on_failure == "lost")):
        what = "limit" if limited else 'on_failure="lost"'
        raise InputError(f"{what} is given with a target; what is turned away or lost cannot be in time.")
    least = 0.0
    if limited:
        # A server below a capacity of one holds no task.
        least = 1.0 if fleet.capacity is None else 1.0 / float(fleet.capacity.min())
    elif not sessions:
        least = CLOSEST * load_factor / highest_load_factor(
            fleet, even_split=isinstance(parse_policy(policy), OneChoice),
            availability=lasting_availability(failures), requeued=on_failure == "requeue",
        )  # fmt: skip

    def share(outcome: ServiceOutcome) -> tuple[float, float, float]:
        row = service_limits(outcome.measures, outcome.by_interval, of=of, confidence=confidence).iloc[0]
        return row["estimate"], row["lower"], row["upper"]

    return _search(fleet, run, share, of, target, load_factor, risk, confidence, tolerance, least)


def replay_headroom(
    fleet: Fleet,
    trace: Any,
    policy: Policy | str,
    *,
    risk: float,
    block: float,
    rng: Any,
    target: float | None = None,
    confidence: float = 0.95,
    tolerance: float = 0.005,
    **replaying: Any,
) -> Provision:
    """Find the capacity at which a recorded trace meets a risk, by the factor that all capacities need.

    - Without `target`, for sessions (the default discipline): the highest utilisation within a block of time,
      such as a day, goes beyond 1 in at most a share `risk` of the blocks, over all coins. One replay
      tells it, as in `labkit.serve_headroom`; the limits come from whole blocks drawn anew (bootstrap), and
      take blocks as independent.
    - With `target`: at most a share `risk` of the tasks takes longer; limits by `labkit.block_bootstrap`.

    Parameters
    ----------
    fleet : Fleet
    trace : pandas.DataFrame, str or pathlib.Path
        With durations; see `labkit.replay`.
    policy : Policy or str
    risk : float
        The accepted share of blocks, or of tasks, in (0, 1).
    block : float
        Length of a block, in the units of time of the trace.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
    target : float, optional
        Longest sojourn that counts as in time; for ``discipline="fcfs"`` or ``"ps"``.
    confidence, tolerance : float
        As in `labkit.serve_headroom`.
    **replaying
        All else that `labkit.replay` takes.

    Returns
    -------
    Provision
        Its `load_factor` is NaN.

    Raises
    ------
    InputError, TooFewReplicates
        As in `labkit.serve_headroom`; the second also when the trace has too few blocks.

    Examples
    --------
    Sessions of an hour and a half begin every hour, so that two overlap, one on each server; capacities of 1
    are just enough:

    >>> import pandas as pd
    >>> import labkit as lk
    >>> hours = [float(hour) for hour in range(24 * 60)]
    >>> trace = pd.DataFrame({"time": hours, "option_1": "north", "option_2": "east", "duration": 1.5})
    >>> found = lk.replay_headroom(
    ...     lk.fleet_from_trace(trace), trace, "least-loaded", risk=0.1, block=24.0, rng=1
    ... )
    >>> found.table[["scale", "lower", "upper", "capacity"]].values.tolist()
    [[1.0, 1.0, 1.0, 2.0]]
    """
    check_fleet(fleet)
    risk, confidence, tolerance = _checked(risk, confidence, tolerance)
    _check_names(replay, replaying, ("fleet", "trace", "policy", "rng", "block", "target"))
    seed = seed_sequence(rng)
    if replaying.get("limit") is not None or replaying.get("on_failure") == "lost":
        what = "limit" if replaying.get("limit") is not None else 'on_failure="lost"'
        raise InputError(
            f"{what} turns work away; leave it out, since a capacity for all of it is looked for."
        )
    queues = checked_discipline(replaying.get("discipline", "sessions")) != "sessions"
    if queues != (target is not None):
        raise InputError(
            f'target is {target!r}; give the longest sojourn with discipline "fcfs" or "ps", none with '
            "sessions."
        )

    def run(factor: float) -> ServiceOutcome:
        grown = scaled(fleet, factor)
        outcome = replay(grown, trace, policy, rng=seed, block=block, target=target, **replaying)
        if isinstance(outcome, Outcome):
            raise InputError("trace has no column 'duration'; work that stays needs labkit.headroom instead.")
        return outcome

    if target is None:
        return _of_highest_in_blocks(run(1.0), risk, confidence, seed)

    def share(outcome: ServiceOutcome) -> tuple[float, float, float]:
        row = block_bootstrap(outcome.by_interval, of="late_share", confidence=confidence, rng=seed).iloc[0]
        return row["estimate"], row["lower"], row["upper"]

    return _search(fleet, run, share, "late_share", target, math.nan, risk, confidence, tolerance, 0.0)


def _checked(risk: Any, confidence: Any, tolerance: Any) -> tuple[float, float, float]:
    return (
        check_fraction("risk", risk),
        check_fraction("confidence", confidence),
        check_fraction("tolerance", tolerance),
    )


def _check_names(function: Callable[..., Any], given: dict[str, Any], taken: tuple[str, ...]) -> None:
    """Refuse names that a function does not take, and what it needs and is not given."""
    known = {
        name: about for name, about in inspect.signature(function).parameters.items() if name not in taken
    }
    for name in given:
        if name not in known:
            raise InputError(f"{name} is no argument of {function.__name__}; {nearest(name, known)}.")
    for name, about in known.items():
        if about.default is about.empty and name not in given:
            raise InputError(f"{name} is missing; {function.__name__} needs it.")


def _of_highest(outcome: ServiceOutcome, load_factor: float, risk: float, confidence: float) -> Provision:
    """Return the factor from the highest utilisations at factor 1: they fall in proportion to it."""
    row = headroom(outcome.measures, risk=risk, confidence=confidence, of="max_utilisation").iloc[0]
    limits = (row["headroom"], row["lower"], row["upper"])
    words = "highest utilisation beyond 1 in the window"
    return Provision(
        _table(outcome.fleet, outcome, words, limits, load_factor, risk, confidence), pd.DataFrame()
    )


def _of_highest_in_blocks(
    outcome: ServiceOutcome, risk: float, confidence: float, seed: np.random.SeedSequence
) -> Provision:
    """Return the factor from the highest utilisation of each block and replicate.

    Coins are no other days: the share beyond is a mean over blocks and coins, its limits come from whole
    blocks drawn anew.
    """
    table = outcome.by_interval
    # The last interval is shorter than the others, unless it ends with the trace.
    length = table["end"] - table["start"]
    full = table[length >= length.max() * (1 - 1e-9)]
    highest = full.pivot(index="interval", columns="replicate", values="max_utilisation").to_numpy()
    needed = replicates_needed(risk, confidence)
    if len(highest) < needed:
        raise TooFewReplicates(
            f"the trace has {len(highest)} full blocks; a risk of {risk:g} with {100 * confidence:g} % "
            f"limits needs at least {needed}, so give shorter blocks, a longer trace, or a larger risk."
        )
    draws = np.random.default_rng(seed)
    drawn = draws.integers(0, len(highest), (RESAMPLES, len(highest)))
    again = [np.quantile(highest[blocks], 1 - risk, method="inverted_cdf") for blocks in drawn]
    estimate = float(np.quantile(highest, 1 - risk, method="inverted_cdf"))
    lower, upper = np.quantile(again, [(1 - confidence) / 2, (1 + confidence) / 2])
    words = "highest utilisation beyond 1 in a block"
    limits = (estimate, min(float(lower), estimate), max(float(upper), estimate))
    return Provision(
        _table(outcome.fleet, outcome, words, limits, math.nan, risk, confidence), pd.DataFrame()
    )


def _table(
    fleet: Fleet,
    outcome: ServiceOutcome,
    criterion: str,
    scales: tuple[float, float, float],
    load_factor: float,
    risk: float,
    confidence: float,
) -> pd.DataFrame:
    scale, lower, upper = scales
    return pd.DataFrame(
        [
            {
                "policy": outcome.policy,
                "information": outcome.information,
                "criterion": criterion,
                "risk": risk,
                "scale": scale,
                "lower": lower,
                "upper": upper,
                "capacity": scale * fleet.total_capacity,
                "load_factor": load_factor / scale,
                "confidence": confidence,
            }
        ]
    )


def _search(
    fleet: Fleet,
    run: Callable[[float], ServiceOutcome],
    share: Callable[[ServiceOutcome], Share],
    of: str,
    target: float | None,
    load_factor: float,
    risk: float,
    confidence: float,
    tolerance: float,
    least: float,
) -> Provision:
    last: dict[str, ServiceOutcome] = {}

    def share_at(factor: float) -> Share:
        last["outcome"] = run(factor)
        return share(last["outcome"])

    found = find_scale(share_at, risk=risk, tolerance=tolerance, least=least, of=of)
    criterion = f"sojourns beyond {target:g}" if target is not None else "blocked tasks"
    if found.at_least:
        criterion += ", at the least capacity that was tried"
    scales = (found.estimate, found.lower, found.upper)
    return Provision(
        _table(fleet, last["outcome"], criterion, scales, load_factor, risk, confidence), found.curve
    )
