"""The forecast: the stationary gap of a comparing rule, without simulating to the stationary state."""

import warnings
import weakref
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from scipy.linalg import LinAlgWarning

from labkit.cards.shown import Shown
from labkit.checks import check_fraction, check_whole
from labkit.engine.placement import place_loads, zero_loads
from labkit.errors import InputError
from labkit.fleet.digest import fleet_digest
from labkit.fleet.model import Fleet, check_fleet
from labkit.policies.base import Policy
from labkit.policies.least_loaded import LeastLoaded
from labkit.policies.mixed import Mixed
from labkit.policies.naming import parse_policy
from labkit.policies.one_choice import OneChoice
from labkit.policies.static_split import StaticSplit
from labkit.randomness import seed_sequence
from labkit.stationary import fluid
from labkit.stationary.existence import check_stationary
from labkit.stationary.linearised import Field, linearise
from labkit.stationary.network import network_of
from labkit.stationary.settling import USUAL, Settled, settle, spread_moments

# Replicates of the short run, its rounds, and draws of the field, by what they cost.
MOST_REPLICATES, LEAST_REPLICATES, NUMBERS = 256, 32, 1_000_000
MOST_ROUNDS, LEAST_ROUNDS, TASKS = 1_000, 64, 60_000_000
MOST_DRAWS, DRAWN = 1_024, 16_000_000
# Further draws are made where they tell so much of the variance between replicates.
WORTH = 0.1
MOMENTS = 36
# Relative error that is never gone below: what the method leaves out.
MODEL = 0.03
TWO_SIDED_95 = 1.96
LEAST_BETA = 0.1
# Servers up to which a fleet without waves is simulated.
SIMULATED = 500


@dataclass(frozen=True)
class Forecast(Shown):
    """What `forecast` found; gaps and spread in utilisation.

    Attributes
    ----------
    policy : str
    servers : int
    mean_gap : float
        Mean of the stationary gap over all phases of the loads.
    error : float
        Half-width of what `mean_gap` may be wrong by, at about 95 %: chance of the short run, the measured
        scale, drift within the run, and 3 % for what the method leaves out.
    spread : float
        Root mean square, over servers and time, of a server's utilisation less the mean.
    method : str
        "free field", "fluid limit" or "simulation".
    scale : float
        Measured factor on the linear field's variances; NaN for the fluid limit.
    gaps, weights : float64 arrays, shape (values,)
        Values of the gap and their probabilities.
    profile : pandas.DataFrame
        One row a server: server, utilisation (mean, beyond the fleet's mean).

    Examples
    --------
    >>> import labkit as lk
    >>> ahead = lk.forecast(lk.complete(1000), "least-loaded")
    >>> ahead
    <forecast of least-loaded on 1,000 servers: mean gap 2.217 ± 0.067, spread 0.9538 (fluid limit)>
    >>> bool(abs(ahead.gaps @ ahead.weights - ahead.mean_gap) < 1e-9)
    True
    """

    policy: str
    servers: int
    mean_gap: float
    error: float
    spread: float
    method: str
    scale: float
    gaps: np.ndarray
    weights: np.ndarray
    profile: pd.DataFrame

    def quantile(self, probability: float) -> float:
        """Return the gap that is not exceeded with a probability, in utilisation.

        Parameters
        ----------
        probability : float
            Above 0 and below 1.

        Returns
        -------
        float
            One of `gaps`.

        Raises
        ------
        InputError
            When `probability` lies outside.

        Examples
        --------
        >>> import labkit as lk
        >>> ahead = lk.forecast(lk.complete(1000))
        >>> [round(ahead.quantile(probability), 2) for probability in (0.01, 0.5, 0.99)]
        [1.55, 2.2, 2.95]
        >>> ahead.quantile(1.0)
        Traceback (most recent call last):
            ...
        labkit.errors.InputError: probability is 1.0; give a number above 0 and below 1.
        """
        probability = check_fraction("probability", probability)
        order = np.argsort(self.gaps, kind="stable")
        passed = np.cumsum(self.weights[order])
        place = int(np.searchsorted(passed, probability))
        return float(self.gaps[order[min(place, order.size - 1)]])

    def table(self) -> pd.DataFrame:
        """Return the forecast as a table.

        Returns
        -------
        pandas.DataFrame
            One row a fact: fact, value (in utilisation), meaning.

        Examples
        --------
        >>> import labkit as lk
        >>> facts = lk.forecast(lk.complete(1000)).table().set_index("fact")["value"]
        >>> facts[["mean_gap", "error", "gap_median", "gap_q99"]].round(2).tolist()
        [2.22, 0.07, 2.2, 2.95]
        """
        rows = [
            ("mean_gap", self.mean_gap, "mean stationary gap, in utilisation"),
            ("error", self.error, "half-width of what it may be wrong by, at about 95 %"),
            ("spread", self.spread, "root mean square of a server's utilisation less the mean"),
            ("gap_median", self.quantile(0.5), "gap not exceeded half of the time"),
            ("gap_q90", self.quantile(0.9), "gap not exceeded 90 % of the time"),
            ("gap_q99", self.quantile(0.99), "gap not exceeded 99 % of the time"),
        ]
        return pd.DataFrame(rows, columns=["fact", "value", "meaning"])

    def __repr__(self) -> str:
        return (
            f"<forecast of {self.policy} on {self.servers:,} servers: mean gap {self.mean_gap:.4g} "
            f"± {self.error:.2g}, spread {self.spread:.4g} ({self.method})>"
        )


@dataclass(frozen=True)
class Law:
    """The stationary law of loads, to draw from.

    Attributes
    ----------
    field : Field
    scale, error : float
        Factor on its variances, and its standard error.
    settled : Settled
        The short run that started from it.
    more : numpy.random.SeedSequence
        For further draws.
    """

    field: Field
    scale: float
    error: float
    settled: Settled
    more: np.random.SeedSequence


_KNOWN: weakref.WeakKeyDictionary[Fleet, dict[Any, Law]] = weakref.WeakKeyDictionary()


def forecast(
    fleet: Fleet, policy: Policy | str = "least-loaded", *, rng: Any = None, workers: int = 1
) -> Forecast:
    """Forecast the stationary gap of least-loaded or mixed placement.

    Tasks of size 1, seen fresh. The fleet is not simulated to its stationary state, which on a sparse fleet
    takes of the order of servers² rounds of one task a server: long waves of load come from a Gaussian free
    field, by statistical linearisation of the rule, with mean heights that carry what the network must carry;
    a short simulation of a few hundred rounds, started from draws of it, settles what is local and measures
    the field's scale. Without a table of choices (`labkit.complete`) all settles within some tens of rounds:
    up to 500 servers are simulated, for more the fluid limit is used.

    Parameters
    ----------
    fleet : Fleet
        One connected part, balanceable with room to spare.
    policy : Policy or str
        least-loaded or mixed.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator, optional
        For the short simulation. Default: made from the fleet, so that a fleet has one forecast.
    workers : int
        Threads; the result does not depend on it.

    Returns
    -------
    Forecast

    Raises
    ------
    InputError
        When there is no stationary state (several parts, a fleet that is not balanceable or just so, too
        small a beta), or the policy is another.

    Notes
    -----
    A model of a model: within a few per cent of simulations to the stationary state on rings, ladders, tori,
    hypercubes, random regular graphs and county maps of up to some thousand servers.

    Examples
    --------
    >>> import labkit as lk
    >>> ahead = lk.forecast(lk.ring(64))
    >>> abs(ahead.mean_gap - 6.05) < ahead.error
    True
    """
    rule, authority = checked_rule(check_fleet(fleet), policy)
    workers = check_whole("workers", workers)
    if fleet.implicit is not None and fleet.size > SIMULATED:
        return _fluid(fleet, rule, authority)
    if fleet.implicit is not None:
        seed = seed_sequence(int(fleet_digest(fleet)[:16], 16) if rng is None else rng)
        return _simulated(fleet, rule, authority, seed, workers)
    law = law_of(fleet, rule, rng=rng, workers=workers)
    return _from_law(fleet, rule, law)


def checked_rule(fleet: Fleet, policy: Policy | str) -> tuple[Policy, float]:
    """Return the policy and the share of tasks that it compares, or refuse."""
    rule = parse_policy(policy)
    if isinstance(rule, LeastLoaded):
        return rule, 1.0
    if isinstance(rule, Mixed) and rule.beta >= LEAST_BETA:
        return rule, float(rule.beta)
    if isinstance(rule, Mixed) and rule.beta > 0:
        raise InputError(
            f"policy is {rule.name}, whose loads take very long to settle; the forecast knows betas of at "
            f"least {LEAST_BETA}."
        )
    if isinstance(rule, OneChoice | StaticSplit | Mixed):
        raise InputError(
            f"policy is {rule.name}, under which loads drift apart for ever: there is no stationary gap to "
            "forecast; use least-loaded or mixed."
        )
    raise InputError(f"policy is {rule.name}; the forecast knows least-loaded and mixed.")


def law_of(fleet: Fleet, rule: Policy, *, rng: Any = None, workers: int = 1) -> Law:
    """Return the stationary law of a fleet under a rule; see `forecast`."""
    rule, authority = checked_rule(fleet, rule)
    if fleet.implicit is not None:
        raise InputError(
            "fleet has no table of choices, and so no waves that settle slowly; start it empty instead."
        )
    known = _KNOWN.setdefault(fleet, {})
    if rng is None and rule.name in known:
        return known[rule.name]
    seed = seed_sequence(int(fleet_digest(fleet)[:16], 16) if rng is None else rng)
    check_stationary(fleet)
    network = network_of(fleet, authority)
    noise, first_run, run, more = (
        np.random.SeedSequence(seed.entropy, spawn_key=(*seed.spawn_key, turn)) for turn in range(4)
    )

    def field_at(scale: float) -> Field:
        unsolved = False
        with np.errstate(all="ignore"), warnings.catch_warnings():
            warnings.simplefilter("error", LinAlgWarning)
            try:
                field = linearise(network, authority, scale, np.random.Generator(np.random.SFC64(noise)))
                unsolved = not np.isfinite(field.height).all() or not (field.gain > 0).all()
            except (np.linalg.LinAlgError, LinAlgWarning, ValueError, RuntimeError):
                unsolved = True
        if unsolved:
            raise InputError(
                "fleet is so nearly in parts, or so nearly full somewhere, that the equations have "
                "no solution in floats; leave out negligible demands, or simulate with lk.place."
            )
        if field.left > 1e-3:
            raise InputError(
                f"policy {rule.name} cannot carry what the fleet must shift to be balanced, so there is no "
                "stationary state to forecast; compare more of the tasks (a larger beta)."
            )
        return field

    size = fleet.size
    replicates = int(np.clip(NUMBERS // size, LEAST_REPLICATES, MOST_REPLICATES))
    rounds = int(np.clip(TASKS // (size * replicates), LEAST_ROUNDS, MOST_ROUNDS))
    field = field_at(USUAL)
    first = settle(
        fleet, rule, field, USUAL, rounds=rounds, replicates=max(8, min(replicates, NUMBERS // (2 * size))),
        seed=first_run, moments=1, workers=workers,
    )  # fmt: skip
    # Rounded, so that the last bits of another processor's sums do not change what is drawn.
    scale = round(first.scale, 3)
    if np.abs(field.turned).max() > 0:
        field = field_at(scale)
    settled = settle(
        fleet, rule, field, scale, rounds=rounds, replicates=replicates, seed=run, moments=MOMENTS,
        workers=workers,
    )  # fmt: skip
    law = Law(field, scale, float(np.hypot(first.error, settled.error) / 2.0), settled, more)
    if rng is None:
        known[rule.name] = law
    return law


def _from_law(fleet: Fleet, rule: Policy, law: Law) -> Forecast:
    field, outcome = law.field, law.settled.outcome
    room, unit = field.network.room, fleet.size / fleet.total_capacity
    size, replicates = fleet.size, len(outcome.loads)
    table = outcome.measures
    each = table.groupby("replicate")["gap"].mean().to_numpy()
    # How far the gap goes with that of the draw it began from tells the chance of the few draws simulated.
    generator = np.random.Generator(np.random.SFC64(law.more))
    began = unit * _highest(field, law.scale, law.settled.draws)
    slope = float(np.cov(each, began)[0, 1] / max(began.var(ddof=1), 1e-30))
    told = slope**2 * began.var(ddof=1) > WORTH * each.var(ddof=1)
    slope = slope if told else 0.0
    more = int(np.clip(DRAWN // size, 0, MOST_DRAWS)) if told else 0
    others = [unit * _highest(field, law.scale, field.draw(generator, count)) for count in _blocks(more)]
    drawn = np.concatenate([began, *others])
    rest = each - slope * began
    mean_gap = float(rest.mean() + slope * drawn.mean())
    chance = np.hypot(rest.std(ddof=1) / np.sqrt(replicates), slope * drawn.std(ddof=1) / np.sqrt(drawn.size))
    by_moment = table.groupby("tasks")["gap"].mean().to_numpy()
    half = len(by_moment) // 2
    drift = float(by_moment[half:].mean() - by_moment[:half].mean())
    # The gap goes at most with the square root of the scale.
    scaled = 0.5 * mean_gap * law.error / law.scale
    by_chance = TWO_SIDED_95 * np.hypot(chance, scaled)
    error = np.sqrt(by_chance**2 + drift**2 + (MODEL * mean_gap) ** 2)
    within = table["gap"].to_numpy() - np.repeat(slope * began, len(by_moment))
    gaps = slope * drawn + generator.choice(within, drawn.size) if told else within
    height = field.network.centred(outcome.loads / room) * unit
    profile = pd.DataFrame({"server": fleet.names, "utilisation": field.height * unit})
    return Forecast(
        rule.name, size, mean_gap, float(error), float(np.sqrt(np.mean(height**2))), "free field",
        law.scale, gaps, np.full(gaps.size, 1.0 / gaps.size), profile,
    )  # fmt: skip


def _blocks(count: int) -> list[int]:
    return [min(64, count - start) for start in range(0, count, 64)]


def _highest(field: Field, scale: float, draws: np.ndarray) -> np.ndarray:
    return np.asarray((field.height + np.sqrt(scale) * draws).max(axis=1))


def _fluid(fleet: Fleet, rule: Policy, authority: float) -> Forecast:
    assert fleet.implicit is not None
    shares = fluid.wave(fleet.implicit.options, authority)
    gaps, weights = fluid.law_of_gap(shares, fleet.size)
    mean_gap = float(gaps @ weights)
    profile = pd.DataFrame({"server": fleet.names, "utilisation": np.zeros(fleet.size)})
    error = MODEL * mean_gap
    return Forecast(
        rule.name, fleet.size, mean_gap, float(error), float(np.sqrt(fluid.variance_of_load(shares))),
        "fluid limit", float("nan"), gaps, weights, profile,
    )  # fmt: skip


def _simulated(
    fleet: Fleet, rule: Policy, authority: float, seed: np.random.SeedSequence, workers: int
) -> Forecast:
    """Simulate from empty, since nothing settles slowly."""
    size, rounds = fleet.size, int(60.0 / authority**2) + 40
    outcome = place_loads(
        fleet, rule, tasks=rounds * size, seed=seed, workers=workers,
        checkpoints=spread_moments(rounds * size // 2, rounds * size, size, MOMENTS),
        loads=zero_loads(size, LEAST_REPLICATES, True),
    )  # fmt: skip
    gaps = outcome.measures["gap"].to_numpy()
    each = gaps.reshape(LEAST_REPLICATES, -1).mean(axis=1)
    chance = TWO_SIDED_95 * each.std(ddof=1) / np.sqrt(LEAST_REPLICATES)
    spread = float(np.sqrt(outcome.measures["load_variance"].mean()))
    profile = pd.DataFrame({"server": fleet.names, "utilisation": np.zeros(size)})
    return Forecast(
        rule.name, size, float(gaps.mean()), float(np.hypot(chance, MODEL * gaps.mean())), spread,
        "simulation", float("nan"), gaps, np.full(gaps.size, 1.0 / gaps.size), profile,
    )  # fmt: skip
