"""A study of rules of one's own, made with one call: a study file, and the notebook that holds the rules."""

import contextlib
import json
import os
import secrets
import tempfile
import tomllib
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from labkit.analysis.headroom import replicates_needed
from labkit.checks import check_whole, shown
from labkit.errors import InputError
from labkit.files import is_file_or_folder
from labkit.fleet.readers import read_fleet
from labkit.policies.own_rule import OwnRule
from labkit.records.declared import read_notebook
from labkit.records.identity import check_entropy
from labkit.records.project import EXPERIMENTS, ROOT, check_study_name, find_notebook, from_root, path_text
from labkit.studies.door import ANSWER, RUN, check_points, check_risk, policy_names
from labkit.studies.model import make_study
from labkit.studies.own_fleet import default_tasks
from labkit.studies.rule_cells import bound_names, cell_of_rules, cells_around, check_names, holds_rules
from labkit.trials.checking import check_policy

_BEGIN = f'run = lk.begin_run("{RUN}", globals())'
_PARSE = (
    "from labkit.policies.naming import parse_policy",
    "from labkit.policies.own_rule import rules_named",
)
_RULES = (
    "rules = [parse_policy(policy) for policy in policies]",
    "rules = rules_named(policies, globals())",
)


@dataclass(frozen=True)
class WrittenStudy:
    """A study that `labkit.write_study` made.

    Attributes
    ----------
    name : str
    file : pathlib.Path
        The study file.
    notebook : pathlib.Path
        The notebook beside it, which holds the rules.
    new : bool
        Whether it was written now; False when the same study was there already.
    command : str
        What runs it, from the project root.

    Examples
    --------
    >>> import labkit as lk
    >>> from labkit.records.project import EXPERIMENTS
    >>> file, notebook = EXPERIMENTS / "second.toml", EXPERIMENTS / "second.ipynb"
    >>> study = lk.WrittenStudy("second", file, notebook, new=True)
    >>> study.command
    'labkit run second'
    """

    name: str
    file: Path
    notebook: Path
    new: bool

    @property
    def command(self) -> str:
        """What runs it, from the project root."""
        return f"labkit run {self.name if self.file.parent == EXPERIMENTS else path_text(self.file)}"

    def __repr__(self) -> str:
        state = "written" if self.new else "there already, unchanged"
        return (
            f"study {self.name}: {path_text(self.file)} and {path_text(self.notebook)} ({state})\n"
            f"to run it: .venv/bin/{self.command}   (commit both files, and CI can do the same)"
        )


def write_study(
    name: str,
    rules: OwnRule | Iterable[OwnRule],
    *,
    fleet: str | Path,
    against: str | Iterable[str] = ("least-loaded",),
    tasks: int | None = None,
    replicates: int | None = None,
    risk: float = 0.01,
    report_every: list[int] | None = None,
    entropy: int = 1,
    title: str | None = None,
    folder: str | Path | None = None,
    replace: bool = False,
) -> WrittenStudy:
    """Make a study of rules of your own that `labkit run` completes from a fresh session, also in CI.

    It writes ``<name>.toml`` and ``<name>.ipynb``: the headroom notebook with your rules in a cell of their
    own, with all that they take from outside. Both belong together in version control.

    Parameters
    ----------
    name : str
        The study's name, with which ``labkit run`` and ``labkit list`` call it.
    rules : OwnRule or iterable of OwnRule
        Made by `labkit.policy`. Each is checked once more (`labkit.check_policy`).
    fleet : str or Path
        The folder of the fleet's two tables, from the project root.
    against : str or list of str
        Built-in rules that meet the same arrivals; savings are counted from the first.
    tasks : int, optional
        Tasks placed; default as `labkit answer` chooses: as many as fill 80 % of the capacity, or 100 a
        server.
    replicates : int, optional
        Independent repetitions; default 400, or more where the risk needs it.
    risk : float
        Accepted probability that the fullest server overflows.
    report_every : list of int, optional
        Kinds of information to compare: 0 for fresh loads, k for loads reported once every k tasks.
    entropy : int
        All randomness starts from this number.
    title : str, optional
        Default: the names of the rules.
    folder : str or Path, optional
        Where the two files go; default experiments/.
    replace : bool
        Write over a study of this name that this function made before.

    Returns
    -------
    WrittenStudy

    Raises
    ------
    InputError
        When a name, value or rule is refused, a rule takes something from outside that a notebook cannot
        hold, or another study of this name is there and `replace` is False. Nothing is written then.

    Examples
    --------
    >>> import tempfile
    >>> import labkit as lk
    >>> @lk.policy
    ... def second_if_lower(options, loads, capacity, coin):
    ...     return 1 if loads[options[1]] < loads[options[0]] else 0
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     study = lk.write_study("second", second_if_lower, fleet="experiments/demo", folder=folder)
    ...     sorted(path.name for path in (study.file, study.notebook))
    ['second.ipynb', 'second.toml']
    """
    check_study_name(name)
    own = _checked_rules(rules)
    others = _checked_others(against)
    place = _fleet_folder(fleet)
    target = _target(folder)
    risk = check_risk(risk)
    entropy = check_entropy(int(entropy) if isinstance(entropy, np.integer) else entropy)
    title = _checked_title(title)
    names = [*(rule.name for rule in own), *others]
    values = {
        "fleet": _from(place, target),
        "tasks": default_tasks(read_fleet(place))[0] if tasks is None else check_whole("tasks", tasks),
        "policies": names,
    }
    content: dict[str, Any] = {
        "title": title or f"{' and '.join(rule.name for rule in own)} against {', '.join(others)}",
        "notebook": f"{name}.ipynb",
        "replicates": max(400, replicates_needed(risk))
        if replicates is None
        else check_whole("replicates", replicates),
        "entropy": entropy,
        "parameters": values,
        "grid": {} if report_every is None else {"report_every": _checked_every(report_every)},
        "answer": {"notebook": ANSWER, "risk": risk, "baseline": others[0]},
    }
    file, notebook = target / f"{name}.toml", target / f"{name}.ipynb"
    page = _notebook(own, content["title"], notebook, {**values, "fleet": path_text(place)})
    text = _toml(content)
    _check(name, text, page, target, others)
    new = _write({notebook: page, file: text}, name, replace)
    return WrittenStudy(name, file, notebook, new)


def _checked_rules(rules: Any) -> list[OwnRule]:
    given = [rules] if isinstance(rules, OwnRule) else list(rules) if isinstance(rules, list | tuple) else []
    if not given or not all(isinstance(each, OwnRule) for each in given):
        raise InputError(
            f"rules is {shown(rules)}; give a rule made with @lk.policy, or a list of such rules."
        )
    names = [rule.name for rule in given]
    for rule in given:
        if names.count(rule.name) > 1:
            raise InputError(f"rules holds {rule.name} twice; give each rule once.")
        found = check_policy(rule)
        if not found.sound:
            raise InputError(
                f"policy {rule.name} {found.findings[0].fault}, as lk.check_policy({rule.function.__name__}) "
                "shows; mend it first."
            )
    return given


def _checked_others(against: Any) -> list[str]:
    given = [against] if isinstance(against, str) else against
    if not isinstance(given, Iterable):
        raise InputError(f"against is {shown(against)}; give a list of built-in rules to compare with.")
    names = policy_names(list(given))
    if not names:
        raise InputError("against is empty; name at least one built-in rule to compare with.")
    return names


def _checked_every(report_every: Any) -> list[int]:
    if not isinstance(report_every, list | tuple | range) or not report_every:
        raise InputError(
            f"report_every is {shown(report_every)}; give a list of whole numbers, such as [0, 50]."
        )
    return [check_whole("report_every", each, least=0) for each in report_every]


def _checked_title(title: Any) -> str | None:
    if title is not None and not (isinstance(title, str) and _writable(title)):
        raise InputError(f"title is {shown(title)}; give a text of ordinary characters.")
    return title


def _writable(text: str) -> bool:
    try:
        text.encode()
    except UnicodeEncodeError:
        return False
    return True


def _target(folder: Any) -> Path:
    if not isinstance(folder, str | Path | None):
        raise InputError(f"folder is {shown(folder)}; give a folder that exists.")
    target = EXPERIMENTS if folder is None else from_root(folder)
    if not is_file_or_folder(target) or not target.is_dir():
        raise InputError(f"folder is {str(folder)!r}; give a folder that exists.")
    return target


def _fleet_folder(fleet: Any) -> Path:
    if not isinstance(fleet, str | Path):
        raise InputError(
            f"fleet is a {type(fleet).__name__}; give the folder of its two tables, such as "
            'run.path("fleet"), since a study reads them again.'
        )
    return from_root(fleet)


def _from(place: Path, folder: Path) -> str:
    """Return a path as a study file in this folder writes it: relative inside the project, else absolute."""
    inside = place.is_relative_to(ROOT) and folder.is_relative_to(ROOT)
    return Path(os.path.relpath(place, folder)).as_posix() if inside else place.as_posix()


def _notebook(rules: list[OwnRule], title: str, path: Path, values: dict[str, Any]) -> str:
    """Return the headroom notebook with these rules in it, which records under its own name."""
    home = find_notebook(RUN)
    declared = read_notebook(home)
    content = json.loads(home.read_text(encoding="utf-8"))
    text, lines = cell_of_rules(rules)
    check_names(lines, bound_names(declared.cells, set(declared.parameters)))
    begin = f"run = lk.begin_run({json.dumps(path_text(path), ensure_ascii=False)}, globals())"
    changes = [(_BEGIN, begin), _PARSE, _RULES]
    cells = []
    for cell in content["cells"]:
        source = "".join(cell["source"])
        if "parameters" in cell["metadata"].get("tags", []):
            cells += [_cell(cell, _with_defaults(source, values)), *cells_around(text)]
            continue
        for old, new in changes.copy():
            if cell["cell_type"] == "code" and old in source:
                source = source.replace(old, new)
                changes.remove((old, new))
        cells.append(_cell(cell, source))
    if changes:
        raise InputError(
            f"notebook {RUN} no longer holds the line {changes[0][0]!r}, where rules of your own are put in; "
            "restore it."
        )
    cells[0]["source"] = _lines(f"# {title}\n\n{_ABOUT}")
    content["cells"] = cells
    return json.dumps(content, indent=1, ensure_ascii=False) + "\n"


_ABOUT = (
    "A **run** of rules of one's own beside built-in ones, on the same arrivals: parameters in, one record "
    "out. `labkit run` executes it for each point of the study file beside it. To change a rule, change its "
    "cell here: runs with the changed rule are then other runs."
)


def _cell(cell: dict[str, Any], source: str) -> dict[str, Any]:
    return {**cell, "source": _lines(source)}


def _lines(text: str) -> list[str]:
    return text.splitlines(keepends=True)


def _with_defaults(source: str, values: dict[str, Any]) -> str:
    """Return a parameters cell with other defaults; lines without a value stay as they are."""
    lines = []
    for line in source.splitlines():
        name = line.split(":")[0]
        declared, sign, help_text = line.partition("  # ")
        if name in values:
            written = json.dumps(values[name], ensure_ascii=False)
            declared = f"{declared.split(' = ')[0]} = {written}"
        lines.append(f"{declared}{sign}{help_text}")
    return "\n".join(lines)


def _toml(content: dict[str, Any]) -> str:
    top = {key: value for key, value in content.items() if not isinstance(value, dict)}
    blocks = [_toml_lines(top)]
    for key, value in content.items():
        if isinstance(value, dict) and value:
            blocks.append(f"[{key}]\n{_toml_lines(value)}")
    return "\n\n".join(blocks) + "\n"


def _toml_lines(values: dict[str, Any]) -> str:
    # JSON's texts, numbers and lists are TOML's too, but for the one sign that TOML wants escaped as well.
    texts = {key: json.dumps(value, ensure_ascii=False, default=str) for key, value in values.items()}
    return "\n".join(f"{key} = {text}".replace("\x7f", "\\u007f") for key, text in texts.items())


def _check(name: str, text: str, page: str, folder: Path, others: list[str]) -> None:
    """Refuse what reading the study would refuse, before anything is written where it belongs."""
    with tempfile.TemporaryDirectory() as aside:
        notebook = Path(aside) / f"{name}.ipynb"
        notebook.write_text(page, encoding="utf-8", newline="\n")
        content = tomllib.loads(text) | {"notebook": str(notebook.resolve())}
        make_study(name, content, folder=folder).points  # noqa: B018  a point that is there twice is refused
        # What the door refuses for the headroom notebook, with rules that it can read by their names.
        content |= {"notebook": RUN, "parameters": {**content["parameters"], "policies": others}}
        plain = make_study(name, content, folder=folder)
        check_points(plain, plain.points)


def _write(texts: dict[Path, str], name: str, replace: bool) -> bool:
    """Write both files, or neither; return whether anything had to be written."""
    there = {path: _content(path) for path in texts if os.path.lexists(path)}
    if all(there.get(path) == text.encode() for path, text in texts.items()):
        return False
    notebook, file = texts
    _check_made_here(name, notebook, file, there)
    other = [path for path in there if there[path] != texts[path].encode()]
    if other and not replace:
        raise InputError(
            f"study {name} is there already and differs ({path_text(other[0])}); choose another name, or "
            "give replace=True to write over it."
        )
    beside = {path: path.with_name(f".{path.name}.{secrets.token_hex(8)}.tmp") for path in texts}
    done: list[Path] = []
    try:
        for path, text in texts.items():
            beside[path].write_text(text, encoding="utf-8", newline="\n")
        for path in texts:
            # A link fails where somebody else has written meanwhile; a rename would write over it.
            (os.replace if path in there else os.link)(beside[path], path)
            done.append(path)
    except OSError as error:
        for path in done:
            _undo(path, there.get(path))
        raise InputError(
            f"study {name} cannot be written to {path_text(file.parent)} ({error.strerror}); choose another "
            "folder or name."
        ) from None
    finally:
        for path in beside.values():
            path.unlink(missing_ok=True)
    return True


def _undo(path: Path, before: bytes | None) -> None:
    """Bring back what was there before this call, or nothing."""
    with contextlib.suppress(OSError):
        if before is None:
            path.unlink()
        else:
            path.write_bytes(before)


def _content(path: Path) -> bytes | None:
    try:
        return path.read_bytes()
    except OSError:
        return None


def _check_made_here(name: str, notebook: Path, file: Path, there: dict[Path, bytes | None]) -> None:
    """Refuse when a file is there that `write_study` did not make: it is never written over."""
    made = holds_rules(there.get(notebook))
    if file in there:
        made = made and _names(there[file], notebook.name)
    if there and not made:
        found = " and ".join(path.name for path in there)
        raise InputError(
            f"study {name} ({found} in {path_text(file.parent)}) was not made from rules of your own, and is "
            "not written over; choose another name or folder."
        )


def _names(text: bytes | None, notebook: str) -> bool:
    """Tell whether this is a study file of this notebook."""
    try:
        return tomllib.loads((text or b"").decode()).get("notebook") == notebook
    except (ValueError, RecursionError):
        return False
