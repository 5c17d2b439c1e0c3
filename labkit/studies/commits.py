"""Work trees of earlier commits, each with the packages that its own lock names."""

import contextlib
import os
import re
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path
from types import TracebackType
from typing import Self

from labkit.errors import InputError
from labkit.records.project import ROOT
from labkit.records.provenance import git, outside_hooks
from labkit.studies.place import Place

# What an environment is made from, in the order in which .ci/setup writes it down after its checkout's path.
RECIPE = (".ci/setup", "requirements.lock")

HASH = re.compile(r"[0-9a-f]{40}(?:[0-9a-f]{24})?")

_LONG = 600.0  # seconds, for a large repository on a slow disk

_OTHERWISE = "or execute today's code with: labkit rerun RUN --here."


class CommitMissing(InputError):
    """A commit that cannot be had here; `fact` says why in a part of a sentence."""

    def __init__(self, fact: str, remedy: str) -> None:
        super().__init__(f"{fact}; {remedy}, {_OTHERWISE}")
        self.fact = fact


class Commits:
    """Work trees of commits in temporary folders, made when asked for and removed at the end of ``with``.

    Parameters
    ----------
    say : callable
        Called with a sentence for the user before anything that takes time.
    root : Path
        The checkout whose repository holds the commits.
    """

    def __init__(self, say: Callable[[str], None] = lambda sentence: None, root: Path = ROOT) -> None:
        self._say = say
        self._root = root
        self._places: dict[str, Place] = {}
        self._trees: list[Path] = []

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._places.clear()
        while self._trees:
            _remove(self._root, self._trees.pop())

    def of(self, commit: str) -> Place:
        """Return the checkout of a commit, made once, and the Python for it.

        The running Python is used when it has been set up from the same lock by the same script; else the
        commit's own ``.ci/setup`` makes an environment in the work tree.

        Raises
        ------
        CommitMissing
            When git, the repository or the commit is missing.
        InputError
            When the work tree or its environment cannot be made.
        """
        if commit not in self._places:
            inside = self._check_known(commit)
            short = commit[:10]
            self._say(f"making a work tree of commit {short}; its code is compiled anew where it is needed")
            tree = Path(tempfile.mkdtemp(prefix="labkit-")).resolve()
            self._trees.append(tree)
            # a hook of the user's, run after a checkout, has no business here
            words = ("-c", f"core.hooksPath={os.devnull}", "worktree", "add", "--detach", str(tree), commit)
            try:
                git(self._root, *words, seconds=_LONG)
            except (OSError, subprocess.SubprocessError) as error:
                raise InputError(
                    f"commit {short}: git cannot make a work tree of it in {tempfile.gettempdir()} "
                    f"({_reason(error)}); make room there, {_OTHERWISE}"
                ) from None
            root = tree / inside
            self._places[commit] = Place(root, self._python(root, short), commit)
        return self._places[commit]

    def has_other_lock(self, commit: str) -> bool:
        """Tell whether a commit's environment is made from something else than the running one was."""
        made_from = Path(sys.prefix, "made-from")
        try:
            inside = self._check_known(commit)
            then = b"".join(git(self._root, "show", f"{commit}:{inside}{name}").stdout for name in RECIPE)
            return made_from.is_file() and made_from.read_bytes().partition(b"\n")[2] != then
        except (CommitMissing, OSError, subprocess.SubprocessError):
            return False

    def _check_known(self, commit: str) -> str:
        """Return the project's folder inside its repository; refuse a commit that is not there."""
        short = commit[:10]
        if not HASH.fullmatch(commit):
            raise InputError(
                f"commit is {commit!r}; a commit has 40 or 64 hex digits: take a record that names one."
            )
        try:
            inside = os.fsdecode(git(self._root, "rev-parse", "--show-prefix").stdout.rstrip(b"\n"))
            words = ("cat-file", "-e", f"{commit}^{{commit}}")
            if git(self._root, *words, codes=(0, 1, 128)).returncode == 0:
                return inside
            shallow = git(self._root, "rev-parse", "--is-shallow-repository").stdout.strip() == b"true"
        except OSError:
            raise CommitMissing(f"commit {short} cannot be had: there is no git", "install it") from None
        except subprocess.SubprocessError as error:
            raise CommitMissing(
                f"commit {short} cannot be had: {self._root} is no git repository ({_reason(error)})",
                "work in a clone of the project",
            ) from None
        if shallow:
            raise CommitMissing(
                f"commit {short} is not in this clone, which is shallow",
                "get the rest with: git fetch --unshallow",
            )
        raise CommitMissing(
            f"commit {short} is not in the repository {self._root}",
            "fetch the branch that holds it with: git fetch --all",
        )

    def _python(self, root: Path, short: str) -> Path:
        missing = [name for name in RECIPE if not (root / name).is_file()]
        if missing:
            raise InputError(
                f"commit {short} has no {missing[0]}, so its environment cannot be made; take a record of "
                f"a later commit, {_OTHERWISE}"
            )
        made_from = Path(sys.prefix, "made-from")
        if made_from.is_file():
            running = made_from.read_bytes().partition(b"\n")[2]
            if running == b"".join((root / name).read_bytes() for name in RECIPE):
                return Path(sys.executable)
        self._say(
            f"the lock of commit {short} is another: making its own environment (about 1 GB, a minute or two)"
        )
        base = getattr(sys, "_base_executable", sys.executable)
        done = subprocess.run(
            ["sh", RECIPE[0]],
            cwd=root,
            env=outside_hooks() | {"PYTHON": base},
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            check=False,
        )
        python = root / ".venv" / "bin" / "python"
        if done.returncode or not python.exists():
            last = (done.stderr.strip().splitlines() or ["it left no .venv/bin/python"])[-1]
            raise InputError(
                f"the environment of commit {short} could not be made ({last}); see to that and try again, "
                f"{_OTHERWISE}"
            )
        return python


def _remove(root: Path, tree: Path) -> None:
    """Remove a work tree, whole or half made, and the repository's note of it."""
    with contextlib.suppress(OSError, subprocess.SubprocessError):
        # git keeps a tree locked while it is being made: twice --force means those as well
        removed = git(root, "worktree", "remove", "-f", "-f", str(tree), codes=(0, 128), seconds=_LONG)
        if removed.returncode:
            shutil.rmtree(tree, ignore_errors=True)
            git(root, "worktree", "unlock", str(tree), codes=(0, 128))
            git(root, "worktree", "prune")
    shutil.rmtree(tree, ignore_errors=True)


def _reason(error: Exception) -> str:
    """Return git's last line about what failed."""
    said = getattr(error, "stderr", None) or b""
    lines = said.decode(errors="replace").strip().splitlines()
    return lines[-1].removeprefix("fatal: ").rstrip(".") if lines else str(error)
