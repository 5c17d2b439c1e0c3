"""What must be equal wherever replicates of one run are computed."""

import hashlib
from functools import cache

from labkit.sources import PACKAGE, PACKAGES, source_digest, versions

_OF_THE_CLUSTER = ("llvmlite", "dask", "distributed", "cloudpickle", "msgpack")
LOCK = "requirements.lock"


@cache
def facts() -> dict[str, str]:
    """Return the versions of labkit, Python and packages, the kind of machine, and a digest of the lock.

    The lock is the file beside the package in a checkout; "" where labkit is installed without one.
    """
    found = versions((*PACKAGES, *_OF_THE_CLUSTER))
    del found["platform"]
    found["labkit.sharing"] = source_digest(PACKAGE, ("sharing",))
    lock = PACKAGE.parent / LOCK
    found[LOCK] = hashlib.sha256(lock.read_bytes()).hexdigest()[:16] if lock.is_file() else ""
    return found


def mismatch(ours: dict[str, str], theirs: dict[str, str]) -> str:
    """Return what first differs, in words, or an empty text."""
    for name, value in ours.items():
        other = theirs.get(name, "")
        if other != value and not (name == LOCK and "" in (value, other)):
            return f"has {name} {other or 'missing'}, and this process {value or 'none'}"
    return ""
