"""A copy of this project in a repository of its own, with a tiny run notebook, driven as a user would."""

import json
import os
import shlex
import shutil
import subprocess
import sys
import sysconfig
import venv
from pathlib import Path

from labkit.records.project import ROOT
from tests.records.tiny import BEGIN, MEASURE, PARAMETERS, RECORD, write_notebook

WHO = ["-c", "user.name=A", "-c", "user.email=a@example.org", "-c", "commit.gpgsign=false"]

# A computing source of the copy that its notebook uses, and what the notebook does before it measures.
SHIFT = "labkit/engine/shift.py"
USE = """
from labkit.engine.shift import SHIFT
started = os.environ.get("STARTED")
if started:
    open(started, "w").close()
    time.sleep(60)
share += SHIFT
"""

# Stands for the real script, which would fetch a gigabyte.
SETUP = f"""
"$PYTHON" -m venv --without-pip .venv
echo {shlex.quote(sysconfig.get_path("purelib"))} > "$(echo .venv/lib/*/site-packages)/all.pth"
"""


class Copy:
    """The repository in `root`; `scratch` is where its commands make temporary folders."""

    def __init__(self, folder: Path) -> None:
        self.root, self.scratch, self.cache = folder / "copy", folder / "scratch", folder / "cache"
        self.python = folder / "env" / "bin" / "python"
        self.scratch.mkdir(parents=True)
        shutil.copytree(ROOT / "labkit", self.root / "labkit", ignore=shutil.ignore_patterns("__pycache__"))
        shutil.copyfile(ROOT / ".gitignore", self.root / ".gitignore")
        for name in ("notebooks", "experiments", ".ci"):
            (self.root / name).mkdir()
        self.write("table.csv", "a\n1\n")
        self.write("requirements.lock", "first\n")
        self.write(".ci/setup", SETUP)
        self.write(SHIFT, "SHIFT = 0.0\n")
        write_notebook(
            self.root / "notebooks" / "tiny.ipynb",
            BEGIN.format(path="tiny"),
            USE + MEASURE,
            RECORD,
            parameters=PARAMETERS + 'table_path: str = "table.csv"\n',
        )
        make_environment(self.python.parents[1], self.root)
        self.git("init", "-q")
        self.commit()

    def write(self, name: str, text: str) -> None:
        """Write a file of the project."""
        (self.root / name).write_text(text)

    def git(self, *words: str) -> str:
        """Run git in the copy and return what it printed."""
        done = subprocess.run(
            ["git", *WHO, *words], cwd=self.root, check=True, capture_output=True, text=True
        )
        return done.stdout.strip()

    def commit(self) -> str:
        """Commit everything and return the commit."""
        self.git("add", ".")
        self.git("commit", "-q", "-m", "A change", "--allow-empty")
        return self.git("rev-parse", "HEAD")

    def move_on(self) -> None:
        """Commit computing code that gives other results."""
        self.write(SHIFT, "SHIFT = 0.125\n")
        self.commit()

    def started(self, *words: str, root: Path | None = None, **variables: str) -> subprocess.Popen[str]:
        """Start a command in the copy's environment."""
        root = root or self.root
        places = {"PYTHONPATH": str(root), "TMPDIR": str(self.scratch), "XDG_CACHE_HOME": str(self.cache)}
        return subprocess.Popen(
            [str(self.python), "-P", "-m", "labkit.cli", *words],
            cwd=root,
            env={**os.environ, **places, **variables},
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )

    def __call__(self, *words: str, root: Path | None = None, **variables: str) -> tuple[int, str, str]:
        """Run a command; return its status and what it said on both streams."""
        process = self.started(*words, root=root, **variables)
        out, err = process.communicate(timeout=120)
        return process.returncode, out, err

    def record(self, **parameters: str) -> str:
        """Run a study of one point and return the id of the run."""
        lines = "\n".join(f"{name} = {json.dumps(value)}" for name, value in parameters.items())
        study = self.root.parent / "s.toml"
        study.write_text(f'notebook = "tiny"\nreplicates = 3\nentropy = 1\n[parameters]\n{lines}\n')
        status, out, err = self("run", str(study), "--json")
        assert status == 0, err
        (run,) = json.loads(out)["recorded"]
        return run

    def left(self) -> tuple[int, list[str]]:
        """Return the number of work trees, and what is in the temporary folder."""
        return len(self.git("worktree", "list").splitlines()), os.listdir(self.scratch)


NOTHING_LEFT = (1, [])


def make_environment(folder: Path, root: Path) -> None:
    """Make an environment with the packages of the running one that looks as if `root` had set it up."""
    venv.create(folder, symlinks=True)
    packages = folder / "lib" / f"python{sys.version_info.major}.{sys.version_info.minor}" / "site-packages"
    (packages / "all.pth").write_text(sysconfig.get_path("purelib") + "\n")
    recipe = (root / ".ci" / "setup").read_bytes() + (root / "requirements.lock").read_bytes()
    (folder / "made-from").write_bytes(f"{root}\n".encode() + recipe)
