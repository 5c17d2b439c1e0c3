"""A plan: its header and tables, and how they become a folder."""

import json
import os
import shutil
import tempfile
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from labkit.cards.shown import Shown
from labkit.errors import InputError
from labkit.plans.schema import FILE as SCHEMA
from labkit.plans.tables import csv_bytes

HEADER = "plan.json"
DISPATCHER = Path(__file__).with_name("dispatcher.py")


@dataclass(frozen=True, repr=False)
class Plan(Shown):
    """All that a dispatcher needs to place tasks by a policy, as a header and plain tables.

    Attributes
    ----------
    header : dict
        What ``plan.json`` holds: the policy, the fleet's digest, when to refresh, how draws become
        decisions, and the SHA-256, rows and columns of each table. ``plan.schema.json`` describes it.
    tables : dict of str to pandas.DataFrame
        By file name: ``servers.csv``, ``choices.csv``, what the policy needs besides, and the test vectors
        ``vectors.csv`` and ``vectors_loads.csv``.
    digest : str
        SHA-256 in hex of the header.

    Examples
    --------
    >>> import labkit as lk
    >>> plan = lk.plan(lk.ring(8), "least-loaded(ties=first)")
    >>> plan.header["policy"]["parameters"]
    {'looks': True, 'ties': 'first'}
    >>> list(plan.tables["choices.csv"])
    ['number', 'demand', 'option_1', 'option_2']
    >>> len(plan.digest)
    64
    """

    header: dict[str, Any]
    tables: dict[str, pd.DataFrame]

    @property
    def digest(self) -> str:
        """SHA-256 in hex of the header, which holds the digests of all tables."""
        return str(self.header["digest"])

    def __repr__(self) -> str:
        fleet, decisions = self.header["fleet"], self.header["files"]["vectors.csv"]["rows"]
        return (
            f"<plan of {self.header['policy']['name']}: {fleet['servers']} servers, "
            f"{fleet['choices']} choices, {decisions} test decisions>"
        )

    def write(self, folder: str | Path) -> Path:
        """Write the plan into a new folder, with its schema and the reference dispatcher.

        Parameters
        ----------
        folder : str or Path
            A folder that is not there yet, or is empty. One that holds this very plan is left as it is.

        Returns
        -------
        Path
            The folder. ``python FOLDER/dispatcher.py FOLDER`` checks the test vectors.

        Raises
        ------
        InputError
            When the folder holds anything else, or cannot be written; nothing is left behind then.

        Examples
        --------
        >>> import tempfile
        >>> import labkit as lk
        >>> with tempfile.TemporaryDirectory() as place:
        ...     folder = lk.plan(lk.ring(8), "one-choice").write(f"{place}/plan")
        ...     print(lk.read_plan(folder))
        <plan of one-choice: 8 servers, 8 choices, 320 test decisions>
        """
        target = Path(folder)
        _check_free(target)
        made: list[Path] = []
        try:
            for parent in reversed([place for place in target.absolute().parents if not place.exists()]):
                parent.mkdir()
                made.append(parent)
            beside = Path(
                tempfile.mkdtemp(prefix=f".{target.name}.", suffix=".tmp", dir=target.absolute().parent)
            )
            made.append(beside)
            self._fill(beside)
            beside.chmod(0o777 & ~_umask())
            if target.exists():
                if _same(beside, target):
                    shutil.rmtree(beside)
                    return target
                target.rmdir()  # it is empty, unless another program has just written into it
            os.rename(beside, target)
        except BaseException as error:
            _remove(made)
            if isinstance(error, OSError):
                reason = error.strerror or str(error)
                raise InputError(
                    f"folder {str(folder)!r} cannot be written ({reason}); name a folder that can be."
                ) from None
            raise
        return target

    def _fill(self, folder: Path) -> None:
        for name, table in self.tables.items():
            (folder / name).write_bytes(csv_bytes(name, table))
        (folder / SCHEMA.name).write_bytes(SCHEMA.read_bytes())
        (folder / DISPATCHER.name).write_bytes(DISPATCHER.read_bytes())
        text = json.dumps(self.header, indent=2) + "\n"
        (folder / HEADER).write_text(text, encoding="utf-8", newline="\n")


def _check_free(target: Path) -> None:
    if target.is_dir():
        if any(target.iterdir()) and not (target / HEADER).is_file():
            raise InputError(f"folder {str(target)!r} is not empty; name a new folder for the plan.")
    elif os.path.lexists(target):
        raise InputError(f"folder {str(target)!r} is a file; name a new folder for the plan.")


def _same(one: Path, other: Path) -> bool:
    """Tell whether a folder that is there holds the same files; refuse one that holds others."""
    names = sorted(path.name for path in other.iterdir())
    if not names:
        return False
    alike = names == sorted(path.name for path in one.iterdir()) and all(
        (one / name).read_bytes() == (other / name).read_bytes() for name in names
    )
    if not alike:
        raise InputError(
            f"folder {str(other)!r} holds another plan, or more than a plan; name a new folder, or move that "
            "one away."
        )
    return True


def _remove(made: list[Path]) -> None:
    for place in reversed(made):
        if place.name.endswith(".tmp"):
            shutil.rmtree(place, ignore_errors=True)
        elif place.is_dir() and not any(place.iterdir()):
            place.rmdir()


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
