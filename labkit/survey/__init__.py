"""Exact facts about a fleet, without simulation."""

import sys
from types import ModuleType
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from labkit.fleet.model import Fleet
    from labkit.survey.facts import Survey


class _Room(ModuleType):
    """`labkit.survey` is this room as well as the function of that name: whoever imports first, it works."""

    def __call__(self, fleet: "Fleet") -> "Survey":
        from labkit.survey.facts import survey

        return survey(fleet)


sys.modules[__name__].__class__ = _Room
