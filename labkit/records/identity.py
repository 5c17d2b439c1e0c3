"""Which run is it: a digest of everything that can change its results, and the key of its random streams.

Two executions with equal notebook code, parameters, entropy and computing sources are the same run, wherever
and however they are started. Files count by content, not by place.
"""

import hashlib
import json
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

from labkit.checks import shown
from labkit.errors import InputError
from labkit.records.declared import EXECUTION_ONLY, Notebook, is_path
from labkit.records.project import from_root
from labkit.sources import library_version

if TYPE_CHECKING:
    import numpy as np

# These do not shape the arriving work: the rule and what it knows, what is done with tasks when they are
# there, how often and when it is measured. Points that differ only in them meet the same arrivals, and more
# replicates keep those already there. Each of several load factors meets its own.
NOT_ARRIVALS = EXECUTION_ONLY | {
    *("policies", "policy", "report_every", "checkpoints", "entropy"),
    *("replicates", "precision", "most_replicates", "precision_of"),
    *("discipline", "failures", "on_failure", "limit", "on_full", "report_age", "load_factors"),
    *("warmup", "target", "block", "day", "unit"),
}


@dataclass(frozen=True)
class Identity:
    """What a run is called and what its random streams start from."""

    run_id: str
    entropy: int
    key: int
    parameters: dict[str, Any]
    inputs: dict[str, str]
    library: str

    @property
    def seed(self) -> "np.random.SeedSequence":
        """The seed sequence of the run; replicate and stream are appended to its spawn key."""
        import numpy as np

        return np.random.SeedSequence(self.entropy, spawn_key=(self.key,))


def identify(notebook: Notebook, values: dict[str, Any]) -> Identity:
    """Work out the identity of the run of a notebook with these checked parameter values.

    Parameters
    ----------
    notebook : Notebook
        The saved notebook; one that declares no ``entropy`` has nothing random in it.
    values : dict
        A checked value for each declared parameter.

    Returns
    -------
    Identity
        `run_id` has 16 hex digits. `key` is 32 bits wide, one word of a spawn key: NumPy mixes a spawn key
        word by word, so a wider number would pass as two and could meet a spawn key of another depth.
    """
    entropy = check_entropy(values["entropy"]) if "entropy" in notebook.parameters else 0
    parameters = {name: value for name, value in values.items() if name not in EXECUTION_ONLY}
    inputs = {
        name: content_digest(from_root(value))
        for name, value in parameters.items()
        if is_path(name) and isinstance(value, str) and value
    }
    meant = {name: inputs.get(name, value) for name, value in parameters.items()}
    arrivals = {name: value for name, value in meant.items() if name not in NOT_ARRIVALS}
    library = library_version()
    run_id = _digest(
        {"notebook": notebook.digest, "parameters": meant, "entropy": entropy, "library": library}
    )
    return Identity(run_id[:16], entropy, int(_digest(arrivals)[:8], 16), parameters, inputs, library)


def check_entropy(value: Any) -> int:
    """Return the entropy when it is a whole number of at least 0; it may have any number of digits."""
    if not isinstance(value, int) or isinstance(value, bool) or value < 0:
        raise InputError(f"entropy is {shown(value)}; give a whole number of at least 0.")
    return value


def canonical(value: Any) -> str:
    """Return the one JSON text of a value: sorted keys, no spaces, ASCII, no NaN or infinity."""
    try:
        return json.dumps(value, sort_keys=True, separators=(",", ":"), allow_nan=False)
    except (TypeError, ValueError):
        raise InputError(
            f"parameters are {shown(value)}; give only texts, finite numbers, true, false, null and "
            "lists of them."
        ) from None


def _digest(value: Any) -> str:
    return hashlib.sha256(canonical(value).encode()).hexdigest()


def content_digest(path: Path) -> str:
    """Return the SHA-256 of a file, or of the .csv and .parquet files in a folder with their names."""
    total = hashlib.sha256()
    for file in content_files(path):
        state = file.stat()
        name = file.name if path.is_dir() else ""
        total.update(f"{name}\0{_file_digest(file, state.st_size, state.st_mtime_ns)}\0".encode())
    return total.hexdigest()


def content_files(path: Path) -> list[Path]:
    """Return a file itself, or the .csv and .parquet files in a folder: what `content_digest` reads."""
    if not path.is_dir():
        return [path]
    return sorted(file for file in path.iterdir() if file.suffix in (".csv", ".parquet") and file.is_file())


@cache
def _file_digest(path: Path, size: int, changed: int) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
