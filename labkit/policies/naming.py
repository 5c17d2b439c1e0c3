"""Policies by name: the text that stands in study files, records and tables."""

import inspect
import re
from typing import Any

from labkit.checks import nearest
from labkit.errors import InputError
from labkit.policies.base import Policy
from labkit.policies.least_loaded import LeastLoaded
from labkit.policies.mixed import Mixed
from labkit.policies.one_choice import OneChoice
from labkit.policies.pairwise_averaging import PairwiseAveraging
from labkit.policies.smooth_feedback import SmoothFeedback
from labkit.policies.static_split import StaticSplit
from labkit.policies.tree_flow import TreeFlow

BUILT_IN: dict[str, type[Policy]] = {
    "one-choice": OneChoice,
    "least-loaded": LeastLoaded,
    "mixed": Mixed,
    "static-split": StaticSplit,
    "smooth-feedback": SmoothFeedback,
    "tree-flow": TreeFlow,
    "pairwise-averaging": PairwiseAveraging,
}
_FORM = re.compile(r"\s*([\w-]+)\s*(?:\((.*)\))?\s*")


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
    form = _FORM.fullmatch(policy) if isinstance(policy, str) else None
    if form is None:
        raise InputError(f"policy is {policy!r}; give a policy or its name, such as 'mixed(beta=0.5)'.")
    name, inside = form.groups()
    if name not in BUILT_IN:
        raise InputError(f"policy is {policy!r}; {nearest(name, BUILT_IN)}.")
    kind = BUILT_IN[name]
    known = inspect.signature(kind).parameters
    values: dict[str, Any] = {}
    for part in filter(None, (part.strip() for part in (inside or "").split(","))):
        key, equals, value = (piece.strip() for piece in part.partition("="))
        if key in values:
            raise InputError(f"policy is {policy!r}; give {key} once.")
        if not equals or key not in known:
            allowed = nearest(key, known) if known else "it takes no parameters"
            raise InputError(f"policy is {policy!r}, with {part!r}; {allowed}.")
        values[key] = _number_or_word(value)
    missing = [key for key, about in known.items() if about.default is about.empty and key not in values]
    if missing:
        raise InputError(f"policy is {policy!r}; it needs {missing[0]}, as in '{name}({missing[0]}=0.5)'.")
    return kind(**values)


def _number_or_word(text: str) -> float | str:
    try:
        return int(text) if re.fullmatch(r"[+-]?[0-9]+", text) else float(text)
    except ValueError:
        return text


def moves_placed_work(name: str) -> bool:
    """Tell whether the built-in policy of this name moves work already placed: a reference, not a rule."""
    form = _FORM.fullmatch(name)
    kind = BUILT_IN.get(form.group(1)) if form else None
    return kind is not None and kind.moves_work


def shown_name(name: str) -> str:
    """Return a policy's name as tables and figures show it, marked where it moves work already placed."""
    return f"{name} (moves placed work)" if moves_placed_work(name) else name
