"""Records for analyses: the rows of a study's runs as one table."""

from collections.abc import Collection, Sequence
from pathlib import Path
from typing import Any

import pandas as pd

from labkit.errors import InputError
from labkit.records.identity import canonical
from labkit.records.project import EXPERIMENTS, check_study_name
from labkit.records.schema import row_of_origin
from labkit.records.store import Store, open_store
from labkit.studies.model import read_study


def read_study_records(
    study: str, runs: Sequence[str] | None = None, store: str | Path | None = None
) -> pd.DataFrame:
    """Return the recorded rows of a study.

    Parameters
    ----------
    study : str
        The name of the study.
    runs : sequence of str, optional
        Ids of runs. Without any: the runs of the points of ``experiments/<study>.toml``; without such a file,
        the newest run.
    store : str or Path, optional
        The folder of the store; empty means the project's own.

    Returns
    -------
    pandas.DataFrame
        One row a policy, replicate and checkpoint: the columns of the record, and one column for each
        parameter in which the runs differ (``<name>_parameter`` where the record has a column of that name).

    Raises
    ------
    InputError
        When a run is not recorded.
    StoreError
        When a record is torn, altered or foreign.
    """
    check_study_name(study)
    place = open_store(store)
    paths = _paths(study, list(runs or []), place)
    tables = [place.read(path) for path in paths]
    origins = [row_of_origin(table) for table in tables]
    frames = [table.to_pandas() for table in tables]
    for column, values in differing_parameters(origins, frames[0].columns).items():
        for frame, value in zip(frames, values, strict=True):
            frame[column] = value
    return pd.concat(frames, ignore_index=True)


def _paths(study: str, runs: list[str], store: Store) -> list[Path]:
    if not runs and (EXPERIMENTS / f"{study}.toml").is_file():
        runs = [point.run_id for point in read_study(study).points]
    if not runs:
        files = list(store.files(study))
        if not files:
            raise InputError(f"study is {study!r}; {store.folder} holds no record of it: run it first.")
        return [max(files, key=lambda path: row_of_origin(store.read(path))["started"])]
    found = {run: store.find(study, run) for run in runs}
    missing = [run for run, path in found.items() if path is None]
    if missing:
        raise InputError(
            f"study {study}: {len(missing)} of {len(runs)} runs are not recorded in {store.folder}, "
            f"the first being {missing[0]}; run labkit run {study}."
        )
    return [path for path in found.values() if path is not None]


def differing_parameters(origins: list[dict[str, Any]], taken: Collection[str]) -> dict[str, list[Any]]:
    """Return a column for each parameter in which runs differ; policies have their own label.

    Parameters
    ----------
    origins : list of dict
        Where each run comes from, as `labkit.records.schema.row_of_origin` returns it.
    taken : collection of str
        Columns that the records have; a parameter of such a name becomes ``<name>_parameter``.

    Returns
    -------
    dict of str to list
        Column name → the value of each run; lists as JSON text.
    """
    parameters = [origin["parameters"] for origin in origins]
    names = dict.fromkeys(name for each in parameters for name in each)
    found = {}
    for name in names:
        values = [each.get(name) for each in parameters]
        if name != "policies" and any(value != values[0] for value in values[1:]):
            column = f"{name}_parameter" if name in taken else name
            found[column] = [canonical(value) if isinstance(value, list) else value for value in values]
    return found
