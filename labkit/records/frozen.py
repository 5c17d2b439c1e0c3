"""Frozen tables: a folder of files that one cites, with a manifest that knows each of them to the byte.

The manifest protects itself: it holds a digest of all else in it, and its file must be the one text of what
it holds. So a change of any byte of any file is found.
"""

import hashlib
import json
import os
import secrets
import shutil
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

from labkit.checks import nearest
from labkit.errors import InputError, StoreError
from labkit.files import check_inside
from labkit.memory import check_memory
from labkit.records.identity import canonical
from labkit.records.project import FROZEN, check_folder_name
from labkit.records.store import decode, unwritable

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa

SCHEMA = 1
MANIFEST, RUNS, TABLE = "manifest.json", "runs.parquet", "table.parquet"

# What a manifest holds, and what its query does.
KEYS: dict[str, type] = {
    **dict.fromkeys(("name", "title", "question", "study", "frozen", "git_hash", "note", "digest"), str),
    **dict.fromkeys(("files", "query", "versions"), dict),
    **dict.fromkeys(("schema", "rows"), int),
    "dirty": bool,
    "runs": list,
}
QUERY = frozenset({"study", "moment", "labels", "parameters", "measures", "risk", "confidence"})

# What desktops and JupyterLab leave in a folder that one has only looked into.
LITTER = frozenset({".DS_Store", "Thumbs.db", "desktop.ini", ".ipynb_checkpoints"})

# Digits of a digest in a sentence.
SHOWN = 12


@dataclass(frozen=True)
class Finding:
    """What does not hold of a frozen table: the kind, the file it is about, and a sentence."""

    kind: str
    file: str
    sentence: str


@dataclass(frozen=True)
class Frozen:
    """A frozen table whose files are all as its manifest says.

    Attributes
    ----------
    place : Path
        Its folder.
    manifest : dict
        What the manifest holds: name, title, question, study, query, runs, files, versions and more.
    """

    place: Path
    manifest: dict[str, Any]

    @cached_property
    def table(self) -> "pd.DataFrame":
        """The table, one row a group of replicates, with all bits."""
        return decode((self.place / TABLE).read_bytes()).to_pandas()

    @cached_property
    def runs(self) -> "pd.DataFrame":
        """The rows behind it, with the columns of `labkit.read_study_records`."""
        return with_origins(decode((self.place / RUNS).read_bytes()), self.manifest["runs"]).to_pandas()

    @property
    def _about(self) -> str:
        facts = self.manifest
        return (
            f"{facts['title']}: {facts['rows']} rows from {len(facts['runs'])} runs of the study "
            f"{facts['study']}, frozen {facts['frozen'][:10]}, manifest {facts['digest'][:SHOWN]}"
        )

    def __repr__(self) -> str:
        return f"<frozen table {self.manifest['name']}: {self._about}>"

    def _repr_html_(self) -> str:
        from html import escape

        note = f"<p>{escape(self.manifest['note'])}</p>" if self.manifest["note"] else ""
        return f"<p>{escape(self._about)}</p>{note}{self.table.to_html(index=False)}"


def read_frozen(name: str, folder: str | Path | None = None) -> Frozen:
    """Return a frozen table after checking every file of it against its manifest.

    Parameters
    ----------
    name : str
        The name of a folder in results/frozen.
    folder : str or Path, optional
        The folder of frozen tables, when it is another.

    Returns
    -------
    Frozen
        With `table`, `runs` (the rows behind it, for `labkit.headroom`, `labkit.compare` and
        `labkit.fit_growth`) and `manifest`.

    Raises
    ------
    InputError
        When there is no frozen table of this name.
    StoreError
        When a file is missing, changed or added, in the sentence of `labkit verify`.

    Examples
    --------
    >>> import labkit as lk
    >>> frozen = lk.read_frozen("demo")
    >>> frozen.manifest["study"], len(frozen.table) == frozen.manifest["rows"]
    ('demo', True)
    >>> "least-loaded" in set(frozen.runs["policy"])
    True
    >>> lk.read_frozen("demos")  # doctest: +ELLIPSIS
    Traceback (most recent call last):
        ...
    labkit.errors.InputError: frozen table is 'demos'; did you mean 'demo' ...
    """
    place = find_frozen(name, FROZEN if folder is None else Path(folder))
    manifest, findings = check_files(place, name)
    if findings:
        raise StoreError(f"frozen table {name}: {findings[0].sentence}")
    return Frozen(place, manifest)


def frozen_names(folder: Path) -> list[str]:
    """Return the names of the frozen tables in a folder."""
    if not folder.is_dir():
        return []
    return sorted(each.name for each in folder.iterdir() if each.is_dir() and each.name[0] != ".")


def find_frozen(name: str, folder: Path) -> Path:
    """Return the folder of a frozen table; refuse a name that none has."""
    known = frozen_names(folder)
    if name not in known:
        raise InputError(
            f"frozen table is {name!r}; {nearest(name, known) if known else f'{folder} holds none'}."
        )
    if not (folder / name / MANIFEST).is_file():
        raise InputError(
            f"frozen table {name} has no {MANIFEST}, so nothing in it can be checked; restore it in "
            f"{folder / name}."
        )
    return folder / name


def check_new_name(name: Any, folder: Path) -> str:
    """Return the name of a table to be frozen; refuse one that is taken or could leave the folder."""
    check_folder_name("name", "a frozen table's name", name)
    present = sorted(each.name for each in folder.iterdir()) if folder.is_dir() else []
    taken = next((each for each in present if each.casefold() == name.casefold()), None)
    if taken is not None:
        raise InputError(
            f"name is {name!r}; {folder / taken} is there, and a frozen table is never overwritten: "
            "choose another name."
        )
    return str(name)


def write_frozen(folder: Path, files: Mapping[str, bytes], facts: Mapping[str, Any]) -> Path:
    """Write a frozen table as a whole: beside its place, read back, and moved there.

    Parameters
    ----------
    folder : Path
        The folder of frozen tables.
    files : dict of str to bytes
        File name → content, without the manifest.
    facts : dict
        The manifest without files and digest.

    Returns
    -------
    Path
        The folder of the table.

    Raises
    ------
    StoreError
        When it cannot be written or does not read back as written. Nothing is left behind.
    """
    name = facts["name"]
    digests = {file: hashlib.sha256(content).hexdigest() for file, content in sorted(files.items())}
    text = manifest_text({**facts, "schema": SCHEMA, "files": digests})
    aside = folder / f".{name}-{secrets.token_hex(4)}"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        aside.mkdir()
        for file, content in {**files, MANIFEST: text.encode("ascii")}.items():
            (aside / file).write_bytes(content)
        _, findings = check_files(aside)
        if findings:
            raise StoreError(
                f"{aside} did not read back as written ({findings[0].sentence}); check the disk."
            )
        check_new_name(name, folder)
        os.rename(aside, folder / name)
    except OSError as error:
        raise unwritable("folder", folder, error) from None
    finally:
        shutil.rmtree(aside, ignore_errors=True)
    return folder / name


def manifest_text(facts: Mapping[str, Any]) -> str:
    """Return the one text of a manifest that holds these facts, with its digest."""
    bare = {key: value for key, value in facts.items() if key != "digest"}
    digest = hashlib.sha256(canonical(bare).encode("ascii")).hexdigest()
    return json.dumps({**bare, "digest": digest}, indent=1, sort_keys=True, allow_nan=False) + "\n"


def check_files(place: Path, name: str | None = None) -> tuple[dict[str, Any], list[Finding]]:
    """Check every file of a frozen table against its manifest.

    Parameters
    ----------
    place : Path
        Its folder.
    name : str, optional
        The name that it is known by; default whatever the manifest says.

    Returns
    -------
    manifest : dict
        Empty when it cannot be read.
    findings : list of Finding
        Empty when all holds.
    """
    manifest, findings = _read_manifest(place)
    if manifest and name is not None and manifest["name"] != name:
        sentence = (
            f"file {MANIFEST} is that of the frozen table {manifest['name']}, in the folder {name}; give the "
            "folder its name back."
        )
        findings.append(Finding("manifest", MANIFEST, sentence))
    files = manifest.get("files", {})
    for file, expected in files.items():
        path = place / file
        if path.is_symlink():
            sentence = f"file {file} is a link, and links are not followed: put the file itself there."
            findings.append(Finding("changed", file, sentence))
            continue
        if not path.is_file():
            findings.append(Finding("missing", file, f"file {file} is missing; restore it."))
            continue
        found = _digest_of(path)
        if found != expected:
            findings.append(
                Finding(
                    "changed",
                    file,
                    f"file {file} has changed: its SHA-256 is {found[:SHOWN]}… and was {expected[:SHOWN]}… "
                    "when the table was frozen; restore it.",
                )
            )
    if manifest:
        known = {*files, MANIFEST}
        for path in sorted(each for each in place.rglob("*")):
            file = path.relative_to(place).as_posix()
            if file not in known and not LITTER.intersection(path.relative_to(place).parts):
                sentence = f"file {file} is not part of the frozen table; move it elsewhere."
                findings.append(Finding("added", file, sentence))
    return manifest, findings


def _digest_of(path: Path) -> str:
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError as error:
        return f"unknown ({error.strerror})"


def _read_manifest(place: Path) -> tuple[dict[str, Any], list[Finding]]:
    try:
        check_inside(place / MANIFEST, place, f"file {MANIFEST}")
        size = (place / MANIFEST).stat().st_size
        check_memory(f"file {MANIFEST}: its {size:,} bytes", 20 * size, "restore it")
        content = (place / MANIFEST).read_bytes()
    except InputError as error:
        return {}, [Finding("manifest", MANIFEST, str(error))]
    except OSError as error:
        sentence = f"file {MANIFEST} cannot be read ({error.strerror}); restore it."
        return {}, [Finding("manifest", MANIFEST, sentence)]
    try:
        manifest = json.loads(content)
        whole = _is_manifest(manifest)
        same = whole and manifest_text(manifest).encode("ascii") == content
    except (ValueError, InputError, RecursionError):
        whole = same = False
    if whole and manifest["schema"] != SCHEMA:
        sentence = (
            f"{MANIFEST} is of schema {manifest['schema']} and this labkit reads {SCHEMA}; use the labkit "
            f"that froze the table, {manifest['versions'].get('labkit', 'another version')}."
        )
        return {}, [Finding("manifest", MANIFEST, sentence)]
    if same:
        return manifest, []
    sentence = (
        f"file {MANIFEST} is not as it was written: its content does not have the digest that it names; "
        "restore it."
    )
    return manifest if whole else {}, [Finding("manifest", MANIFEST, sentence)]


def _is_manifest(value: Any) -> bool:
    """Tell whether a decoded file has the fields of a manifest, each of its kind.

    Names of files stay in their folder, and nothing in it can be taken for anything but what it is called.
    """
    return (
        isinstance(value, dict)
        and value.keys() == KEYS.keys()
        and all(_is(value[key], kind) for key, kind in KEYS.items())
        and _is_query(value["query"])
        and all(isinstance(digest, str) and _is_plain(file) for file, digest in value["files"].items())
        and all(isinstance(version, str) for version in value["versions"].values())
        and all(_is_run(run) for run in value["runs"])
    )


def _is(value: Any, kind: type) -> bool:
    return isinstance(value, kind) and (kind is bool or not isinstance(value, bool))


def _is_query(query: dict[str, Any]) -> bool:
    texts = ("labels", "parameters", "measures")
    return (
        query.keys() == QUERY
        and all(isinstance(query[key], str) for key in ("study", "moment"))
        and all(isinstance(query[key], list) for key in texts)
        and all(isinstance(name, str) for key in texts for name in query[key])
        and all(len(set(query[key])) == len(query[key]) for key in texts)
        and (query["risk"] is None or _is_number(query["risk"]))
        and _is_number(query["confidence"])
    )


def _is_number(value: Any) -> bool:
    return _is(value, int) or isinstance(value, float)


def _is_run(run: Any) -> bool:
    """Tell whether something is the origin of a run, as `labkit.records.schema.row_of_origin` returns it."""
    from labkit.records.schema import ORIGIN

    decoded = {
        **dict.fromkeys(("versions", "parameters", "inputs", "rules"), dict),
        **{"spawn_key": list, "entropy": int, "dirty": bool, "rows": int},
    }
    return (
        isinstance(run, dict)
        and run.keys() == {*ORIGIN.names, "rows"}
        and _is_number(run["elapsed"])
        and all(_is(run[key], decoded.get(key, str)) for key in run.keys() - {"elapsed"})
        and all(
            isinstance(text, str) for key in ("versions", "inputs", "rules") for text in run[key].values()
        )
        and run["inputs"].keys() <= run["parameters"].keys()
        and all(isinstance(run["parameters"][name], str) for name in run["inputs"])
        and min(run["entropy"], run["rows"]) >= 0
    )


def _is_plain(file: str) -> bool:
    return (
        file not in ("", ".", "..", MANIFEST)
        and not set(file) & set("/\\\0:")
        and len(file.encode("utf-8", "replace")) < 256
        and file.isprintable()
    )


def encode(table: "pa.Table") -> bytes:
    """Return a table as the content of a parquet file."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    sink = pa.BufferOutputStream()
    pq.write_table(table.replace_schema_metadata(None), sink, compression="zstd")
    return sink.getvalue().to_pybytes()


def with_origins(runs: "pa.Table", origins: list[dict[str, Any]]) -> "pa.Table":
    """Return the rows of runs.parquet with the columns of their runs' origin before them, as records have."""
    import pyarrow as pa

    from labkit.records.schema import ORIGIN

    at = {origin["run_id"]: row for row, origin in enumerate(origins)}
    rows = pa.array([at[run] for run in runs["run_id"].to_pylist()])
    texts = [{name: _as_recorded(name, value) for name, value in origin.items()} for origin in origins]
    columns = {
        field.name: pa.array([text[field.name] for text in texts], type=field.type).take(rows)
        for field in ORIGIN
    }
    return pa.table({**columns, **{name: runs[name] for name in runs.column_names if name != "run_id"}})


def _as_recorded(name: str, value: Any) -> Any:
    if name == "entropy":
        return str(value)
    if name in ("versions", "spawn_key"):
        return json.dumps(value, sort_keys=True)
    return canonical(value) if name in ("parameters", "inputs", "rules") else value
