"""Policies by name: the text that stands in study files, records and tables."""

from typing import Any

from labkit.policies.base import Policy
from labkit.policies.least_loaded import LeastLoaded
from labkit.policies.mixed import Mixed
from labkit.policies.one_choice import OneChoice
from labkit.policies.pairwise_averaging import PairwiseAveraging
from labkit.policies.smooth_feedback import SmoothFeedback
from labkit.policies.static_split import StaticSplit
from labkit.policies.tree_flow import TreeFlow
from labkit.text import from_name, name_part

BUILT_IN: dict[str, type[Policy]] = {
    "one-choice": OneChoice,
    "least-loaded": LeastLoaded,
    "mixed": Mixed,
    "static-split": StaticSplit,
    "smooth-feedback": SmoothFeedback,
    "tree-flow": TreeFlow,
    "pairwise-averaging": PairwiseAveraging,
}


def parse_policy(policy: Any) -> Policy:
    """Return the policy that a text names, or the policy itself.

    Parameters
    ----------
    policy : str or Policy
        Such as ``"least-loaded"``, ``"least-loaded(ties=first)"`` or ``"mixed(beta=0.5)"``.

    Raises
    ------
    InputError
        Unknown name, unknown or missing parameter, or a value that the policy refuses.
    """
    if isinstance(policy, Policy):
        return policy
    parsed: Policy = from_name("policy", policy, BUILT_IN, "mixed(beta=0.5)")
    return parsed


def moves_placed_work(name: str) -> bool:
    """Tell whether the built-in policy of this name moves work already placed: a reference, not a rule."""
    kind = BUILT_IN.get(name_part(name) or "")
    return kind is not None and kind.moves_work


def shown_name(name: str) -> str:
    """Return a policy's name as tables and figures show it, marked where it moves work already placed."""
    return f"{name} (moves placed work)" if moves_placed_work(name) else name
