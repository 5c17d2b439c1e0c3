"""What would not fit into memory, refused before any of it is taken."""

import contextlib
import os
from pathlib import Path

from labkit.errors import InputError


def memory() -> int | None:
    """Return the bytes of memory that this machine, or its container, has; None when it cannot be told."""
    found = []
    with contextlib.suppress(AttributeError, OSError, ValueError):
        found.append(os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES"))
    for limit in ("memory.max", "memory/memory.limit_in_bytes"):
        with contextlib.suppress(OSError, ValueError):  # no container, or the word "max"
            found.append(int(Path("/sys/fs/cgroup", limit).read_text()))
    return min(found, default=None)


def check_memory(what: str, needed: int, advice: str) -> None:
    """Refuse what would take more memory than this machine has.

    Parameters
    ----------
    what : str
        The beginning of the sentence: what takes so much, with the value that makes it so.
    needed : int
        An estimate in bytes.
    advice : str
        The end of the sentence: what to do.

    Raises
    ------
    InputError
        With the estimate and what there is.
    """
    present = memory()
    if present is not None and needed > present:
        raise InputError(
            f"{what} would take about {_size(needed)} of memory and this machine has {_size(present)}: "
            f"{advice}."
        )


def _size(number: int) -> str:
    return f"{number // 10**9:,} GB" if number >= 10**10 else f"{number / 1e9:.2g} GB"
