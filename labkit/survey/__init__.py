"""Exact facts about a fleet, without simulation."""

import sys
from types import ModuleType
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Callable

    from labkit.fleet.model import Fleet
    from labkit.survey.facts import Survey


def _function() -> "Callable[[Fleet], Survey]":
    from labkit.survey.facts import survey

    return survey


class _Room(ModuleType):
    """`labkit.survey` is this room as well as the function of that name: whoever imports first, it works."""

    def __reduce__(self) -> tuple:
        return _function, ()

    def __call__(self, fleet: "Fleet") -> "Survey":
        return _function()(fleet)


sys.modules[__name__].__class__ = _Room
