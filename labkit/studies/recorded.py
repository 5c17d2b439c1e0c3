"""The records of all points of a study, or one sentence about those that are missing."""

from typing import TYPE_CHECKING

from labkit.errors import InputError
from labkit.records.store import Store
from labkit.studies.model import Study

if TYPE_CHECKING:
    import pyarrow as pa


def recorded_tables(study: Study, asked: str, store: Store) -> "list[pa.Table]":
    """Return the record of each point of a study, in the order of its points.

    Parameters
    ----------
    study : Study
    asked : str
        How the user named the study, for the command in a refusal.
    store : Store
        Where the records are.

    Raises
    ------
    InputError
        When a point is not recorded.
    StoreError
        When a record is damaged.
    """
    known = store.runs(study.name)
    found = {point.run_id: known.get(point.run_id) for point in study.points}
    missing = [run for run, path in found.items() if path is None]
    if missing:
        others = len(known.keys() - found.keys())
        besides = f" (it holds {others} runs of other code or other values)" if others else ""
        raise InputError(
            f"study {study.name}: {len(missing)} of {len(found)} runs are not recorded in {store.folder}"
            f"{besides}, the first being {missing[0]}; run labkit run {asked}."
        )
    return store.tables([path for path in found.values() if path is not None])
