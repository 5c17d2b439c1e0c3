"""What each rule needs at dispatch time: what it must know, how much it keeps, how much it must be told."""

from collections.abc import Iterable
from typing import Any

import numpy as np
import pandas as pd

from labkit.fleet.model import ABSENT, Fleet
from labkit.policies.base import WITH_REPORTS, Policy
from labkit.policies.naming import parse_policy


def rule_needs(fleet: Fleet, policies: Iterable[Policy | str], *, report_every: int = 0) -> pd.DataFrame:
    """Return what each rule needs on a fleet.

    Parameters
    ----------
    fleet : Fleet
        With a table of choices.
    policies : iterable of Policy or str
    report_every : int
        Tasks from one report of all loads to the next; 0 where loads are asked for as they are.

    Returns
    -------
    pandas.DataFrame
        One row a rule: policy, knows (in words), moves_work (whether it moves work already placed, which no
        placement rule can), memory (bytes of the tables that a dispatcher keeps), messages_per_task (loads of
        single servers that must be told to the dispatcher, per task: those of the options, or reports of all
        loads shared among the tasks between them, and what a picture of the whole fleet takes).

    Notes
    -----
    Messages are counted in loads sent, not in packets: a report of all loads is one for each server.
    """
    options = fleet.options
    shown = np.count_nonzero(options != ABSENT, axis=1)
    demand = np.ones(len(options)) if fleet.demand is None else fleet.demand
    # Options of a task, on average over the demand.
    looks = float(demand @ shown / demand.sum())
    rows = []
    for policy in policies:
        rule = parse_policy(policy)
        rows.append(
            {
                "policy": rule.name,
                "knows": rule.knows,
                "moves_work": rule.moves_work,
                "memory": _bytes_of(rule.prepare(fleet)),
                "messages_per_task": _messages(rule, fleet, looks, report_every),
            }
        )
    return pd.DataFrame(rows)


def _bytes_of(state: Any) -> int:
    """Return the bytes of all arrays in a policy's state."""
    if isinstance(state, np.ndarray):
        return int(state.nbytes)
    return sum(map(_bytes_of, state)) if isinstance(state, tuple) else 0


def _messages(rule: Policy, fleet: Fleet, looks: float, report_every: int) -> float:
    picture = rule.renewal(fleet)
    if report_every:
        # One report serves all: the options' loads and the picture.
        return fleet.size / report_every if rule.compares > 0 or picture else 0.0
    # Where a picture is kept up to date at each placement, it is told of each.
    whole = 1.0 if picture == WITH_REPORTS else (fleet.size / picture if picture else 0.0)
    return rule.compares * looks + whole
