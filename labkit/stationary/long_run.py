"""Many replicates of a fleet's stationary state, with starts from both sides to show that it is reached."""

import math
from collections.abc import Iterable
from typing import Any

import numpy as np
import pandas as pd

from labkit.checks import check_whole
from labkit.engine.placement import Outcome, place_loads, zero_loads
from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet, check_fleet
from labkit.policies.base import Policy
from labkit.policies.mixed import Mixed
from labkit.policies.naming import parse_policy
from labkit.policies.one_choice import OneChoice
from labkit.policies.static_split import StaticSplit
from labkit.randomness import check_replicates, seed_sequence
from labkit.stationary.existence import check_stationary
from labkit.survey.connectivity import algebraic_connectivity
from labkit.survey.demand import total_demand

STATIONARY = "stationary"
# Mean slope of least-loaded's response to a difference of utilisations, as measured on rings and tori.
_SLOPE = 0.5
# Relaxation times of the slowest wave in a run: e^-8 is left of its variance. Where servers are offered
# unequal demands a profile of mean loads must build up as well, against a weaker response.
_RELAXATIONS, _WITH_PROFILE = 4.0, 16.0


def long_run(
    fleet: Fleet,
    policy: Policy | str,
    *,
    replicates: int,
    rng: Any,
    first_replicate: int = 0,
    rounds: int | None = None,
    horizon: int = 200,
    workers: int = 1,
) -> pd.DataFrame:
    """Place tasks until loads are stationary, or up to a horizon where they never are.

    Where there is a stationary state, replicates with even numbers start empty and come from below. Those
    with odd numbers come from above: they run as long from empty, then the distance of every load from the
    mean is doubled, then they run as long again. That both kinds agree shows that the run is long enough.

    Parameters
    ----------
    fleet : Fleet
        With capacities that do not differ much, unless `rounds` is given.
    policy : Policy or str
    replicates : int
        Independent repetitions.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        The same int or SeedSequence gives every policy the same arrivals.
    first_replicate : int
        Number of the first replicate: calls for parts of a range give the same rows as one call for all.
    rounds : int, optional
        Length of a run, in tasks a server. Default: see `settling_rounds`, or the horizon.
    horizon : int
        Length in tasks a server where there is no stationary state; the default of `rounds` is never less.
    workers : int
        Threads.

    Returns
    -------
    pandas.DataFrame
        As `Outcome.measures`, measured once at the end, with the column `moment` after `policy`:
        "stationary", or such as "after 200 tasks a server".

    Raises
    ------
    InputError
        When an argument is refused, or nobody can tell how long the run must be.

    Examples
    --------
    >>> import labkit as lk
    >>> table = lk.long_run(lk.ring(8), "least-loaded", replicates=4, rng=1)
    >>> table["moment"].unique().tolist(), table["replicate"].tolist()
    (['stationary'], [0, 1, 2, 3])
    """
    check_fleet(fleet)
    rule = parse_policy(policy)
    first, replicates = check_replicates(first_replicate, replicates)
    horizon = check_whole("horizon", horizon)
    workers = check_whole("workers", workers)
    seed = seed_sequence(rng)
    if rounds is not None:
        rounds = check_whole("rounds", rounds)
    if not settles(fleet, rule):
        horizon = horizon if rounds is None else rounds
        outcome = _place(fleet, rule, horizon * fleet.size, seed, replicates, first, workers)
        return _labelled(outcome, f"after {horizon} tasks a server")
    rounds = settling_rounds(fleet, rule, least=horizon) if rounds is None else rounds
    length = rounds * fleet.size
    # Replicate 2p starts empty, replicate 2p + 1 from double; each run has a key of its own.
    empty, before, after = (
        np.random.SeedSequence(seed.entropy, spawn_key=(*seed.spawn_key, part)) for part in range(3)
    )
    last = first + replicates
    tables = []
    if -(-last // 2) > -(-first // 2):
        begin = -(-first // 2)
        found = _labelled(_place(fleet, rule, length, empty, -(-last // 2) - begin, begin, workers))
        tables.append(found.assign(replicate=2 * found["replicate"]))
    if last // 2 > first // 2:
        begin = first // 2
        loads = _place(fleet, rule, length, before, last // 2 - begin, begin, workers).loads
        outcome = _place(fleet, rule, length, after, len(loads), begin, workers, doubled(loads))
        found = _labelled(outcome)
        tables.append(found.assign(replicate=2 * found["replicate"] + 1))
    return pd.concat(tables).sort_values("replicate", ignore_index=True)


def settles(fleet: Fleet, rule: Policy) -> bool:
    """Tell whether loads may have a stationary state under a rule on a fleet."""
    if isinstance(rule, OneChoice | StaticSplit) or (isinstance(rule, Mixed) and rule.beta == 0):
        return False
    try:
        check_stationary(fleet)
    except InputError:
        return False
    return True


def refusals(fleet: Fleet, rules: Iterable[Policy]) -> dict[str, str]:
    """Return why rules do not take a fleet, by the name of the rule; those that do are not in it."""
    found = {}
    for rule in rules:
        try:
            rule.prepare(fleet)
        except InputError as refusal:
            found[rule.name] = str(refusal)
    return found


def settling_rounds(fleet: Fleet, rule: Policy, *, least: int = 1) -> int:
    """Return how many tasks a server settle the loads of a fleet under a rule that compares loads.

    Four relaxation times of the slowest wave of least-loaded, by its response linearised: the rate a round
    is slope/2 · n · λ / D with n servers, a total demand D and algebraic connectivity λ. Sixteen where
    servers are offered unequal demands. Under mixed(beta) waves are larger and so the response weaker: times
    1 / beta².

    Parameters
    ----------
    fleet : Fleet
        With a stationary state, and equal or nearly equal capacities.
    rule : Policy
        A rule that steers more than least-loaded does needs less.
    least : int

    Returns
    -------
    int
        Rounded up to two digits.

    Raises
    ------
    InputError
        When the algebraic connectivity cannot be worked out.
    """
    connectivity = algebraic_connectivity(fleet)
    if not connectivity > 0:
        raise InputError(
            f"fleet has {fleet.size:,} servers and an algebraic connectivity that cannot be worked out; give "
            "rounds, the length of the run in tasks a server."
        )
    relaxation = 2 / _SLOPE * total_demand(fleet) / (fleet.size * connectivity)
    if fleet.capacity is not None:
        relaxation *= float(np.mean(fleet.capacity))
    times = _RELAXATIONS if _offered_alike(fleet) else _WITH_PROFILE
    share = float(rule.beta) if isinstance(rule, Mixed) else 1.0
    needed = max(float(least), times * relaxation / share**2)
    unit = 10 ** max(0, math.floor(math.log10(needed)) - 1)
    return math.ceil(needed / unit) * unit


def doubled(loads: np.ndarray) -> np.ndarray:
    """Return loads twice as far from their mean, none below zero; whole ones stay whole.

    Parameters
    ----------
    loads : array, shape (replicates, servers)
        Work units.
    """
    far = 2 * loads - loads.mean(axis=1, keepdims=True)
    if loads.dtype.kind == "i":
        far = np.rint(far)
    kept = zero_loads(loads.shape[1], len(loads), loads.dtype.kind == "i")
    kept[:] = far - far.min(axis=1, keepdims=True)
    return kept


def _offered_alike(fleet: Fleet) -> bool:
    """Tell whether every server is an option of the same demand, for its capacity."""
    if fleet.implicit is not None:
        return fleet.capacity is None
    options = fleet.options
    present = options != ABSENT
    demand = np.ones(len(options)) if fleet.demand is None else fleet.demand
    shares = np.broadcast_to((demand / present.sum(axis=1))[:, None], options.shape)
    offered = np.bincount(options[present], weights=shares[present], minlength=fleet.size)
    if fleet.capacity is not None:
        offered = offered / fleet.capacity
    return bool(np.ptp(offered) <= 1e-9 * offered.max())


def _place(
    fleet: Fleet,
    rule: Policy,
    tasks: int,
    seed: np.random.SeedSequence,
    replicates: int,
    first: int,
    workers: int,
    loads: np.ndarray | None = None,
) -> Outcome:
    if loads is None:
        loads = zero_loads(fleet.size, replicates, not rule.moves_work)
    return place_loads(
        fleet, rule, tasks=tasks, seed=seed, checkpoints=np.array([tasks]), loads=loads, workers=workers,
        first_replicate=first,
    )  # fmt: skip


def _labelled(outcome: Outcome, moment: str = STATIONARY) -> pd.DataFrame:
    table = outcome.measures
    table.insert(1, "moment", moment)
    return table
