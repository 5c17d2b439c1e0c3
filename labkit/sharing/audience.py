"""Whether somebody sits in front of this process."""

import sys


def somebody_at_the_notebook() -> bool:
    """Tell whether this is a notebook's kernel whose front end could ask a person.

    A front end with a person says with each cell that it takes questions; a program that executes a notebook
    says that it does not. What only a front end can show would be lost on the latter.
    """
    shell = sys.modules.get("IPython")
    running = shell.get_ipython() if shell else None
    return bool(getattr(getattr(running, "kernel", None), "_allow_stdin", False))
