"""Where a record comes from: the state of the sources, and the versions of everything that computed."""

import hashlib
import json
import os
import platform
import subprocess
from importlib import metadata
from pathlib import Path

from labkit.randomness import BIT_GENERATOR, DRAWS
from labkit.records.identity import library_version
from labkit.records.project import ROOT

# Some platforms lack pymetis; tree flow with and without it differs.
PACKAGES = ("numpy", "numba", "scipy", "pandas", "pyarrow", "pymetis")


def provenance(root: Path = ROOT) -> dict[str, str | bool]:
    """Return the columns of a record that tell its origin.

    Returns
    -------
    dict
        `git_hash` (empty without git, repository or commit), `dirty` (True as well when it cannot be known),
        `diff_digest` (SHA-256 of the difference, empty when clean or unknown), `versions` (JSON),
        `bit_generator`, `draws`.
    """
    return {
        **source_state(root),
        "versions": json.dumps(versions(), sort_keys=True),
        "bit_generator": BIT_GENERATOR,
        "draws": DRAWS,
    }


def source_state(root: Path) -> dict[str, str | bool]:
    """Return the commit of the sources, whether they differ from it, and a digest of the difference.

    The digest covers name and content of each file that differs from the commit: changed, deleted, or
    untracked and not ignored. Unlike the text of ``git diff`` it does not depend on anyone's diff settings.
    """
    unknown: dict[str, str | bool] = {"git_hash": "", "dirty": True, "diff_digest": ""}
    try:
        if _git(root, "check-ignore", "-q", "labkit/__init__.py", codes=(0, 1, 128)).returncode != 1:
            return unknown  # no repository, or one that only surrounds an installed copy
        status = _git(root, "status", "--porcelain", "-z", "--untracked-files=all", "--no-renames", "--", ".")
        head = _git(root, "rev-parse", "--verify", "-q", "HEAD", codes=(0, 1))
        top = Path(os.fsdecode(_git(root, "rev-parse", "--show-toplevel").stdout.rstrip(b"\n")))
    except (OSError, subprocess.SubprocessError):
        return unknown
    total = hashlib.sha256()
    entries = sorted(entry[3:] for entry in status.stdout.split(b"\0") if entry)
    for name in entries:
        path = top / os.fsdecode(name)
        total.update(name + b"\0")
        try:
            total.update(hashlib.sha256(path.read_bytes()).digest())
        except OSError:
            total.update(b"absent")
    return {
        "git_hash": head.stdout.decode().strip(),
        "dirty": bool(entries),
        "diff_digest": total.hexdigest() if entries else "",
    }


def _git(root: Path, *words: str, codes: tuple[int, ...] = (0,)) -> subprocess.CompletedProcess:
    # A hook's variables would point at another repository or index.
    environment = {
        name: value
        for name, value in os.environ.items()
        if name not in ("GIT_DIR", "GIT_WORK_TREE", "GIT_INDEX_FILE", "GIT_PREFIX")
    }
    done = subprocess.run(
        ["git", "--no-optional-locks", "-C", str(root), *words],
        capture_output=True,
        env=environment,
        stdin=subprocess.DEVNULL,
        timeout=60,
        check=False,
    )
    if done.returncode not in codes:
        raise subprocess.CalledProcessError(done.returncode, "git")
    return done


def versions() -> dict[str, str]:
    """Return the versions of Python, the computing packages, labkit and the machine's kind."""
    found = {}
    for name in PACKAGES:
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
