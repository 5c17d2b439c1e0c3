"""Names of files and folders that are being written, and the removal of those whose writer has died.

A name tells its writer: ``.<what>.<machine>.<process>-<start of the process>.<random>.tmp``. On the same
machine a writer is dead when its process is; no clock is asked. A writer elsewhere is taken for dead after a
day; should a clock be so wrong that it lives, it misses its file and writes once again.
"""

import functools
import hashlib
import os
import platform
import re
import secrets
import shutil
import time
from collections.abc import Iterable
from pathlib import Path

_NAME = re.compile(r"\.[^.]+\.([0-9a-f]{8})\.(\d{1,18})(?:-(\d{1,24}))?\.[0-9a-f]+\.tmp")
_DAY = 86_400.0


def name_of_new(what: str) -> str:
    """Return an unused name for a file or folder that this process is about to write."""
    process = os.getpid()
    return f".{what}.{machine()}.{process}-{start_of(process)}.{secrets.token_hex(8)}.tmp"


def is_leftover(name: str) -> bool:
    """Tell whether a file or folder of this name is, or was, being written."""
    return _NAME.fullmatch(name) is not None


def is_abandoned(path: Path) -> bool:
    """Tell whether a path has the name of something being written, and its writer is taken for dead."""
    found = _NAME.fullmatch(path.name)
    if found is None:
        return False
    if found[1] == machine():
        return not is_alive(int(found[2]), found[3])
    try:
        return time.time() - path.stat().st_mtime > _DAY
    except OSError:
        return False


def sweep(folder: Path, names: Iterable[str]) -> list[Path]:
    """Remove what dead writers left among the names in a folder; return what was removed."""
    removed = []
    for path in [folder / name for name in names if name.startswith(".")]:
        if not is_abandoned(path):
            continue
        try:
            if path.is_dir() and not path.is_symlink():
                shutil.rmtree(path)
            else:
                path.unlink()
        except OSError:
            continue  # another process sweeps, too, or it cannot be removed: `labkit check` names it
        removed.append(path)
    return removed


@functools.cache
def machine() -> str:
    """Return eight digits for all processes whose numbers this process can look up.

    Containers on one host number their processes apart, although they may share its name.
    """
    try:
        numbers = os.readlink("/proc/self/ns/pid")
    except OSError:
        numbers = ""
    return hashlib.sha256(f"{platform.node()} {numbers}".encode()).hexdigest()[:8]


def start_of(process: int) -> str:
    """Return when a process started, in ticks since the machine did; 0 where this cannot be known.

    Numbers of processes are given again, soon in a container; number and start together are not.
    """
    try:
        with open(f"/proc/{process}/stat", "rb") as stream:
            return stream.read().rpartition(b")")[2].split()[19].decode()
    except (OSError, IndexError):
        return "0"


def is_alive(process: int, start: str | None) -> bool:
    """Tell whether the process of this number is alive, and started at this moment where that is known."""
    if os.name != "posix":
        return True
    try:
        os.kill(process, 0)
    except (ProcessLookupError, OverflowError):
        return False
    except PermissionError:
        pass
    now = start_of(process)
    return start is None or "0" in (start, now) or start == now
