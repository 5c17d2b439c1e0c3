"""Where the project is. Paths mean the same whatever the working directory."""

import re
from pathlib import Path
from typing import Any

from labkit.errors import InputError
from labkit.files import is_file_or_folder
from labkit.sources import PACKAGE

ROOT = PACKAGE.parent
NOTEBOOKS = ROOT / "notebooks"
EXPERIMENTS = ROOT / "experiments"
STORE = ROOT / "results" / "runs"
ANSWERS = ROOT / "results" / "answers"
PLANS = ROOT / "results" / "plans"
REPORTS = ROOT / "results" / "reports"
FROZEN = ROOT / "results" / "frozen"

_FOLDER_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_.-]{0,63}")


def find_notebook(notebook: str | Path, root: Path = ROOT) -> Path:
    """Return the file of a notebook: a name from notebooks/, or the path (from the root) of an .ipynb."""
    text = str(notebook)
    if text.endswith(".ipynb"):
        path = from_root(text, root)
        if not is_file_or_folder(path) or path.is_dir():
            raise InputError(f"notebook is {text!r}; there is no such file: give the path of an .ipynb file.")
        return path
    folder = root / NOTEBOOKS.name
    known = sorted(path.stem for path in folder.glob("*.ipynb"))
    if text not in known:
        raise InputError(
            f"notebook is {text!r}; notebooks/ holds {', '.join(known) or 'none'}: name one of them."
        )
    return folder / f"{text}.ipynb"


def from_root(text: str | Path, root: Path = ROOT) -> Path:
    """Return the absolute path that a text means: absolute as it is, relative to the project root."""
    try:
        return (root / Path(text).expanduser()).resolve()
    except (OSError, ValueError, RuntimeError) as error:
        raise InputError(f"path is {str(text)!r}, which can be none ({error}); give another.") from None


def path_text(path: Path) -> str:
    """Return how a path is written down: relative to the project root when inside it, else absolute."""
    path = path.resolve()
    return path.relative_to(ROOT).as_posix() if path.is_relative_to(ROOT) else path.as_posix()


def notebook_text(path: Path) -> str:
    """Return how a notebook is written down: its bare name when it is in notebooks/, else its path."""
    return path.stem if path.resolve().parent == NOTEBOOKS else path_text(path)


def check_study_name(name: Any) -> str:
    """Return the name of a study when it can be the name of a folder on every system."""
    return check_folder_name("study", "a study's name", name)


def check_folder_name(what: str, whose: str, name: Any) -> str:
    """Return a name when it can be the name of a folder on every system; `whose` is its subject in words."""
    if isinstance(name, str) and _FOLDER_NAME.fullmatch(name) and not name.endswith("."):
        return name
    raise InputError(
        f"{what} is {name!r}; {whose} begins with a letter or digit and has up to 64 letters, digits, "
        "dots, dashes and underscores: choose such a name."
    )
