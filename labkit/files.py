"""Files that a stranger may have made: links out of their folder, what is no file at all, and sheer size."""

import os
from pathlib import Path

from labkit.errors import InputError

# Settings and notebooks are texts that people write; a table has no such limit.
LONGEST_TEXT = 50_000_000


def check_inside(path: Path, folder: Path, what: str) -> None:
    """Refuse a file of a folder that is a link to somewhere else; the folder itself may be a link.

    Parameters
    ----------
    path : Path
        In the folder.
    folder : Path
    what : str
        What the refusal calls the file.
    """
    target = Path(os.path.realpath(path))
    if not target.is_relative_to(os.path.realpath(folder)):
        raise InputError(
            f"{what} is a link out of its folder, to {target}; links out of a folder are not followed: put "
            "the file itself there."
        )


def is_file_or_folder(path: Path) -> bool:
    """Tell whether something is there that can be read: no pipe, no device, and no name that cannot be."""
    try:
        return path.is_file() or path.is_dir()
    except (OSError, ValueError):
        return False


def read_text_file(path: Path, what: str, longest: int = LONGEST_TEXT) -> bytes:
    """Return the content of a file of text; refuse one that is no file, and one of absurd size.

    Raises
    ------
    InputError
        When it is of another kind, or too large.
    OSError
        When it cannot be read.
    """
    if not path.is_file() and path.exists():
        raise InputError(f"{what} is not a file; give a file of text.")
    size = path.stat().st_size
    if size > longest:
        raise InputError(
            f"{what} has {size / 1e6:,.0f} MB; such a file has at most {longest / 1e6:.0f} MB: take out "
            "what does not belong there."
        )
    return path.read_bytes()
