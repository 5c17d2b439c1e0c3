"""Where the numbers of a report come from: study file, runs, commits, versions, seeds, inputs, moments."""

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from labkit.records.project import path_text
from labkit.records.provenance import source_state
from labkit.sources import library_version
from labkit.studies.model import Study

# Runs that are listed one by one.
MOST_LISTED = 24
LOCK = "requirements.lock"

RUN_HEADERS = ("run", "started (UTC)", "seconds", "commit", "entropy", "spawn key")


@dataclass(frozen=True)
class Origin:
    """Where the numbers come from, as texts.

    Attributes
    ----------
    facts : list of (str, list of str)
        What, and its values, one or more.
    runs : list of tuple of str
        The cells of `RUN_HEADERS`, one row a run; empty when they are too many to be listed.
    study_text : str
        The study's file as it is.
    commits : list of str
        Commits at which the runs were recorded.
    changed : bool
        Whether some run was recorded with changes, or at no commit.
    run_ids : list of str
        In the order of the study.
    """

    facts: list[tuple[str, list[str]]]
    runs: list[tuple[str, ...]]
    study_text: str
    commits: list[str]
    changed: bool
    run_ids: list[str]


def origin_of(study: Study, file: Path, origins: list[dict[str, Any]], root: Path) -> Origin:
    """Return where the numbers of a study come from.

    Parameters
    ----------
    study : Study
    file : Path
        The study's file.
    origins : list of dict
        The origin of each record, as `labkit.records.schema.row_of_origin` returns it.
    root : Path
        The checkout with which the report is made.
    """
    content = file.read_bytes()
    text = content.decode("utf-8")
    ids = [each["run_id"] for each in origins]
    state = source_state(root)
    moments = sorted(each["started"] for each in origins)
    elapsed = sum(each["elapsed"] for each in origins)
    facts = {
        "Study": [f"{study.name}: {study.title}"],
        "Study file": [f"{path_text(file)}, SHA-256 {hashlib.sha256(content).hexdigest()}"],
        "Notebooks": _notebooks(study, origins),
        "Runs": [f"{len(ids):,}, SHA-256 of their sorted ids {_digest_of(ids)}"],
        "Recorded": [
            f"{_moment(moments[0])} to {_moment(moments[-1])} UTC, {elapsed:,.1f} s of runs together"
        ],
        "Recorded at": list(dict.fromkeys(commit_words(each) for each in origins)),
        "Computed with": list(dict.fromkeys(version_words(each["versions"]) for each in origins)),
        "Entropy": list(dict.fromkeys(str(each["entropy"]) for each in origins)),
        "Bit generator": list(dict.fromkeys(each["bit_generator"] for each in origins)),
        "Draws": list(dict.fromkeys(each["draws"] for each in origins)),
        "Inputs": _inputs(origins),
        "Rules of the user's own": _rules(origins),
        "Analysis and page made with": [f"labkit {library_version()}, {commit_words(state)}", *_lock(root)],
    }
    return Origin(
        [(name, values) for name, values in facts.items() if values],
        [_row(each) for each in origins] if len(origins) <= MOST_LISTED else [],
        text,
        list(dict.fromkeys(each["git_hash"] for each in origins if each["git_hash"])),
        any(each["dirty"] or not each["git_hash"] for each in origins),
        ids,
    )


def commit_words(state: dict[str, Any]) -> str:
    """Return the commit of a record or checkout, and whether the sources differed from it."""
    commit = f"commit {state['git_hash']}" if state["git_hash"] else "no commit"
    if not state["dirty"]:
        return f"{commit}, nothing changed"
    changes = f"SHA-256 of the changes {state['diff_digest']}" if state["diff_digest"] else "changes unknown"
    return f"{commit} with changes ({changes})"


def version_words(versions: Mapping[str, str]) -> str:
    """Return the versions that a record has in words, labkit and Python first."""
    used = dict(versions)
    machine = " ".join(filter(None, (used.pop("platform", ""), used.pop("machine", ""))))
    first = [name for name in ("labkit", "python") if name in used]
    named = [f"{name} {used[name] or 'missing'}" for name in (*first, *sorted(set(used) - set(first)))]
    return f"{', '.join(named)}{f'; on {machine}' if machine else ''}"


def _lock(root: Path) -> list[str]:
    """Return the digest of the locked versions of a checkout; nothing where there are none."""
    try:
        content = (root / LOCK).read_bytes()
    except OSError:
        return []
    return [f"{LOCK}, SHA-256 {hashlib.sha256(content).hexdigest()}"]


def _notebooks(study: Study, origins: list[dict[str, Any]]) -> list[str]:
    run = dict.fromkeys((each["notebook"], each["notebook_digest"]) for each in origins)
    words = [f"{name} (runs), SHA-256 of its code {digest}" for name, digest in run]
    answer = study.answer_notebook
    return words + ([f"{answer.name} (answer), SHA-256 of its code {answer.digest}"] if answer else [])


def _inputs(origins: list[dict[str, Any]]) -> list[str]:
    read = {
        (name, str(each["parameters"].get(name, "")), digest)
        for each in origins
        for name, digest in each["inputs"].items()
    }
    return [f"{name} {place}, SHA-256 {digest}" for name, place, digest in sorted(read)]


def _rules(origins: list[dict[str, Any]]) -> list[str]:
    written = {(name, text) for each in origins for name, text in each["rules"].items()}
    return [
        f"{name}, SHA-256 of its source {hashlib.sha256(text.encode()).hexdigest()}"
        for name, text in sorted(written)
    ]


def _row(each: dict[str, Any]) -> tuple[str, ...]:
    commit = each["git_hash"][:12] or "none"
    return (
        each["run_id"],
        _moment(each["started"]),
        f"{each['elapsed']:,.1f}",
        f"{commit} + changes {each['diff_digest'][:12]}" if each["dirty"] else commit,
        str(each["entropy"]),
        str(each["spawn_key"]),
    )


def _digest_of(ids: list[str]) -> str:
    return hashlib.sha256("\n".join(sorted(ids)).encode()).hexdigest()


def _moment(text: str) -> str:
    return text[:19].replace("T", " ")
