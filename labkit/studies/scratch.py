"""Temporary folders that tell who made them, so that those of a process that was killed are removed."""

import contextlib
import os
import re
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

from labkit.records import leftovers

# Where sockets lie when the path of the usual place is longer than this.
SHORT, ROOM = "/tmp", 60

_NAME = re.compile(r"labkit-([0-9a-f]{4})-([0-9a-v]{1,12})-([0-9a-v]{1,16})-\w+")


@contextlib.contextmanager
def scratch_folder() -> Iterator[Path]:
    """Make a temporary folder and remove it at the end."""
    folder = new_folder()
    try:
        yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def new_folder(place: str | None = None) -> Path:
    """Make a temporary folder of this process, in the usual place for such or another."""
    process = os.getpid()
    numbers = (process, int(leftovers.start_of(process)))
    prefix = "-".join(["labkit", _machine(), *map(_short, numbers), ""])
    return Path(tempfile.mkdtemp(prefix=prefix, dir=place))


def folder_for_sockets() -> Path:
    """Make a temporary folder with a short path: that of a socket has room for about a hundred bytes."""
    usual = tempfile.gettempdir()
    return new_folder(usual if len(os.fsencode(usual)) <= ROOM or not os.path.isdir(SHORT) else SHORT)


def sweep_folders() -> None:
    """Remove the temporary folders of this user's processes on this machine that have died."""
    for place in {tempfile.gettempdir(), SHORT}:
        _sweep_in(Path(place))


def _sweep_in(place: Path) -> None:
    try:
        names = os.listdir(place)
    except OSError:
        return
    for name in names:
        found = _NAME.fullmatch(name)
        if found is None or found[1] != _machine():
            continue
        process, start = (int(text, 32) for text in found.groups()[1:])
        if not leftovers.is_alive(process, str(start)) and _is_own(place / name):
            shutil.rmtree(place / name, ignore_errors=True)


def _machine() -> str:
    return leftovers.machine()[:4]


def _short(number: int) -> str:
    """Return a number in base 32, as ``int(text, 32)`` reads it."""
    digits = "0123456789abcdefghijklmnopqrstuv"
    text = digits[number % 32]
    while number := number // 32:
        text = digits[number % 32] + text
    return text


def _is_own(path: Path) -> bool:
    try:
        state = path.lstat()
    except OSError:
        return False
    return not path.is_symlink() and (not hasattr(os, "getuid") or state.st_uid == os.getuid())
