"""Records for analyses: the rows of a study's runs as one table."""

import json
import math
import re
from collections.abc import Collection, Iterable, Mapping, Sequence
from contextlib import suppress
from itertools import groupby, repeat
from numbers import Number
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa

from labkit.checks import nearest, shown
from labkit.errors import InputError, StoreError
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
        they are written down, and ``pandas.NA`` is None. A list means any of its values, and also fits a
        parameter that was recorded as this very list: ``{"checkpoints": [1, 2]}`` finds the runs with 1, with
        2 and with ``[1, 2]``, and ``{"checkpoints": [[1, 2]]}`` only the last.

    Returns
    -------
    pandas.DataFrame
        One row a policy, replicate and checkpoint: the columns of the record, and one column for each
        parameter in which the runs differ (``<name>_parameter`` where the record has a column of that name).

    Raises
    ------
    InputError
        When a run is not recorded, no run fits `where`, or it is no mapping of names to such values.
    StoreError
        When a record is torn, altered or foreign.

    Examples
    --------
    Two recorded runs, and the rows of one of them:

    >>> import tempfile
    >>> import labkit as lk
    >>> with tempfile.TemporaryDirectory() as store:
    ...     for tasks in (400, 800):
    ...         run = lk.begin_run("headroom", {"tasks": tasks, "study": "tiny", "store": store})
    ...         outcome = lk.place(lk.ring(4), "least-loaded", tasks=tasks, replicates=2, rng=run.seed)
    ...         file = run.record(outcome.measures)
    ...     records = lk.read_study_records("tiny", store=store, where={"tasks": 800})
    >>> records[["policy", "replicate", "tasks", "mean_load"]].values.tolist()
    [['least-loaded', 0, 800, 200.0], ['least-loaded', 1, 800, 200.0]]
    """
    check_study_name(study)
    if where is not None:
        _check_where(where)
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
    # All texts are looked at only where they are needed: it takes longer than all the rest.
    columns = listed(store, study, ["parameters" if where else "started"], check=not where).columns
    if not columns["name"]:
        raise InputError(f"study is {study!r}; {store.folder} holds no record of it: run it first.")
    rows: Sequence[int] = range(len(columns["name"]))
    if runs:
        at = {name[:ID]: row for row, name in enumerate(columns["name"])}
        rows = [at[run] for run in runs]
    started = columns.get("started", [])
    rows = _fitting(rows, columns, study, where) if where else [max(rows, key=started.__getitem__)]
    return [columns["folder"][row] / columns["name"][row] for row in rows]


def _fitting(
    rows: Sequence[int], columns: dict[str, list[Any]], study: str, where: Mapping[str, Any]
) -> list[int]:
    """Return the rows of those runs whose parameters, as recorded, fit."""
    texts = columns["parameters"]
    tests = [_Test(name, given) for name, given in where.items()]
    found = rows
    for test in tests:
        found = [row for row in found if test.may_fit(texts[row])]

    def decoded(row: int) -> dict[str, Any]:
        return _decoded(texts[row], columns["folder"][row] / columns["name"][row])

    found = [row for row in found if all(map(_Test.fits, tests, repeat(decoded(row))))]
    if found:
        return found
    known = dict.fromkeys(name for row in rows for name in decoded(row))
    for name in where:
        if name not in known:
            raise InputError(f"where has {name!r}, which is no parameter of a run; {nearest(name, known)}.")
    raise InputError(f"where is {shown(dict(where))}; none of {len(rows)} runs of study {study} fits.")


def _decoded(text: str, path: Path) -> dict[str, Any]:
    try:
        found = json.loads(text)
    except (ValueError, RecursionError):
        found = None
    if not isinstance(found, dict):
        raise StoreError(f"record {path} is not one of labkit (its parameters are no object of JSON).")
    return found


class _Test:
    """Whether a parameter was recorded with a given value, or one of those given."""

    def __init__(self, name: str, given: Any) -> None:
        if isinstance(given, bytes | bytearray | memoryview):
            raise _no_value(name, given)
        values = given.tolist() if hasattr(given, "tolist") else given
        self._several = isinstance(values, Iterable) and not isinstance(values, str | Mapping)
        self._name = name
        self._allowed = [_plain(name, each) for each in (values if self._several else [values])]
        numbers = [each for each in self._allowed if isinstance(each, int | float)]
        # Most runs are told apart by their text, many times faster than by decoding it.
        ends = ""
        if numbers and len(numbers) == len(self._allowed):
            texts = [re.escape(text) for each in numbers for text in _texts_of(each)]
            ends = f"(?:{'|'.join(texts)})[,}}\\s]"
            # Several values may also be a list that was recorded.
            ends = rf"(?:\[|{ends})" if self._several else ends
        self.may_fit = re.compile(f"{re.escape(json.dumps(name))}:\\s*{ends}").search

    def fits(self, parameters: dict[str, Any]) -> bool:
        """Tell whether the parameters of a run fit."""
        if self._name not in parameters:
            return False
        value = parameters[self._name]
        return any(_same(value, each) for each in self._allowed) or (
            self._several and _same(value, self._allowed)
        )


def _same(value: Any, given: Any) -> bool:
    """Compare by value; true is no number, although Python takes it for 1."""
    if isinstance(value, list) and isinstance(given, list):
        return len(value) == len(given) and all(map(_same, value, given))
    return bool(value == given) and isinstance(value, bool) == isinstance(given, bool)


def _texts_of(number: float) -> set[str]:
    """Return how JSON may write a number."""
    if number == 0:
        return {"0", "0.0", "-0", "-0.0"} | {json.dumps(number)}
    found = set()
    # Beyond every float, or beyond the digits that Python writes out and JSON reads.
    with suppress(OverflowError):
        found.add(json.dumps(float(number)))
    with suppress(ValueError):
        found.add(json.dumps(number))
        if number == number and abs(number) != math.inf and number == int(number):
            found.add(str(int(number)))
    return found


def _plain(name: str, value: Any) -> Any:
    """Return a value as records have it; refuse what no record has."""
    if isinstance(value, Path):
        return path_text(from_root(value))
    if isinstance(value, bytes | bytearray | memoryview):
        raise _no_value(name, value)
    value = value.tolist() if hasattr(value, "tolist") else value
    if value is None or value is pd.NA:
        return None
    if isinstance(value, list | tuple):
        return [_plain(name, each) for each in value]
    if isinstance(value, Mapping):
        return {key: _plain(name, each) for key, each in value.items()}
    if isinstance(value, str | Number):
        return value
    raise _no_value(name, value)


def _no_value(name: str, value: Any) -> InputError:
    return InputError(
        f"where has {shown(value)} for {name!r}; give a number, a text, true or false, None, a path, or a "
        "list of such values."
    )


def _check_where(where: Any) -> None:
    if not isinstance(where, Mapping):
        raise InputError(
            f"where is {shown(where)}; give a mapping of parameters to values, such as "
            "{'tasks': [1000, 2000]}."
        )
    for name in where:
        if not isinstance(name, str):
            raise InputError(f"where has {shown(name)} as a parameter; give the name of a parameter, a text.")


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
