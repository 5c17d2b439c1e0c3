"""Which runs of a study one answer is made from: those that differ only in what an answer compares."""

import hashlib
import re
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from labkit.records.declared import is_path
from labkit.records.identity import canonical
from labkit.studies.model import Point, Study

# An answer compares the kinds of information; on what else its runs must agree.
COMPARED = frozenset({"report_every"})


@dataclass(frozen=True)
class Group:
    """Grid points that share one answer.

    Attributes
    ----------
    values : dict
        The grid parameters that tell this group from the others; none when it is the only one.
    folder : str
        Where its answer goes in the study's folder; empty when it is the only one.
    points : list of Point
    """

    values: dict[str, Any]
    folder: str
    points: list[Point]

    @property
    def heading(self) -> str:
        """What the group is about, in words; empty when it is the only one."""
        return in_words(self.values)


def in_words(values: dict[str, Any]) -> str:
    """Return parameter values as they stand in a sentence."""
    return ", ".join(f"{name} = {value}" for name, value in values.items())


def groups_of(study: Study) -> list[Group]:
    """Return the groups of a study's points, in the order of its grid.

    A grid parameter separates groups unless an answer compares it: `report_every`; `policies` when no policy
    stands in two of its lists; and what the study's answer `mixes`, for an answer notebook that can do it.
    """
    mixed = COMPARED | set(study.answer_mixes)
    if _disjoint(study.grid.get("policies", [])):
        mixed |= {"policies"}
    telling = [
        name
        for name, values in study.grid.items()
        if name not in mixed and len({canonical(value) for value in values}) > 1
    ]
    found: dict[str, list[Point]] = {}
    for point in study.points:
        found.setdefault(canonical([point.parameters[name] for name in telling]), []).append(point)
    values = [{name: points[0].parameters[name] for name in telling} for points in found.values()]
    return [Group(*each) for each in zip(values, _folders(values), found.values(), strict=True)]


def _disjoint(lists: list[Any]) -> bool:
    members = [canonical(member) for each in lists if isinstance(each, list) for member in each]
    return len(members) == len(set(members))


def _folders(groups: list[dict[str, Any]]) -> list[str]:
    """Return a short folder name for each group; names that would meet, or are long, end in a digest."""
    words = ["_".join(f"{name}-{_word(name, value)}" for name, value in each.items()) for each in groups]
    folded = [word.lower() for word in words]
    return [
        word
        if len(word) <= 80 and folded.count(word.lower()) == 1
        else f"{word[:60]}-{hashlib.sha256(canonical(each).encode()).hexdigest()[:8]}"
        for word, each in zip(words, groups, strict=True)
    ]


def _word(name: str, value: Any) -> str:
    if isinstance(value, list):
        return "-".join(_word("", each) for each in value)
    text = Path(value).name if is_path(name) and isinstance(value, str) else str(value)
    return re.sub(r"[^A-Za-z0-9_.-]+", "-", text).strip("-.") or "none"
