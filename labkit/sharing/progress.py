"""How many replicates this process has run, told to whoever started it.

The environment variable LABKIT_PROGRESS names a file for the number; nothing is told without it.
"""

import contextlib
import os
import time
from pathlib import Path
from threading import Lock

VARIABLE = "LABKIT_PROGRESS"
# Seconds between two writes.
_PAUSE = 0.2

_lock = Lock()
_done = 0
_told = 0.0


def add(replicates: int) -> None:
    """Count replicates that are done; none tells at once what has been counted."""
    global _done, _told
    place = os.environ.get(VARIABLE)
    if not place:
        return
    with _lock:
        _done += replicates
        now = time.monotonic()
        if replicates == 0 or now - _told >= _PAUSE:
            _told = now
            with contextlib.suppress(OSError):  # no run fails because its progress cannot be told
                Path(place).write_text(str(_done), encoding="ascii")


def told(place: Path) -> int:
    """Return the last number that was told, 0 when there is none."""
    try:
        return int(place.read_text(encoding="ascii") or 0)
    except (OSError, ValueError):
        return 0
