"""One SHA-256 for a fleet: the same for the same servers and choices, however the tables were stored."""

import hashlib
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from labkit.fleet.model import Fleet

_CHUNK = 1 << 16  # part of the definition: changing it changes every digest


def fleet_digest(fleet: "Fleet") -> str:
    """Return the SHA-256, in hex, of names, capacities, options and demands in table order.

    Names enter as 64-bit whole numbers or as UTF-8 text with their kind, amounts as 64-bit floats and
    options as server positions, all little-endian, so that neither the width of a column nor the version
    of a library shows.
    """
    sha = hashlib.sha256()
    law = fleet.implicit
    sha.update(f"fleet 1; servers {fleet.size}; ".encode())
    if law is not None:
        sha.update(f"every set of {law.options}; distinct {law.distinct}".encode())
        return sha.hexdigest()
    for start in range(0, fleet.size, _CHUNK):
        _add_names(sha, fleet.names[start : start + _CHUNK])
    _add_amounts(sha, fleet.capacity, 1.0, fleet.size)
    choices, most = fleet.options.shape
    sha.update(f"choices {choices}; options {most}; ".encode())
    for start in range(0, choices, _CHUNK):
        sha.update(fleet.options[start : start + _CHUNK].astype("<u4").tobytes())
    _add_amounts(sha, fleet.demand, fleet.equal_demand, choices)
    return sha.hexdigest()


def _add_names(sha: Any, names: Any) -> None:
    if names.dtype.kind in "iu":
        sha.update(bytes(len(names)))
        sha.update(names.to_numpy().astype("<i8").tobytes())
        return
    values = names.to_numpy(dtype=object)
    text = [value.encode("utf-8", "surrogatepass") for value in values if isinstance(value, str)]
    kinds = np.array([isinstance(value, str) for value in values], dtype=np.uint8)
    sha.update(kinds.tobytes())
    sha.update(np.array([value for value in values if not isinstance(value, str)], dtype="<i8").tobytes())
    sha.update(np.array([len(value) for value in text], dtype="<u4").tobytes())
    sha.update(b"".join(text))


def _add_amounts(sha: Any, values: np.ndarray | None, each: float, count: int) -> None:
    for start in range(0, count, _CHUNK):
        stop = min(start + _CHUNK, count)
        chunk = np.full(stop - start, each) if values is None else values[start:stop]
        # Adding 0.0 turns -0.0, which is equal to it, into 0.0.
        sha.update((chunk + 0.0).astype("<f8").tobytes())
