"""Whether somebody sits in front of this process."""

import sys
from typing import Any


def somebody_at_the_notebook() -> bool:
    """Tell whether this is a notebook's kernel whose front end could ask a person.

    A front end with a person says with each cell that it takes questions; a program that executes a notebook
    says that it does not. What only a front end can show would be lost on the latter.
    """
    return bool(getattr(notebook_kernel(), "_allow_stdin", False))


def notebook_kernel() -> Any:
    """Return the kernel that this process is, None when it is none."""
    shell = sys.modules.get("IPython")
    running = shell.get_ipython() if shell else None
    return getattr(running, "kernel", None)
