"""Running a piece of the tests with the loops left as plain Python, in a process of its own.

Compiling every rule for every kind of fleet would take minutes; so compiled loops are tested on a few cases,
and the same loops, not compiled, on any.
"""

import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).parents[1]


def in_plain_python(module: str, call: str) -> str:
    """Return what ``module.call`` returns there, as text; fail with its output when it fails."""
    done = subprocess.run(
        [sys.executable, "-c", f"import {module} as tests; print(tests.{call})"],
        cwd=ROOT,
        env={**os.environ, "NUMBA_DISABLE_JIT": "1"},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout.strip()
