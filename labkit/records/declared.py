"""What a notebook declares: its code cells and the parameters it takes.

The parameters cell (tagged ``parameters``) holds one ``name: type = literal  # help`` a line, nothing else.
Types are int, float, str, bool and list, each also as ``type | None``; a default of None says the same, in
words that papermill can parse, which wants one equals sign a line. A parameter named ``fleet``, or whose name
ends in ``_path`` or ``_folder``, is a path.
"""

import ast
import hashlib
import json
import math
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

from labkit.checks import nearest, shown
from labkit.errors import InputError
from labkit.files import is_file_or_folder, read_text_file
from labkit.records.project import from_root, notebook_text

# What a run does with its time and place, but not with its results.
EXECUTION_ONLY = frozenset({"study", "store", "workers", "output", "new_study"})

_KINDS = {
    "int": ("a whole number", (int,)),
    "float": ("a number", (int, float)),
    "str": ("a text", (str,)),
    "bool": ("true or false", (bool,)),
    "list": ("a list", (list,)),
}


def is_path(name: str) -> bool:
    """Tell whether a parameter of this name is a path."""
    return name == "fleet" or name.endswith(("_path", "_folder"))


@dataclass(frozen=True)
class Parameter:
    """One line of a parameters cell."""

    name: str
    kind: str
    optional: bool
    default: Any

    @property
    def annotation(self) -> str:
        """The type as text."""
        return f"{self.kind} | None" if self.optional else self.kind

    def checked(self, value: Any) -> Any:
        """Return a value as this parameter's type; refuse in one sentence when it is of another.

        A whole number is fine for a float. A text for a list is split at the commas outside parentheses,
        since papermill's ``-p`` cannot pass a list.
        """
        if value is None and self.optional:
            return None
        if self.kind == "list" and isinstance(value, str):
            value = split_list(value)
        if value == [] and self.default:
            raise InputError(f"{self.name} is an empty list; give at least one item.")
        wording, types = _KINDS[self.kind]
        if not isinstance(value, types) or (isinstance(value, bool) and self.kind != "bool"):
            raise InputError(f"{self.name} is {shown(value)}; give {wording} ({self.annotation}).")
        if self.kind == "float":
            try:
                value = float(value)  # type: ignore[arg-type]
            except OverflowError:
                value = math.inf if value > 0 else -math.inf
            if value != value or value in (float("inf"), float("-inf")):
                raise InputError(f"{self.name} is {shown(value)}; give a finite number.")
        if is_path(self.name) and isinstance(value, str) and (value or self.default):
            self._check_exists(value)
        return value

    def _check_exists(self, text: str) -> None:
        if not text or not is_file_or_folder(from_root(text)):
            raise InputError(
                f"{self.name} is {text!r}; nothing is there that can be read (a relative path counts from "
                "the project root): give a path that exists."
            )


@dataclass(frozen=True)
class Notebook:
    """A saved notebook as far as a run cares: code cells in order, and the declared parameters."""

    path: Path
    cells: tuple[str, ...]
    parameters_at: int
    parameters: dict[str, Parameter]

    @property
    def name(self) -> str:
        """How records and refusals call it."""
        return notebook_text(self.path)

    @cached_property
    def digest(self) -> str:
        """SHA-256 of what can change its results.

        These are the code cells in order, where the parameters cell counts by names and types only: its
        values are part of the run's parameters, and the modules beside the notebook that it imports. Prose
        does not count: a corrected sentence keeps the records.
        """
        declared = json.dumps([[each.name, each.annotation] for _, each in sorted(self.parameters.items())])
        cells = [declared if at == self.parameters_at else cell for at, cell in enumerate(self.cells)]
        beside = _modules_beside(self.path.parent, self.cells)
        return hashlib.sha256(json.dumps([cells, beside] if beside else cells).encode()).hexdigest()

    def check_names(self, names: Any) -> None:
        """Refuse names that are not among the declared parameters."""
        for name in names:
            if name not in self.parameters:
                raise InputError(
                    f"{name} is no parameter of the notebook {self.name}; {nearest(name, self.parameters)}."
                )

    def checked(self, values: dict[str, Any]) -> dict[str, Any]:
        """Return all parameters with these values checked, and defaults for those not given."""
        self.check_names(values)
        return {name: each.checked(values.get(name, each.default)) for name, each in self.parameters.items()}


def read_notebook(path: Path) -> Notebook:
    """Read a notebook file and its declared parameters.

    Raises
    ------
    InputError
        When the file is no notebook, has not exactly one cell tagged ``parameters``, or when this cell holds
        anything but declarations.
    """
    try:
        cells = json.loads(read_text_file(path, f"notebook {path}"))["cells"]
        code = [
            ("".join(cell["source"]).strip(), cell.get("metadata", {}).get("tags", []))
            for cell in cells
            if cell["cell_type"] == "code"
        ]
        code = [(source, tags) for source, tags in code if source and "injected-parameters" not in tags]
        for source, _ in code:
            source.encode()  # half of a surrogate pair is no text
    except InputError:
        raise
    except (OSError, ValueError, LookupError, TypeError, AttributeError, RecursionError) as error:
        raise InputError(f"notebook {path} cannot be read as a notebook ({error}); save it anew.") from None
    at = [index for index, (_, tags) in enumerate(code) if "parameters" in tags]
    if len(at) != 1:
        raise InputError(
            f"notebook {path} has {len(at)} cells tagged 'parameters'; give the tag to exactly one."
        )
    sources = tuple(source for source, _ in code)
    return Notebook(path, sources, at[0], _declarations(path, sources[at[0]]))


def _modules_beside(folder: Path, sources: tuple[str, ...]) -> dict[str, str]:
    """Return the text of each Python file in a folder that sources import, directly or through another."""
    found: dict[str, str] = {}
    pending = list(sources)
    while pending:
        for name in _imported(pending.pop()):
            for file in (folder / f"{name}.py", *sorted((folder / name).rglob("*.py"))):
                key = file.relative_to(folder).as_posix()
                if key not in found and is_file_or_folder(file) and file.is_file():
                    found[key] = _text_of(file)
                    pending.append(found[key])
    return found


def _text_of(module: Path) -> str:
    try:
        return read_text_file(module, f"module {module}").decode("utf-8")
    except UnicodeDecodeError:
        raise InputError(f"module {module} is no UTF-8 text; save it in UTF-8.") from None
    except OSError as error:
        raise InputError(f"module {module} cannot be read ({error.strerror}); make it readable.") from None


def _imported(source: str) -> set[str]:
    """Return the first names of the modules that a source imports; lines for IPython alone do not count."""
    lines = [line for line in source.splitlines() if not line.lstrip().startswith(("%", "!"))]
    try:
        nodes = list(ast.walk(ast.parse("\n".join(lines))))
    except (SyntaxError, ValueError, RecursionError, MemoryError):
        return set()
    names = {alias.name for node in nodes if isinstance(node, ast.Import) for alias in node.names}
    names |= {node.module or "" for node in nodes if isinstance(node, ast.ImportFrom)}
    firsts = {name.split(".")[0] for name in names}
    return {name for name in firsts if 0 < len(name.encode()) < 200}  # no file has a longer name


def _declarations(path: Path, source: str) -> dict[str, Parameter]:
    found: dict[str, Parameter] = {}
    try:
        statements = ast.parse(source).body
    except (SyntaxError, ValueError, RecursionError, MemoryError) as error:
        raise InputError(
            f"notebook {path}, parameters cell, cannot be read as Python ({error}); write name: type = "
            "literal on each line."
        ) from None
    for statement in statements:
        try:
            if not isinstance(statement, ast.AnnAssign) or statement.value is None:
                raise ValueError
            words = [word.strip() for word in ast.unparse(statement.annotation).split("|")]
            kinds = [word.split("[")[0] for word in words if word != "None"]
            if len(kinds) != 1 or kinds[0] not in _KINDS or not isinstance(statement.target, ast.Name):
                raise ValueError
            default = ast.literal_eval(statement.value)
        except (ValueError, TypeError, SyntaxError, RecursionError, MemoryError):
            written = " ".join((ast.get_source_segment(source, statement) or "").split())[:200]
            raise InputError(
                f"notebook {path}, parameters cell, line {statement.lineno}: {written!r} is "
                f"no declaration; write name: type = literal with a type among {', '.join(_KINDS)}."
            ) from None
        name = statement.target.id
        found[name] = Parameter(name, kinds[0], "None" in words or default is None, default)
    return found


def split_list(text: str) -> list[str]:
    """Split a text at the commas outside parentheses: "a, mixed(beta=0.5)" has two items."""
    items, depth = [""], 0
    for sign in text:
        depth += (sign == "(") - (sign == ")")
        if sign == "," and depth == 0:
            items.append("")
        else:
            items[-1] += sign
    return [item.strip() for item in items if item.strip()]
