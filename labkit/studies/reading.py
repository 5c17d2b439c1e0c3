"""Records for analyses: the rows of a study's runs as one table."""

import json
import math
import re
from collections.abc import Collection, Iterable, Mapping, Sequence
from itertools import groupby
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa

from labkit.checks import nearest
from labkit.errors import InputError
from labkit.records.identity import canonical
from labkit.records.listing import listed
from labkit.records.project import EXPERIMENTS, check_study_name, from_root, path_text
from labkit.records.record_files import ID
from labkit.records.store import Store, open_store
from labkit.studies.model import read_study


def read_study_records(
    study: str,
    runs: Sequence[str] | None = None,
    store: str | Path | None = None,
    where: Mapping[str, Any] | None = None,
) -> pd.DataFrame:
    """Return the recorded rows of a study.

    Parameters
    ----------
    study : str
        The name of the study.
    runs : sequence of str, optional
        Ids of runs. Without any: the runs of the points of ``experiments/<study>.toml``; without such a file,
        the newest run, or with `where` all runs.
    store : str or Path, optional
        The folder of the store; empty means the project's own.
    where : mapping of str to value or list of values, optional
        Only runs in which each of these parameters was recorded with this value, or with one of these values,
        such as ``{"tasks": [1000, 2000], "fleet": "experiments/demo"}``. Numbers compare by value, paths as
        they are written down; a parameter that is a list may be given as this list.

    Returns
    -------
    pandas.DataFrame
        One row a policy, replicate and checkpoint: the columns of the record, and one column for each
        parameter in which the runs differ (``<name>_parameter`` where the record has a column of that name).

    Raises
    ------
    InputError
        When a run is not recorded, or no run fits `where`.
    StoreError
        When a record is torn, altered or foreign.
    """
    check_study_name(study)
    place = open_store(store)
    paths = _paths(study, list(runs or []), place, where)
    tables = place.tables(paths)
    parameters = [json.loads(table["parameters"][0].as_py()) for table in tables]
    frame = _frame_of(tables)
    lengths = [table.num_rows for table in tables]
    for column, values in _differing(parameters, frame.columns).items():
        frame[column] = _repeated(values, lengths)
    return frame


def _paths(study: str, runs: list[str], store: Store, where: Mapping[str, Any] | None) -> list[Path]:
    if not runs and (EXPERIMENTS / f"{study}.toml").is_file():
        runs = [point.run_id for point in read_study(study).points]
    if runs:
        known = store.runs(study) if len(runs) > 1 else {}
        found = {run: known.get(run) or store.find(study, run) for run in runs}
        missing = [run for run, path in found.items() if path is None]
        if missing:
            raise InputError(
                f"study {study}: {len(missing)} of {len(runs)} runs are not recorded in {store.folder}, "
                f"the first being {missing[0]}; run labkit run {study}."
            )
        if not where:
            return [path for path in found.values() if path is not None]
    columns = listed(store, study, ["parameters"] if where else ["parameters", "started"]).columns
    if not columns["name"]:
        raise InputError(f"study is {study!r}; {store.folder} holds no record of it: run it first.")
    rows: Sequence[int] = range(len(columns["name"]))
    if runs:
        at = {name[:ID]: row for row, name in enumerate(columns["name"])}
        rows = [at[run] for run in runs]
    if where:
        rows = _fitting(rows, columns["parameters"], study, where)
    else:
        rows = [max(rows, key=columns["started"].__getitem__)]
    return [columns["folder"][row] / columns["name"][row] for row in rows]


def _fitting(rows: Sequence[int], texts: list[str], study: str, where: Mapping[str, Any]) -> list[int]:
    """Return the rows of those runs whose parameters, as recorded, fit."""
    tests = {name: _Test(name, given) for name, given in where.items()}
    found = [
        row
        for row in rows
        if all(test.may_fit(texts[row]) for test in tests.values())
        and all(test.fits(json.loads(texts[row])) for test in tests.values())
    ]
    if found:
        return found
    known = dict.fromkeys(name for row in rows for name in json.loads(texts[row]))
    for name in where:
        if name not in known:
            raise InputError(f"where has {name!r}, which is no parameter of a run; {nearest(name, known)}.")
    raise InputError(f"where is {dict(where)!r}; none of {len(rows)} runs of study {study} fits.")


class _Test:
    """Whether a parameter was recorded with a given value, or one of those given."""

    def __init__(self, name: str, given: Any) -> None:
        values = given.tolist() if hasattr(given, "tolist") else given
        self._several = isinstance(values, Iterable) and not isinstance(values, str | Mapping)
        self._name = name
        self._allowed = [_plain(each) for each in values] if self._several else [_plain(values)]
        numbers = [each for each in self._allowed if isinstance(each, int | float)]
        # Most runs are told apart by their text, many times faster than by decoding it.
        texts = [re.escape(text) for each in numbers for text in _texts_of(each)]
        ends = f"(?:{'|'.join(texts)})[,}}\\s]" if len(numbers) == len(self._allowed) and numbers else ""
        self.may_fit = re.compile(f"{re.escape(json.dumps(name))}:\\s*{ends}").search

    def fits(self, parameters: dict[str, Any]) -> bool:
        """Tell whether the parameters of a run fit."""
        if self._name not in parameters:
            return False
        value = parameters[self._name]
        truth = isinstance(value, bool)  # true is no number, although Python takes it for 1
        one = any(value == each and truth == isinstance(each, bool) for each in self._allowed)
        return one or (self._several and value == self._allowed)


def _texts_of(number: float) -> set[str]:
    """Return how JSON may write a number."""
    found = {json.dumps(number), json.dumps(float(number))}
    return found | {str(int(number))} if math.isfinite(number) and number == int(number) else found


def _plain(value: Any) -> Any:
    """Return a value as records have it."""
    if isinstance(value, tuple):
        return list(value)
    if isinstance(value, Path):
        return path_text(from_root(value))
    return value.item() if hasattr(value, "item") else value


def _frame_of(tables: list[pa.Table]) -> pd.DataFrame:
    """Return the rows of tables as one; neighbours with the same columns are joined first, by Arrow."""
    groups = groupby(tables, key=lambda table: table.schema)
    frames = [pa.concat_tables(group).to_pandas() for _, group in groups]
    return pd.concat(frames, ignore_index=True) if len(frames) > 1 else frames[0]


def _repeated(values: list[Any], lengths: list[int]) -> pd.Series:
    """Return each value as often as its run has rows, in the type that pandas gives all together."""
    kinds = {type(value): value for value in values}
    wide = max((value for value in values if isinstance(value, int)), key=abs, default=0)
    joined = pd.concat([pd.Series([value]) for value in (*kinds.values(), *([wide] if int in kinds else []))])
    repeated = [value for value, length in zip(values, lengths, strict=True) for _ in range(length)]
    return pd.Series(repeated, dtype=joined.dtype)


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
    return _differing([origin["parameters"] for origin in origins], taken)


def _differing(parameters: list[dict[str, Any]], taken: Collection[str]) -> dict[str, list[Any]]:
    names = dict.fromkeys(name for each in parameters for name in each)
    found = {}
    for name in names:
        values = [each.get(name) for each in parameters]
        if name != "policies" and any(value != values[0] for value in values[1:]):
            column = f"{name}_parameter" if name in taken else name
            found[column] = [canonical(value) if isinstance(value, list) else value for value in values]
    return found
