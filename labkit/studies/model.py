"""A study: a question declared in a TOML file, and the grid points it asks for."""

import itertools
import math
import os
import re
import tomllib
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

from labkit.analysis.stopping import stopping_rule
from labkit.checks import check_fraction, check_whole, nearest, shown
from labkit.errors import InputError, TooFewReplicates
from labkit.files import check_inside, is_file_or_folder, read_text_file
from labkit.records.declared import EXECUTION_ONLY, Notebook, Parameter, is_path, read_notebook
from labkit.records.identity import Identity, check_entropy, identify
from labkit.records.project import EXPERIMENTS, ROOT, check_study_name, find_notebook, path_text
from labkit.studies.door import (
    ANSWER,
    GROWTH,
    LONG_RUN,
    REPLAY,
    RULES,
    RUN,
    SERVE,
    SURVEY,
    check_risk,
    check_values,
)

# Parameters of the notebook that stand at the top of the file.
LONGEST_STUDY = 5_000_000  # bytes
_KEYS = re.compile(rb"[\w.\-\"' \t]+")
MOST_POINTS = 1_000_000
AT_TOP = ("replicates", "precision", "most_replicates", "entropy")
KEYS = ("title", "question", "notebook", *AT_TOP, "parameters", "grid", "answer")
# Handed to an answer notebook by the runner.
HANDED = ("study", "store", "output", "runs")


@dataclass(frozen=True)
class Point:
    """One grid point: the values to run the notebook with, and the identity of that run."""

    parameters: dict[str, Any]
    identity: Identity

    @property
    def run_id(self) -> str:
        """The id of the run."""
        return self.identity.run_id


@dataclass(frozen=True)
class Study:
    """A checked study; the fields are the keys of its file, `answer_mixes` the key mixes of its answer."""

    name: str
    title: str
    question: str
    notebook: Notebook
    parameters: dict[str, Any]
    grid: dict[str, list[Any]]
    answer_notebook: Notebook | None = None
    answer_parameters: dict[str, Any] | None = None
    answer_mixes: tuple[str, ...] = ()

    @cached_property
    def points(self) -> list[Point]:
        """The grid points in the order of the file; their identities do not depend on it."""
        found: dict[str, Point] = {}
        for values in itertools.product(*self.grid.values()):
            asked = self.parameters | dict(zip(self.grid, values, strict=True))
            point = Point(asked, identify(self.notebook, self.notebook.checked(asked)))
            if point.run_id in found:
                raise InputError(f"grid of study {self.name} has a point twice ({shown(asked)}); remove one.")
            found[point.run_id] = point
        return list(found.values())


def read_study(study: str | Path) -> Study:
    """Read and check a study: a name from experiments/, or the path of a TOML file.

    Raises
    ------
    InputError
        When there is no such file, or a key, parameter, type or path in it is refused, in one sentence.
    """
    path = find_study(str(study))
    try:
        text = read_text_file(path, f"study {path}", LONGEST_STUDY)
        _check_keys_short(path, text)
        content = tomllib.loads(text.decode("utf-8"))
    except InputError:
        raise
    except (OSError, ValueError, RecursionError) as error:
        raise InputError(f"study {path} cannot be read ({error}); correct the file.") from None
    try:
        return make_study(path.stem, content, folder=path.parent)
    except InputError as error:
        raise type(error)(f"study {path_text(path)}: {error}") from None


def _check_keys_short(path: Path, text: bytes) -> None:
    """Refuse a key of very many parts, for which tomllib takes the square of their number."""
    if any(run.count(b".") > 200 for run in _KEYS.findall(text)):
        raise InputError(f"study {path} has a key of more than 200 parts; name one thing by one word.")


def find_study(study: str) -> Path:
    """Return the file of a study."""
    path = Path(study) if study.endswith(".toml") else EXPERIMENTS / f"{study}.toml"
    # A name stays in its folder; a path may be any.
    if is_file_or_folder(path) and path.is_file() and (path.parent == EXPERIMENTS or study.endswith(".toml")):
        return path.resolve()
    known = sorted(each.stem for each in EXPERIMENTS.glob("*.toml"))
    raise InputError(
        f"study is {study!r}; give the path of a .toml file or a study of experiments/: "
        f"{nearest(study, known) if known else 'it holds none'}."
    )


def make_study(name: str, content: dict[str, Any], *, folder: Path) -> Study:
    """Check the content of a study file.

    Parameters
    ----------
    name : str
        The name of the study.
    content : dict
        The decoded file.
    folder : Path
        Where relative paths in it start.
    """
    check_study_name(name)
    _check_keys(content, KEYS, "key")
    title = _text(content, "title", default=name)
    question = _text(content, "question", default="")
    notebook = _notebook(_text(content, "notebook"), folder)
    for key in ("replicates", "entropy"):
        if key not in content and key in notebook.parameters:
            raise InputError(f"{key} is missing; give {key} = a whole number at the top of the file.")
    fixed = dict(_table(content, "parameters"))
    grid = {key: _grid_values(key, values) for key, values in _table(content, "grid").items()}
    points = math.prod(map(len, grid.values()))
    if points > MOST_POINTS:
        sizes = " × ".join(f"{len(values):,}" for values in grid.values())
        raise InputError(
            f"grid has {sizes} = {points:,} points; a study has at most {MOST_POINTS:,}: give fewer values, "
            "or several studies."
        )
    for key in (*fixed, *grid):
        if key in EXECUTION_ONLY:
            raise InputError(f"parameter {key} is set by labkit itself; remove it from the study.")
        if key in AT_TOP:
            place = "is given twice" if key in content else "is given in a table"
            raise InputError(f"{key} {place}; give it once, at the top of the file.")
        if key in fixed and key in grid:
            raise InputError(f"{key} is given twice; give it once, in [parameters] or in [grid].")
    if "replicates" in content:
        fixed["replicates"] = check_whole("replicates", content["replicates"])
    if "entropy" in content:
        fixed["entropy"] = check_entropy(content["entropy"])
    fixed |= _stopping(content, notebook)
    fixed = _typed(notebook, fixed, folder)
    grid = {
        key: [_typed(notebook, {key: value}, folder)[key] for value in values] for key, values in grid.items()
    }
    check_values(notebook, fixed)
    for key, values in grid.items():
        for value in values:
            check_values(notebook, {key: value})
    answer = dict(_table(content, "answer"))
    if not answer:
        return Study(name, title, question, notebook, fixed, grid)
    answer_notebook = _notebook(_text(answer, "notebook"), folder)
    del answer["notebook"]
    mixes = _mixes(answer.pop("mixes", []), grid)
    for key in HANDED:
        if key in answer:
            raise InputError(f"answer: {key} is set by labkit itself; remove it from the study.")
        if key not in answer_notebook.parameters:
            raise InputError(f"answer: notebook {answer_notebook.name} declares no parameter {key}; add it.")
    _check_reads(answer_notebook.name, notebook.name)
    answer = _typed(answer_notebook, answer, folder)
    check_values(answer_notebook, answer)
    _check_answerable(answer_notebook.checked(answer), fixed.get("replicates"))
    return Study(name, title, question, notebook, fixed, grid, answer_notebook, answer, mixes)


def _stopping(content: dict[str, Any], notebook: Notebook) -> dict[str, Any]:
    """Return the checked precision and most_replicates of a file; nothing when it has none."""
    if "precision" not in content:
        if "most_replicates" in content:
            raise InputError("most_replicates is given without a precision; give precision, too, or neither.")
        return {}
    for key in ("precision", "most_replicates"):
        if key not in notebook.parameters:
            raise InputError(
                f"notebook {notebook.name} declares no parameter {key}, so it cannot stop by a precision; "
                "remove precision or add the parameter."
            )
        if key not in content:
            raise InputError(f"{key} is missing; a precision needs {key} = a whole number at the top, too.")
    if "replicates" not in content:
        raise InputError("replicates is missing; a precision needs it as the least number of replicates.")
    rule = stopping_rule(content["precision"], content["replicates"], content["most_replicates"])
    return {"precision": rule.precision, "most_replicates": rule.most_replicates}


def _check_reads(answer: str, run: str) -> None:
    """Refuse one of the project's answer notebooks for runs of another of its notebooks than it reads."""
    reads = {ANSWER: RUN, GROWTH: LONG_RUN}
    read = reads.get(answer)
    if read is None or run == read or run not in (RUN, LONG_RUN, SURVEY, RULES, SERVE, REPLAY):
        return
    fitting = [name for name, each in reads.items() if each == run]
    advice = f"name {fitting[0]}" if fitting else "remove [answer], since that notebook is its own answer"
    raise InputError(f"answer: notebook {answer} reads runs of the notebook {read}, not of {run}; {advice}.")


def _mixes(names: Any, grid: dict[str, Any]) -> tuple[str, ...]:
    """Return the grid parameters in which the runs of one answer may differ, besides the usual ones."""
    if not isinstance(names, list):
        raise InputError(f"answer: mixes is {shown(names)}; give a list of parameters of the grid.")
    for name in names:
        if not isinstance(name, str) or name not in grid:
            raise InputError(f"answer: mixes names {name!r}, which the grid does not; {nearest(name, grid)}.")
    return tuple(names)


def _check_answerable(answer: dict[str, Any], replicates: int | None) -> None:
    """Refuse before any run a risk that these replicates could not answer after it."""
    if "risk" not in answer or replicates is None:
        return
    risk = check_risk(answer["risk"])
    confidence = check_fraction("confidence", answer.get("confidence", 0.95))
    if replicates > math.log(2 / (1 - confidence)) / min(risk, 1 - risk) + 1:
        return  # more than any rank needs, and a second of imports saved
    from labkit.analysis.headroom import replicates_needed

    needed = replicates_needed(risk, confidence)
    if replicates < needed:
        raise TooFewReplicates(
            f"replicates is {replicates}; a risk of {risk:g} with {100 * confidence:g} % limits needs at "
            f"least {needed}: raise replicates or accept a larger risk."
        )


def _check_keys(content: dict[str, Any], known: tuple[str, ...], what: str) -> None:
    for key in content:
        if key not in known:
            raise InputError(f"unknown {what} {key!r}; {nearest(key, known)}.")


def _text(content: dict[str, Any], key: str, default: str | None = None) -> str:
    value = content.get(key, default)
    if not isinstance(value, str):
        raise InputError(f"{key} is {shown(value)}; give a text.")
    return value


def _table(content: dict[str, Any], key: str) -> dict[str, Any]:
    value = content.get(key, {})
    if not isinstance(value, dict):
        raise InputError(f"{key} is {shown(value)}; give a table [{key}] of name = value lines.")
    return value


def _grid_values(key: str, values: Any) -> list[Any]:
    if not isinstance(values, list) or not values:
        raise InputError(f"grid: {key} is {shown(values)}; give a list of one or more values.")
    return values


def _notebook(text: str, folder: Path) -> Notebook:
    beside = folder / text
    if text.endswith(".ipynb") and is_file_or_folder(beside) and beside.is_file():
        _check_no_link_out(beside, folder, f"notebook {text!r}")
        return read_notebook(beside.resolve())
    return read_notebook(find_notebook(text))


def _typed(notebook: Notebook, values: dict[str, Any], folder: Path) -> dict[str, Any]:
    """Return values checked against the declared types, with paths from the study's folder made absolute."""
    notebook.check_names(values)
    return {name: _one(notebook.parameters[name], value, folder) for name, value in values.items()}


def _one(parameter: Parameter, value: Any, folder: Path) -> Any:
    if is_path(parameter.name) and isinstance(value, str) and value:
        try:
            place = Path(os.path.normpath(folder.resolve() / Path(value).expanduser()))
        except RuntimeError as error:
            raise InputError(f"{parameter.name} is {shown(value)}; {error}: give a path.") from None
        if not is_file_or_folder(place):
            state = "is no file and no folder" if os.path.lexists(place) else "does not exist"
            raise InputError(
                f"{parameter.name} is {shown(value)}; {place} {state}: give a path from the study's folder."
            )
        _check_no_link_out(place, folder.resolve(), f"{parameter.name} {shown(value)}")
        value = path_text(place) if place.is_relative_to(ROOT) else place.as_posix()
    return parameter.checked(value)


def _check_no_link_out(place: Path, folder: Path, what: str) -> None:
    """Refuse what lies in the study's folder by name and elsewhere in truth; what names another place may."""
    if Path(os.path.normpath(place)).is_relative_to(folder):
        check_inside(place, folder, what)
