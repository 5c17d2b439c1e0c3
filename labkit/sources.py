"""What the package consists of: a digest of its own sources, and the versions of all that computes."""

import hashlib
import platform
from collections.abc import Sequence
from functools import cache
from importlib import metadata
from pathlib import Path

from labkit import __version__

PACKAGE = Path(__file__).resolve().parent

# Some platforms lack pymetis; tree flow with and without it differs.
PACKAGES = ("numpy", "numba", "scipy", "pandas", "pyarrow", "pymetis")

# Rooms whose code can change a measure; the others only carry it.
COMPUTING = (
    "randomness.py",
    "compiled.py",
    "fleet",
    "survey",
    "policies",
    "engine",
    "stationary",
    "traces",
    "placing.py",
    "serving.py",
    "replaying.py",
    # By what rule replicates are added, and in which groups, decides what rows a record has.
    "analysis/stopping.py",
    "analysis/precision.py",
    "analysis/tables.py",
    # A search for capacity goes where its limits lead it.
    "provisioning.py",
    "analysis/capacity_search.py",
    "analysis/headroom.py",
    "analysis/service_limits.py",
    "analysis/block_bootstrap.py",
)


def source_digest(folder: Path, rooms: Sequence[str] = (".",)) -> str:
    """Return 16 hex digits for the Python sources in these rooms (folders or files) of a folder."""
    total = hashlib.sha256()
    for room in rooms:
        place = folder / room
        for file in sorted(place.rglob("*.py")) if place.is_dir() else [place]:
            total.update(file.relative_to(folder).as_posix().encode() + b"\0")
            total.update(file.read_bytes().replace(b"\r\n", b"\n") + b"\0")
    return total.hexdigest()[:16]


@cache
def library_version() -> str:
    """Return the version of labkit with a short digest of the sources that compute."""
    return f"{__version__}+{source_digest(PACKAGE, COMPUTING)}"


def versions(packages: Sequence[str] = PACKAGES) -> dict[str, str]:
    """Return the versions of Python, some packages, labkit and the machine's kind; "" for what is missing."""
    found = {}
    for name in packages:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            found[name] = ""
    return {
        **found,
        "python": platform.python_version(),
        "labkit": library_version(),
        "platform": platform.platform(),
        "machine": platform.machine(),
    }
