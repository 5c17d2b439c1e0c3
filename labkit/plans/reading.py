"""Reading a plan back: only what was written as it is, and for the fleet it was made for."""

import csv
import json
from pathlib import Path
from typing import Any

from labkit.errors import InputError
from labkit.files import check_inside
from labkit.fleet.model import Fleet, check_fleet
from labkit.memory import check_memory
from labkit.plans.model import DISPATCHER, HEADER, Plan
from labkit.plans.schema import FILE as SCHEMA
from labkit.plans.schema import VERSION, fault_of, header_digest
from labkit.plans.tables import read_csv_bytes, sha256

# Tables whose columns the header names one by one.
_EXACT = ("servers.csv", "choices.csv", "vectors.csv")
_AGAIN = "make the plan again with labkit plan"


def read_plan(folder: str | Path, fleet: Fleet | None = None) -> Plan:
    """Read the plan in a folder and check all of it.

    Parameters
    ----------
    folder : str or Path
        What `labkit.plans.model.Plan.write` wrote.
    fleet : Fleet, optional
        The fleet to be served; a plan made for another one is refused.

    Returns
    -------
    Plan

    Raises
    ------
    InputError
        When the folder holds no plan, a file is missing or altered, the header violates the schema or has a
        version that is not known, or the plan is for another fleet.

    Examples
    --------
    >>> import tempfile
    >>> import labkit as lk
    >>> with tempfile.TemporaryDirectory() as place:
    ...     folder = lk.plan(lk.ring(8), "static-split").write(f"{place}/plan")
    ...     plan = lk.read_plan(folder, lk.ring(8))
    >>> plan.header["fleet"]["servers"]
    8
    """
    if fleet is not None:
        check_fleet(fleet)
    if not isinstance(folder, str | Path):
        raise InputError(f"folder is {folder!r}; give the path of a folder that labkit plan wrote.")
    place = Path(folder)
    if not (place / HEADER).is_file():
        raise InputError(f"folder {str(folder)!r} holds no {HEADER}; name a folder that labkit plan wrote.")
    header = _header(place / HEADER)
    if fleet is not None and header["fleet"]["digest"] != fleet.digest:
        raise InputError(
            f"plan {str(folder)!r} is for another fleet: its digest is {header['fleet']['digest'][:12]}..., "
            f"that of the given fleet {fleet.digest[:12]}...; make a plan for this fleet with labkit plan."
        )
    for program in (DISPATCHER, SCHEMA):
        beside = place / program.name
        if beside.is_file() and _content(beside) != program.read_bytes():
            raise InputError(
                f"{beside} is not this labkit's: it was altered, or another version wrote it; {_AGAIN}."
            )
    return Plan(header, {name: _table(place, name, about) for name, about in header["files"].items()})


def _header(path: Path) -> dict[str, Any]:
    try:
        header = json.loads(_content(path))
    except InputError:
        raise
    except (ValueError, RecursionError) as error:
        raise InputError(f"{path} is not JSON ({error}); {_AGAIN}.") from None
    version = header.get("schema_version") if isinstance(header, dict) else None
    if version is not None and version != VERSION:
        raise InputError(f"{path} has schema version {version!r}, and this labkit reads {VERSION}; {_AGAIN}.")
    fault = fault_of(header)
    if fault is not None:
        raise InputError(f"{path} violates its schema at {fault}; {_AGAIN}.")
    if header_digest(header) != header["digest"]:
        raise InputError(f"{path} was altered: it does not have the digest it gives; {_AGAIN}.")
    return dict(header)


def _table(folder: Path, name: str, about: dict[str, Any]) -> Any:
    path = folder / name
    if not path.is_file():
        raise InputError(f"plan {str(folder)!r} has no {name}, which {HEADER} names; {_AGAIN}.")
    content = _content(path)
    if sha256(content) != about["sha256"]:
        raise InputError(f"{path} is torn or altered: it does not have the digest in {HEADER}; {_AGAIN}.")
    try:
        table = read_csv_bytes(name, content)
    except (ValueError, TypeError, LookupError, OverflowError, csv.Error) as error:
        reason = " ".join(str(error).split())[:80]
        raise InputError(f"{path} is no table that labkit plan writes ({reason}); {_AGAIN}.") from None
    if name in _EXACT and list(table.columns) != list(about["columns"]):
        raise InputError(f"{path} has other columns than {HEADER} says; {_AGAIN}.")
    if len(table) != about["rows"]:
        raise InputError(f"{path} has {len(table)} rows, and {HEADER} says {about['rows']}; {_AGAIN}.")
    return table


def _content(path: Path) -> bytes:
    check_inside(path, path.parent, str(path))
    check_memory(f"{path}: its {path.stat().st_size:,} bytes", 10 * path.stat().st_size, _AGAIN)
    try:
        return path.read_bytes()
    except OSError as error:
        raise InputError(f"{path} cannot be read ({error.strerror}); make it readable.") from None
