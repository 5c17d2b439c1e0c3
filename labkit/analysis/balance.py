"""What the survey means for an answer, in words."""

import re
from collections.abc import Sequence
from typing import Any

from labkit.analysis.wording import utilisation, writer
from labkit.survey.facts import Survey

NAMED = 6


def balance_in_words(best: Survey, work: float) -> str:
    """Return whether a fleet is balanceable, and what stands in the way.

    Parameters
    ----------
    best : Survey
        Of the fleet.
    work : float
        Work placed, in work units; the demands divide it.
    """
    scale = work / (best.mean * best.fleet.total_capacity)
    optimum, mean = best.optimum * scale, best.mean * scale
    if best.balanceable:
        return (
            f"The fleet is balanceable: some split of the demand fills all servers to the mean of "
            f"{utilisation(mean)}, so all of the headroom is owed to the rule."
        )
    write = writer(optimum - mean)
    return (
        f"The fleet is not balanceable: whatever the rule, {in_words(best.bottleneck)} will on average be at "
        f"least {write(optimum)} full, {write(optimum - mean)} above the mean of {write(mean)}, since that "
        "much demand can go nowhere else. A rule controls only the excess over this optimum."
    )


def as_markdown(words: str) -> str:
    """Return words so that Markdown shows every sign in them as it is."""
    return re.sub(r"([\\`*_{}\[\]<>()#+.!|~$&-])", r"\\\1", words)


def in_words(servers: Sequence[Any]) -> str:
    """Return the names of servers as they stand in a sentence; of many only the first few."""
    names = [str(name) for name in servers]
    if len(names) == 1:
        return f"server {names[0]}"
    if len(names) <= NAMED:
        return f"the servers {', '.join(names[:-1])} and {names[-1]}"
    left = len(names) - NAMED + 1
    return f"the {len(names):,} servers {', '.join(names[: NAMED - 1])} and {left:,} more"
