"""A digest of the package's own sources: it keys compiled code, run ids and answers."""

import hashlib
from collections.abc import Sequence
from pathlib import Path


def source_digest(folder: Path, rooms: Sequence[str] = (".",)) -> str:
    """Return 16 hex digits for the Python sources in these rooms (folders or files) of a folder."""
    total = hashlib.sha256()
    for room in rooms:
        place = folder / room
        for file in sorted(place.rglob("*.py")) if place.is_dir() else [place]:
            total.update(file.relative_to(folder).as_posix().encode() + b"\0")
            total.update(file.read_bytes().replace(b"\r\n", b"\n") + b"\0")
    return total.hexdigest()[:16]
