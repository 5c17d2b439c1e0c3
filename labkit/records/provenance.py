"""Where a record comes from: the state of the sources, and the versions of everything that computed."""

import hashlib
import json
import os
import subprocess
from pathlib import Path

from labkit.randomness import BIT_GENERATOR, DRAWS
from labkit.records.project import ROOT
from labkit.sources import versions

# What results/ holds was computed: it is no source.
_SOURCES = (".", ":(exclude)results/")

# A hook's variables would point at another repository or index.
_OF_HOOKS = frozenset(
    f"GIT_{name}"
    for name in (
        *("DIR", "WORK_TREE", "INDEX_FILE", "PREFIX", "COMMON_DIR", "NAMESPACE"),
        *("OBJECT_DIRECTORY", "ALTERNATE_OBJECT_DIRECTORIES"),
    )
)


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
    untracked and not ignored; those in results/ do not count. Unlike the text of ``git diff`` it does not
    depend on anyone's diff settings.
    """
    unknown: dict[str, str | bool] = {"git_hash": "", "dirty": True, "diff_digest": ""}
    try:
        if git(root, "check-ignore", "-q", "labkit/__init__.py", codes=(0, 1, 128)).returncode != 1:
            return unknown  # no repository, or one that only surrounds an installed copy
        listed = ("--porcelain", "-z", "--untracked-files=all", "--no-renames")
        status = git(root, "status", *listed, "--", *_SOURCES)
        head = git(root, "rev-parse", "--verify", "-q", "HEAD", codes=(0, 1))
        top = Path(os.fsdecode(git(root, "rev-parse", "--show-toplevel").stdout.rstrip(b"\n")))
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


def outside_hooks() -> dict[str, str]:
    """Return the environment without what a git hook sets for the git commands that it calls."""
    return {name: value for name, value in os.environ.items() if name not in _OF_HOOKS}


def git(
    root: Path, *words: str, codes: tuple[int, ...] = (0,), seconds: float = 60
) -> subprocess.CompletedProcess[bytes]:
    """Run git in a folder and return what it said.

    Raises
    ------
    OSError
        When there is no git.
    subprocess.SubprocessError
        When it takes longer, or ends with another status than one of `codes`.
    """
    done = subprocess.run(
        ["git", "--no-optional-locks", "-C", str(root), *words],
        capture_output=True,
        env=outside_hooks(),
        stdin=subprocess.DEVNULL,
        timeout=seconds,
        check=False,
    )
    if done.returncode not in codes:
        raise subprocess.CalledProcessError(done.returncode, "git", done.stdout, done.stderr)
    return done
