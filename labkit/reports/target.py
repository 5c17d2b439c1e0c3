"""Where a report goes: never over anything unasked, written beside its place and moved there."""

import os
from pathlib import Path

from labkit.errors import InputError
from labkit.records import leftovers
from labkit.records.project import REPORTS
from labkit.records.store import check_writable, unwritable


def place_of(study: str, to: str | Path | None) -> Path:
    """Return the file of the page: the one asked for, or the study's in the folder of reports.

    Parameters
    ----------
    study : str
        Name of the study.
    to : str or Path, optional
        A file that ends in .html, or a folder that is there.

    Raises
    ------
    InputError
        When it is neither.
    """
    if to is None:
        return REPORTS / f"{study}.html"
    path = Path(os.path.abspath(Path(to).expanduser()))
    if path.is_dir():
        return path / f"{study}.html"
    if path.suffix.lower() != ".html":
        raise InputError(f"to is {str(to)!r}; give a folder that is there, or a file that ends in .html.")
    if not path.parent.is_dir():
        raise InputError(f"to is {str(to)!r}; name a file in a folder that is there.")
    return path


def check_target(path: Path, replace: bool) -> None:
    """Refuse a place that holds something, unless that is a file and may be replaced, or cannot be written.

    Raises
    ------
    InputError
        When it does.
    StoreUnwritable
        When its folder cannot be written.
    """
    there = path.exists() or path.is_symlink()
    if there and not path.is_file():
        raise InputError(f"report {path} is no file; name another place with --to PATH.")
    if there and not replace:
        raise InputError(
            f"report {path} is there already; give --replace to write over it, or name another place with "
            "--to PATH."
        )
    check_writable("report", path.parent)


def write_beside(path: Path, content: bytes) -> None:
    """Write a file beside its place and move it there.

    Raises
    ------
    StoreUnwritable
        When the folder cannot be written.
    """
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        leftovers.sweep(path.parent, os.listdir(path.parent))
        aside = path.parent / leftovers.name_of_new("report")
        try:
            aside.write_bytes(content)
            os.replace(aside, path)
        finally:
            aside.unlink(missing_ok=True)
    except OSError as error:
        raise unwritable("report", path, error) from None
