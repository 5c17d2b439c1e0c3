"""What is compared side by side: loads of servers under a rule, and the best that any rule could do."""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from labkit.engine.placement import Outcome
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.policies.naming import shown_name
from labkit.survey.facts import Survey

# The exact split of the survey, shown like a rule.
FAIR = "fair split"
# Columns of the table of neighbours, in which the utilisations under the rules stand under their names.
NEAR = ("server", "capacity", "shared")


@dataclass(frozen=True)
class Side:
    """Loads under one rule.

    Attributes
    ----------
    name : str
        What the user calls it.
    load : numpy.ndarray, shape (servers,)
        Work units; mean of the replicates.
    highest : numpy.ndarray, shape (servers,)
        Highest load in any replicate.
    fullest : numpy.ndarray, shape (servers,)
        Share of the replicates in which no other server had a higher utilisation.
    replicates : int
        0 for the fair split, which needs none.
    """

    name: str
    load: np.ndarray
    highest: np.ndarray
    fullest: np.ndarray
    replicates: int


def sides_of(fleet: Fleet, outcomes: Any, best: Survey) -> dict[str, Side]:
    """Return the rules to compare, the fair split last."""
    given = named_outcomes(fleet, outcomes)
    capacity = capacities(fleet)
    sides = {}
    for name, outcome in given.items():
        loads = np.asarray(outcome.loads, dtype=np.float64)
        fullest = np.zeros(fleet.size)
        for row in loads:  # a row at a time: all utilisations at once would double the memory
            utilisation = row / capacity
            top = utilisation >= utilisation.max()
            fullest[top] += 1.0
        sides[name] = Side(name, loads.mean(axis=0), loads.max(axis=0), fullest / len(loads), len(loads))
    fair = best.profile["fair_load"].to_numpy()
    if sides:
        work = np.mean([side.load.sum() for side in sides.values()])
        fair = fair * (work / fair.sum())
    sides[FAIR] = Side(FAIR, fair, fair, np.asarray(best.profile["bottleneck"], np.float64), 0)
    return sides


def capacities(fleet: Fleet) -> np.ndarray:
    """Return the capacity of each server."""
    return np.ones(fleet.size) if fleet.capacity is None else np.asarray(fleet.capacity)


def named_outcomes(fleet: Fleet, outcomes: Any) -> dict[str, Outcome]:
    """Return outcomes by name; refuse what cannot be compared on this fleet."""
    if outcomes is None:
        return {}
    if isinstance(outcomes, Outcome):
        outcomes = [outcomes]
    if isinstance(outcomes, Mapping):
        named = dict(outcomes)
    elif isinstance(outcomes, Iterable) and not isinstance(outcomes, str | bytes):
        named = _by_policy(list(outcomes))
    else:
        raise InputError(
            f"outcomes is {type(outcomes).__name__}; give outcomes of lk.place by name, "
            'as in {"one choice": outcome}.'
        )
    for name, outcome in named.items():
        _check(fleet, name, outcome)
    _check_alike("tasks", {name: outcome.tasks for name, outcome in named.items()})
    _check_alike("replicates", {name: len(outcome.loads) for name, outcome in named.items()})
    return named


def _check_alike(what: str, counts: dict[str, int]) -> None:
    if len(set(counts.values())) > 1:
        words = ", ".join(f"{count:,} ({name})" for name, count in counts.items())
        raise InputError(
            f"outcomes hold different numbers of {what}, {words}; place as many under each rule."
        )


def _by_policy(outcomes: list[Any]) -> dict[str, Any]:
    named: dict[str, Any] = {}
    for outcome in outcomes:
        policy = getattr(outcome, "policy", None)
        name = shown_name(policy) if isinstance(policy, str) else str(len(named) + 1)
        if name in named:
            raise InputError(
                f"outcomes holds {name!r} twice; give each a name of its own, as in "
                '{"fresh": one, "late": other}.'
            )
        named[name] = outcome
    return named


def _check(fleet: Fleet, name: Any, outcome: Any) -> None:
    if not isinstance(name, str) or not name.strip() or name == FAIR:
        raise InputError(
            f"outcomes holds the name {name!r}; give each outcome a text of its own, "
            f"other than {FAIR!r}, which is shown beside them."
        )
    if name in NEAR:
        raise InputError(
            f"outcomes holds the name {name!r}; give each outcome a text of its own, other than "
            f"{', '.join(map(repr, NEAR))}, which are columns of the table of neighbours."
        )
    if not isinstance(outcome, Outcome):
        raise InputError(
            f"outcomes[{name!r}] is {type(outcome).__name__}; give an outcome of lk.place, "
            "whose loads stay where they were placed."
        )
    if outcome.fleet is not fleet and outcome.fleet.digest != fleet.digest:
        raise InputError(f"outcomes[{name!r}] is of another fleet; place on the fleet that is explored.")
