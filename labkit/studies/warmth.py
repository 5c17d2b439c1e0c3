"""Whether compiled code is likely to be on disk already: several processes on an empty cache all compile."""

import contextlib
import os
from functools import cache
from pathlib import Path

from platformdirs import user_cache_path

from labkit.records.project import PACKAGE
from labkit.sources import source_digest

# Said before code is compiled.
COLD = "compiling for the first time, about 15 s"


@cache
def sources_digest() -> str:
    """Return a short digest of every source of labkit, those that only show results included."""
    return source_digest(PACKAGE)


def _mark() -> Path:
    return user_cache_path("labkit", appauthor=False) / f"warm-{sources_digest()}"


def is_warm() -> bool:
    """Tell whether a run of these very sources was executed on this machine before."""
    return _mark().exists()


def compiled_files() -> int:
    """Return how many files of compiled code there are; more of them mean that something was compiled."""
    place = os.environ.get("NUMBA_CACHE_DIR")
    code = Path(place) if place else _mark().parent / f"compiled-{sources_digest()}"
    return sum(1 for _ in code.rglob("*.nbc"))


def set_warm() -> None:
    """Remember that a run of these sources was executed; a place that cannot be written is no matter."""
    mark = _mark()
    with contextlib.suppress(OSError):
        mark.parent.mkdir(parents=True, exist_ok=True)
        for old in mark.parent.glob("warm-*"):
            old.unlink(missing_ok=True)
        mark.touch()
