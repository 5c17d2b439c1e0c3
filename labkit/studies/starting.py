"""A folder to start from: a small fleet, its study, a note, and recipes for a CI service."""

import os
import secrets
import shutil
import tempfile
from pathlib import Path
from string import Template

from labkit import __version__
from labkit.errors import InputError
from labkit.records.project import check_folder_name

_STARTER = Path(__file__).with_name("starter")
# File of a starter -> where it goes; `$name` is the study's.
_PLACES = {
    "servers.csv": "fleet/servers.csv",
    "choices.csv": "fleet/choices.csv",
    "study.toml": "$name.toml",
    "README.md": "README.md",
    "gitignore": ".gitignore",
    "check-headroom.sh": "check-headroom.sh",
    "check-headroom.yml": "check-headroom.yml",
}


def write_starter(folder: str | Path) -> list[Path]:
    """Write a starter fleet, study, note and CI recipes into a new folder, as a whole or not at all.

    Parameters
    ----------
    folder : str or Path
        Not there yet, or empty. Its name becomes the name of the study. Folders above it are made.

    Returns
    -------
    list of Path
        The files, the study first.

    Raises
    ------
    InputError
        When something is there, it cannot be written, or its name can be no study's.
    """
    given = Path(folder)
    try:
        place = given.expanduser().absolute()
        name = check_folder_name("name of the folder", "a study's name", place.resolve().name)
        if os.path.lexists(place) and (not place.is_dir() or any(place.iterdir())):
            raise InputError(
                f"folder {given} is there and not empty; it was left as it is: give the name of a new one."
            )
        return _write(place, name, given)
    except (OSError, ValueError, RuntimeError) as error:
        if isinstance(error, InputError):
            raise
        reason = getattr(error, "strerror", None) or error
        raise InputError(f"folder {str(given)!r} cannot be written ({reason}); give another.") from None


def _write(place: Path, name: str, given: Path) -> list[Path]:
    values = {
        "name": name,
        "version": __version__,
        "entropy": str(secrets.randbelow(10**8)),
    }
    place.parent.mkdir(parents=True, exist_ok=True)
    aside = Path(tempfile.mkdtemp(prefix=f".{name}-", dir=place.parent))
    try:
        aside.chmod(0o755)
        files = []
        for source, target in _PLACES.items():
            path = Path(Template(target).substitute(values))
            text = Template((_STARTER / source).read_text(encoding="utf-8")).substitute(values)
            (aside / path).parent.mkdir(exist_ok=True)
            (aside / path).write_text(text, encoding="utf-8", newline="\n")
            files.append(path)
        (aside / "check-headroom.sh").chmod(0o755)
        if place.is_symlink():
            raise InputError(f"folder {given} is a link; give the name of a new folder.")
        os.replace(aside, place)
    finally:
        shutil.rmtree(aside, ignore_errors=True)
    return [place / path for path in sorted(files, key=lambda path: path.suffix != ".toml")]
