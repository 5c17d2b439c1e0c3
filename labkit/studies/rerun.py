"""Executing a recorded run again and comparing every measure bit for bit."""

from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

from labkit.records.schema import first_difference, measured_part, row_of_origin
from labkit.records.store import Store
from labkit.studies.place import HERE
from labkit.studies.places import ExecutionFailed, Places


@dataclass
class Comparison:
    """A record against its re-execution; `difference` is empty when every bit is equal.

    `place` is ``here``, or the commit in whose work tree the run was executed.
    """

    run_id: str
    rows: int = 0
    columns: list[str] = field(default_factory=list)
    difference: str = ""
    notes: list[str] = field(default_factory=list)
    place: str = HERE.name


def rerun(
    store: Store,
    path: Path,
    say: Callable[[str], None] = lambda sentence: None,
    *,
    here: bool = False,
) -> Comparison:
    """Execute the run of a record again, in a temporary store, and compare.

    Parameters
    ----------
    store : Store
        The store of the record; it is not changed.
    path : Path
        The file of the record.
    say : callable
        Called with a sentence for the user before anything is executed.
    here : bool
        Execute today's code, also when the record is of other code that its commit still has.

    Raises
    ------
    InputError
        When the files that the run read have changed, its notebook is gone or takes other parameters, or the
        commit of the record cannot be had.
    """
    table = store.read(path)
    origin = row_of_origin(table)
    result = Comparison(origin["run_id"])
    try:
        with Places(say) as places:
            again = places.again(origin, here)
    except ExecutionFailed as error:
        result.difference = f"the execution failed: {error}"
        result.place, result.notes = error.place.name, error.notes
        return result
    ours = measured_part(table)
    result.place, result.notes = again.place.name, again.notes
    result.rows, result.columns = ours.num_rows, ours.column_names
    result.difference = first_difference(ours, again.table)
    return result
