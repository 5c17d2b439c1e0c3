"""Where a notebook is executed: this checkout with the running Python, or another one with its own."""

import sys
from dataclasses import dataclass
from pathlib import Path

from labkit.records.project import ROOT


@dataclass(frozen=True)
class Place:
    """The root of a checkout, the Python for it, and its commit when it is a work tree made of one."""

    root: Path
    python: Path
    commit: str = ""

    @property
    def name(self) -> str:
        """``here``, or the commit."""
        return self.commit or "here"


HERE = Place(ROOT, Path(sys.executable))
