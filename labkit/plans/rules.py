"""What each policy adds to a plan: its parameters, its tables, and how it decides, in words."""

from collections.abc import Callable
from copy import copy
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any

import numpy as np
import pandas as pd

from labkit.engine.weights import comparison_weights
from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet
from labkit.policies.base import Policy
from labkit.policies.least_loaded import LeastLoaded
from labkit.policies.mixed import Mixed
from labkit.policies.one_choice import OneChoice
from labkit.policies.own_rule import OwnRule
from labkit.policies.smooth_feedback import SmoothFeedback
from labkit.policies.static_split import StaticSplit
from labkit.policies.tree_flow import WHOLE, TreeFlow, frame_of

UNIT = "the top 53 bits of the word as a float: floor(word / 2^11) * 2^-53"
_EVEN = "option number floor(coin * options / 2^64), from 0"
_SHARES = (
    "option number, from 0: how many of the choice's bounds but its last are at most unit(coin) * its last "
    f"bound, where unit(word) is {UNIT}"
)
_LEAST = (
    "the lowest utilisation: one server is below another when load * weight of the other < load of the other "
    "* its own weight"
)
_BELOW = "one is below another when amount * weight of the other < amount of the other * its own weight"
_FAIR = "of the t options level with the lowest, in order, number floor(coin * t / 2^64), from 0"
_LOADLESS = "loads are not compared"
_PUSH = (
    "the push along a pair of options is the sum over its rows in pushes.csv, in order, of {}, towards the "
    "pair's second option where it is above 0, else its first"
)
_PULLS = {
    "sign": "push * sign(the set's difference)",
    "linear": "push * max(-1, min(1, the set's difference * its slope)), cut to a whole number towards 0",
}
_STEERED = (
    "an own word is taken, and w = floor(word / 2^32); for each of the choice's pairs, in order: if w < "
    "|push| the task goes the way of the push, else w falls by |push|; if it goes nowhere so, to "
)
_SHIFTED = (
    "for each of the choice's pairs, bounds first + 1 to second fall by floor(push / 2) * 2^-32; with these "
)
_TILTED = (
    "width 0: the lowest utilisation. Else tilted = load + tilt; loads as last known, tilts as last worked "
    "out, 0 at first. Two options: where they are level in load, the first one's tilted rises by "
    "(unit(coin) - 0.5) * width; then the lowest tilted for its weight, ties by the coin. More: best is the "
    "first found with the lowest tilted for its weight; each option in order takes word = "
    "(word * 6364136223846793005 + 1442695040888963407) mod 2^64, with word = coin before the first, and "
    "bids tilt / weight + (unit(word) - 0.5) * width / weight of best; among those level with best in load, "
    "the first lowest bid"
)
_SMOOTHED = (
    "From all loads, sums in table order from 0: work = sum of loads; for each server field = load - due * "
    "work; for each part beyond = sum of its fields; then field falls by room * (beyond / part_room), or is "
    "0 where part_room is blank. For each shift: x = field, and 0 for the extra vertex; for each row of "
    "shares.csv, in order, x[far] += share * x[vertex]; x = x / pivot, or 0 where the pivot is 0; for each "
    "row in reverse order x[vertex] += share * x[far]; for each server total += strength * (x - x of the "
    "extra vertex). At last tilt = total * scale."
)
_OF_SETS = {
    "number": "number of the set, from 0",
    "parent": "the smallest set of this table that holds it, blank for none",
    "level": "0 for a whole connected part of the fleet, one more for each halving",
    "first_half": "servers in its first half",
    "second_half": "servers in its second half",
    "strength": "probability, per unit demand and unit flow, of being pushed by the set (the pushes hold it)",
    "slope": "what the difference is multiplied by where the response is linear, else blank",
}
_OF_PATHS = {
    "number": "number of the server",
    "set": "a set that holds it",
    "step": "what one unit of load there adds to the set's difference: above 0 in its first half, else below",
}
_OF_PUSHES = {
    "choice": "number of the choice",
    "first": "the pair's first option, from 0",
    "second": "the pair's second option, from 0",
    "set": "the set that pushes",
    "push": "its full push towards the second option when its difference is above 0, in 2^-32",
}
_OF_SHIFTS = {
    "number": "number of the shift, from 1",
    "shift": "the shift",
    "strength": "its weight in the sum",
}
_OF_VERTICES = {
    "number": "number of the server; the last row is an extra vertex",
    "pivot_k": "what x is divided by for shift k; 0 for the vertex whose x becomes 0",
}
_OF_JOINTS = {
    "vertex": "vertex whose x is shared, in the order of elimination",
    "far": "vertex that gets a share, and is eliminated later",
    "share_k": "the share for shift k",
}
_NEVER = "No table depends on the loads: nothing is worked out anew."
_NO_WORDS = "none is used"


@dataclass(frozen=True)
class Parts:
    """What one policy puts into a plan.

    Attributes
    ----------
    rule : str
        The word by which a dispatcher knows the rule.
    parameters : dict
        Numbers and words that the rule needs besides tables.
    decision, ties, own, refresh : str
        How it decides, what it does with equal options and with its own stream, and when tables change.
    servers, choices : dict
        Further columns of these tables: values and meaning by name.
    tables : dict
        Further tables by file name.
    meanings : dict
        By file name, the meaning of the columns of the further tables.
    """

    rule: str
    parameters: dict[str, Any]
    decision: str
    ties: str
    own: str = _NO_WORDS
    refresh: str = _NEVER
    servers: dict[str, tuple[Any, str]] = field(default_factory=dict)
    choices: dict[str, tuple[Any, str]] = field(default_factory=dict)
    tables: dict[str, pd.DataFrame] = field(default_factory=dict)
    meanings: dict[str, dict[str, str]] = field(default_factory=dict)


def _bounds(values: np.ndarray, fleet: Fleet, meaning: str) -> dict[str, tuple[pd.Series, str]]:
    """Return columns of bounds, one for each option that is there."""
    there = fleet.options != ABSENT
    return {
        f"bound_{place + 1}": (pd.Series(values[:, place]).where(there[:, place]), meaning.format(place + 1))
        for place in range(values.shape[1])
    }


def _coin(fleet: Fleet) -> tuple[str, dict[str, tuple[pd.Series, str]]]:
    """Return how a coin picks by the capacities, and the columns for it."""
    weight = comparison_weights(fleet.capacity)
    if weight is None:
        return _EVEN, {}
    there = fleet.options != ABSENT
    passed = np.cumsum(np.where(there, weight[np.where(there, fleet.options, 0)], 0.0), axis=1)
    return _SHARES, _bounds(passed, fleet, "running sum of the options' weights up to option {}")


def _one_choice(rule: Any, fleet: Fleet, state: tuple[Any, ...]) -> Parts:
    decision, choices = _coin(fleet)
    return Parts("one-choice", {"looks": False}, decision, _LOADLESS, choices=choices)


def _least_loaded(rule: Any, fleet: Fleet, state: tuple[Any, ...]) -> Parts:
    ties = _FAIR if rule.ties == "random" else "the option that comes first in the choice"
    return Parts("least-loaded", {"looks": True, "ties": rule.ties}, _LEAST, ties)


def _mixed(rule: Any, fleet: Fleet, state: tuple[Any, ...]) -> Parts:
    decision, choices = _coin(fleet)
    decision = (
        f"when unit(own word) < beta, where unit(word) is {UNIT}, {_LEAST}; else by the coin: {decision}"
    )
    return Parts("mixed", {"beta": rule.beta}, decision, _FAIR, own="one word a decision", choices=choices)


def _static_split(rule: Any, fleet: Fleet, state: tuple[Any, ...]) -> Parts:
    if not len(state[0]):  # an even split is fair, by the capacities
        decision, choices = _coin(fleet)
    else:
        meaning = "upper bound of option {}'s part of [0, 1] in the fair split of the demand"
        decision, choices = _SHARES, _bounds(_closed(state[0], fleet), fleet, meaning)
    return Parts("static-split", {"looks": False}, decision, _LOADLESS, choices=choices)


def _closed(bounds: np.ndarray, fleet: Fleet) -> np.ndarray:
    """Return bounds with 1 for the last option of each choice."""
    last = (fleet.options != ABSENT).sum(axis=1) - 1
    whole = np.column_stack([bounds, np.ones(len(bounds))])
    whole[np.arange(len(whole)), last] = 1.0
    return whole


def _smooth_feedback(rule: Any, fleet: Fleet, state: tuple[Any, ...]) -> Parts:
    _, width, _, due, scale, fixed, _ = state
    strength, shift, taken, order, start, far, pivot, share, _, room, part, slow, *_ = fixed
    if taken != fleet.size:
        raise InputError(
            f"policy {rule.name} solves for {fleet.size + 1 - taken:,} of the fleet's servers by iteration, "
            "which no table holds; plan tree-flow or least-loaded."
        )
    vertex = np.repeat(order, np.diff(start))
    # Backwards within a vertex, so that the whole table read backwards has each vertex's entries in order.
    entry = np.lexsort((-np.arange(len(vertex)), np.repeat(np.arange(len(order)), np.diff(start))))
    entry = entry if len(strength) else entry[:0]  # nothing is slow, and nothing to be solved
    pivots = np.zeros_like(pivot)
    pivots[order[:-1]] = pivot[:-1]
    shifts = range(len(strength))
    parts = np.bincount(part, room)
    return Parts(
        "smooth-feedback",
        {"looks": True, "gain": rule.gain, "width": float(width)},
        f"{_TILTED}; where unit(word) is {UNIT}",
        f"{_BELOW}; {_FAIR}",
        refresh=_SMOOTHED,
        servers={
            "due": (due, "its load in the fair split of one unit of work"),
            "scale": (scale, "gain * capacity / mean capacity"),
            "room": (room, "capacity / mean capacity"),
            "part": (part, "number of its connected part of the fleet, from 0"),
            "part_room": (
                np.where(slow, parts, np.nan)[part],
                "room of its part, blank if nothing is slow there",
            ),
        },
        tables={
            "shifts.csv": pd.DataFrame(
                {"number": np.arange(1, len(strength) + 1), "shift": shift, "strength": strength}
            ),
            "vertices.csv": pd.DataFrame(
                {
                    "number": np.arange(fleet.size + 1),
                    **{f"pivot_{k + 1}": pivots[:, k] for k in shifts},
                }
            ),
            "shares.csv": pd.DataFrame(
                {
                    "vertex": vertex[entry],
                    "far": order[far[entry]],
                    **{f"share_{k + 1}": share[entry, k] for k in shifts},
                }
            ),
        },
        meanings={"shifts.csv": _OF_SHIFTS, "vertices.csv": _OF_VERTICES, "shares.csv": _OF_JOINTS},
    )


def _tree_flow(rule: Any, fleet: Fleet, state: tuple[Any, ...]) -> Parts:
    _, head, entries, start, sets, step, slope, bounds, keeps, value, width = state
    by_coin = rule.leftover == "coin"
    if by_coin:
        meaning = "upper bound of option {}'s part of [0, 1] where no set pushes"
        # Whole multiples of 2^-32, which a float holds as they are.
        choices = _bounds(_closed(bounds / WHOLE, fleet), fleet, meaning)
    count = np.diff(head)
    pairs = np.array([(one, other) for one in range(width) for other in range(one + 1, width)])
    slot = np.repeat(np.arange(len(count)), count)
    first, second = pairs[slot % len(pairs)].T
    keeps_up = " A placement known at once raises them by step * size, too."
    return Parts(
        "tree-flow",
        {
            "looks": not by_coin,
            "strengths": rule.strengths,
            "leftover": rule.leftover,
            "response": rule.response,
            "keeps_up": bool(keeps),
        },
        f"{_PUSH.format(_PULLS[rule.response])}; " + (_SHIFTED + _SHARES if by_coin else _STEERED + _LEAST),
        _LOADLESS if by_coin else _FAIR,
        own=_NO_WORDS if by_coin else "one word a decision",
        refresh=(
            "All differences become 0; then for each row of paths.csv, in order, the set's difference rises "
            "by step * load of the server." + keeps_up * bool(keeps)
        ),
        choices=choices if by_coin else {},
        tables={
            "sets.csv": _sets(rule, fleet, slope),
            # Without what only fills rows up.
            "paths.csv": pd.DataFrame(
                {
                    "number": np.repeat(np.arange(fleet.size), np.diff(start)),
                    "set": sets.astype(np.int64),
                    "step": step,
                }
            )
            .query("step != 0")
            .reset_index(drop=True),
            "pushes.csv": pd.DataFrame(
                {
                    "choice": slot // len(pairs),
                    "first": first,
                    "second": second,
                    "set": entries[: len(slot)].astype(np.int64),
                    "push": value[: len(slot)],
                }
            )
            .query("push != 0")
            .reset_index(drop=True),
        },
        meanings={"sets.csv": _OF_SETS, "paths.csv": _OF_PATHS, "pushes.csv": _OF_PUSHES},
    )


def _sets(rule: Any, fleet: Fleet, slope: np.ndarray) -> pd.DataFrame:
    """Return the sets that steer, one a row: where they stand in the tree, and how strongly they steer."""
    tree, strength = frame_of(fleet).tree, rule.strengths_of(fleet)
    used = np.flatnonzero(strength > 0.0)
    parent = np.full(used.size, -1)
    around: list[tuple[int, int]] = []
    # Within `order` the sets are nested intervals: the last one still open is the one around.
    for row in sorted(range(used.size), key=lambda row: (tree.low[used[row]], -tree.high[used[row]])):
        while around and around[-1][0] <= tree.low[used[row]]:
            around.pop()
        parent[row] = around[-1][1] if around else -1
        around.append((int(tree.high[used[row]]), row))
    return pd.DataFrame(
        {
            "number": np.arange(used.size),
            "parent": pd.Series(parent, dtype="Int64").mask(parent < 0),
            "level": tree.level[used],
            "first_half": (tree.middle - tree.low)[used],
            "second_half": (tree.high - tree.middle)[used],
            "strength": strength[used],
            "slope": slope[: used.size] if len(slope) else np.full(used.size, np.nan),
        }
    )


PARTS: dict[type[Policy], Callable[[Any, Fleet, tuple[Any, ...]], Parts]] = {
    OneChoice: _one_choice,
    LeastLoaded: _least_loaded,
    Mixed: _mixed,
    StaticSplit: _static_split,
    SmoothFeedback: _smooth_feedback,
    TreeFlow: _tree_flow,
}


def check_plannable(rule: Policy, fleet: Fleet) -> None:
    """Refuse what cannot be written into tables for a dispatcher."""
    if isinstance(rule, OwnRule):
        raise InputError(
            f"policy {rule.name} is a rule of your own, which no table holds; port its function to your "
            "dispatcher."
        )
    if rule.moves_work:
        raise InputError(
            f"policy {rule.name} moves work already placed, which a dispatcher cannot do; plan a rule that "
            "only places."
        )
    if type(rule) not in PARTS:
        raise InputError(f"policy {rule.name} has no plan; plan one of labkit's placement rules.")
    if isinstance(rule, TreeFlow) and rule.steering != "net":
        raise InputError(
            f"policy {rule.name} draws sets from alias tables, which no plan holds; plan tree-flow with "
            "steering=net."
        )
    if fleet.implicit is not None:
        raise InputError(
            "fleet is complete: its choices are not listed, and a plan has a row for each; give a fleet with "
            "a table of choices."
        )


def remembering(rule: Any) -> Any:
    """Return the rule, or a copy that works out only once what takes long and is needed twice."""
    if isinstance(rule, TreeFlow):
        rule = copy(rule)
        vars(rule)["strengths_of"] = lru_cache(rule.strengths_of)
    return rule


def parts_of(rule: Policy, fleet: Fleet, state: tuple[Any, ...]) -> Parts:
    """Return what a policy adds to the plan for a fleet, from the state it prepared."""
    return PARTS[type(rule)](rule, fleet, state)
