"""A user's rules as the text of one notebook cell that needs nothing else."""

import ast
import builtins
import inspect
import json
import sys
from collections.abc import Callable, Iterable
from types import FunctionType, ModuleType
from typing import Any

import numpy as np

from labkit.errors import InputError
from labkit.policies.outside import outside_of, plain_function, text_of
from labkit.policies.own_rule import OwnRule

# Numbers of an array that a cell writes out.
MOST_NUMBERS = 1_000

# The id of the cell that holds the rules; by it a notebook made here is known again.
OWN_RULES = "own-rules"


class _Cell:
    """Lines by the name that they define, in the order in which they must stand."""

    def __init__(self) -> None:
        self.imports: dict[str, str] = {}
        self.values: dict[str, str] = {}
        self.functions: dict[str, str] = {}
        self.done: set[Callable] = set()

    def put(self, kind: dict[str, str], name: str, line: str) -> None:
        for known in (self.imports, self.values, self.functions):
            if known.get(name, line) != line:
                raise InputError(
                    f"name {name} means one thing to one rule and another to another; give one of the two "
                    "another name, so that both can stand in one cell."
                )
        kind[name] = line

    def text(self) -> str:
        ranked = sorted(self.imports.values(), key=lambda line: (_rank(line), line))
        blocks = ["\n".join(line for line in ranked if _rank(line) == rank) for rank in range(3)]
        head = [block for block in blocks if block]
        if self.values:
            head.append("\n".join(self.values.values()))
        return "\n\n\n".join(["\n\n".join(head), *(text.strip("\n") for text in self.functions.values())])


def _rank(line: str) -> int:
    package = line.split()[1].split(".")[0]
    return 0 if package in sys.stdlib_module_names else 2 if package == "labkit" else 1


def cell_of_rules(rules: Iterable[OwnRule]) -> tuple[str, dict[str, str]]:
    """Return the text of one cell that defines these rules, and the line that defines each name.

    Parameters
    ----------
    rules : iterable of OwnRule
        Written in a notebook or a module, so that their text is known.

    Raises
    ------
    InputError
        When a rule has no source text, or takes something from outside that no text can hold.
    """
    cell = _Cell()
    for rule in rules:
        text = text_of(rule.function)
        if not text:
            raise InputError(f"policy {rule.name} has no source text; write it in a cell of a notebook.")
        node = _definition(rule.name, rule.function)[1]
        if node.name != rule.function.__name__ or not node.decorator_list:
            raise InputError(
                f"policy {rule.name} was not made by writing @lk.policy above def {rule.function.__name__}; "
                "write it so, since a study takes its text."
            )
        _add_function(cell, rule.name, rule.function)
    return cell.text(), cell.imports | cell.values | dict.fromkeys(cell.functions, "def")


def _definition(rule: str, function: Callable) -> tuple[str, ast.FunctionDef]:
    """Return the text of a function as it can stand in a cell, and what it parses to."""
    text = text_of(function)
    # A text over several lines, or a comment, may begin further left than the function: no indent goes then.
    for whole in (text, f"if True:\n{text}"):
        try:
            tree = ast.parse(whole)
        except (SyntaxError, ValueError, RecursionError):
            continue
        found = [node for node in ast.walk(tree) if isinstance(node, ast.FunctionDef)]
        if found and found[0].name == function.__code__.co_name:
            return whole, found[0]
    raise InputError(
        f"policy {rule} needs {function.__code__.co_name}, whose text cannot stand alone; write it in a cell "
        "of its own, without indent."
    )


def _add_function(cell: _Cell, rule: str, function: Callable) -> None:
    if function in cell.done:
        return
    cell.done.add(function)
    text, node = _definition(rule, function)
    for known, value in {**outside_of(function), **_around(rule, function, node)}.items():
        if value is not function and plain_function(value) is not function:
            _add_value(cell, rule, known, value)
    cell.put(cell.functions, node.name, text)


def _around(rule: str, function: Callable, node: ast.FunctionDef) -> dict[str, Any]:
    """Return what the decorators, defaults and annotations of a function name."""
    arguments = [*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs]
    parts = [*node.decorator_list, *node.args.defaults, *node.args.kw_defaults, node.returns]
    parts += [each.annotation for each in arguments]
    inside = [each for part in parts if part for each in ast.walk(part) if isinstance(each, ast.Name)]
    names = {each.id for each in inside} - {each.id for each in inside if isinstance(each.ctx, ast.Store)}
    known = {**inspect.getclosurevars(function).nonlocals, **getattr(function, "__globals__", {})}
    # What a default was when the function was made, whatever its name means now.
    defaults = zip(node.args.defaults, getattr(function, "__defaults__", None) or (), strict=False)
    known |= {part.id: value for part, value in defaults if isinstance(part, ast.Name)}
    for name in sorted(names):
        if name not in known and not hasattr(builtins, name):
            raise InputError(
                f"policy {rule} needs {node.name}, whose decorators, defaults or annotations name {name}, "
                "which means nothing where a study would put it; define it in a cell."
            )
    return {name: known[name] for name in sorted(names) if name in known}


def _add_value(cell: _Cell, rule: str, name: str, value: Any) -> None:
    inner = plain_function(value)
    if isinstance(value, ModuleType):
        if not _kept(value.__name__):
            raise InputError(
                f"policy {rule} takes {name} from outside, a module that is not installed, which another "
                f"session may not find; take what the rule needs by its name, as in from {value.__name__} "
                "import LIMIT."
            )
        alone = value.__name__ == name
        cell.put(cell.imports, name, f"import {value.__name__}" + ("" if alone else f" as {name}"))
        return
    line = _import_line(name, value)
    if line:
        cell.put(cell.imports, name, line)
    elif inner is not None and text_of(inner) and not _kept(str(inner.__module__)):
        _add_helper(cell, rule, name, value, inner)
    else:
        line = _literal(rule, name, value)
        if line.startswith("np."):
            cell.put(cell.imports, "np", "import numpy as np")
        cell.put(cell.values, name, f"{name} = {line}")


def _add_helper(cell: _Cell, rule: str, name: str, value: Any, inner: FunctionType) -> None:
    """Put in a function of the user's, and the name by which a rule calls it where that is another one."""
    own = _definition(rule, inner)[1]
    if value is not inner and not own.decorator_list:
        raise InputError(
            f"policy {rule} takes {name} from outside, compiled by a call; write @numba.njit above "
            f"def {own.name} instead, so that its text says it."
        )
    _add_function(cell, rule, inner)
    if name != own.name:
        cell.put(cell.functions, name, f"{name} = {own.name}")


def _import_line(name: str, value: Any) -> str:
    """Return the line that imports an object of an installed module under this name, or ""."""
    home = str(getattr(value, "__module__", None) or "")
    if not _kept(home):
        return ""
    real = str(getattr(value, "__name__", None) or name)
    for module in (home.split(".")[0], home):
        if getattr(sys.modules.get(module), real, None) is value:
            return f"from {module} import {real}" + ("" if real == name else f" as {name}")
    return ""


def _kept(home: str) -> bool:
    """Tell whether a module is an installed one, which another session finds, too."""
    package = home.split(".")[0]
    file = getattr(sys.modules.get(package), "__file__", None) or ""
    if package in ("", "__main__"):
        return False
    return package in sys.stdlib_module_names or package == "labkit" or "site-packages" in file


def _literal(rule: str, name: str, value: Any) -> str:
    if isinstance(value, np.ndarray):
        if value.size > MOST_NUMBERS:
            raise InputError(_refusal(rule, name, f"an array of {value.size:,} numbers"))
        if value.dtype.kind not in "biuf" or not np.isfinite(value).all():
            raise InputError(_refusal(rule, name, "an array that holds other things than finite numbers"))
        return f'np.array({value.tolist()}, dtype="{value.dtype.name}")'
    if isinstance(value, np.bool_ | np.number) and np.isfinite(value):
        return f"np.{type(value).__name__.rstrip('_')}({value.item()!r})"
    text = repr(value)
    try:
        if ast.literal_eval(text) == value and isinstance(value, bool | int | float | str | tuple):
            return text
    except (ValueError, SyntaxError, RecursionError, MemoryError):
        pass
    kind = f"the value {text}" if isinstance(value, float) else f"a Python {type(value).__name__}"
    raise InputError(_refusal(rule, name, kind))


def _refusal(rule: str, name: str, kind: str) -> str:
    return (
        f"policy {rule} takes {name} from outside, {kind}; a study can hold finite numbers, texts, tuples, "
        f"arrays of up to {MOST_NUMBERS:,} numbers and compiled functions: use one of these."
    )


def cells_around(text: str) -> list[dict[str, Any]]:
    """Return this text as a notebook's cell, below one that tells what it is."""
    about = "The rules, and all that they take from outside."
    code: dict[str, Any] = {"cell_type": "code", "execution_count": None, "id": OWN_RULES}
    code |= {"metadata": {}, "outputs": []}
    return [
        {
            "cell_type": "markdown",
            "id": "about-own-rules",
            "metadata": {},
            "source": about.splitlines(keepends=True),
        },
        {**code, "source": text.splitlines(keepends=True)},
    ]


def holds_rules(text: bytes | None) -> bool:
    """Tell whether this is a notebook with the cell that `write_study` puts in."""
    try:
        cells = json.loads(text or b"null")["cells"]
        return any(cell.get("id") == OWN_RULES for cell in cells)
    except (ValueError, TypeError, KeyError, AttributeError, RecursionError):
        return False


def bound_names(cells: Iterable[str], parameters: set[str]) -> dict[str, str]:
    """Return the names that a notebook gives a meaning to, imported ones with the line that imports them."""
    found = dict.fromkeys(parameters, "")
    for cell in cells:
        for node in ast.walk(ast.parse(cell)):
            if isinstance(node, ast.Import | ast.ImportFrom):
                found |= {each.asname or each.name: ast.unparse(node) for each in node.names}
            elif isinstance(node, ast.Name) and isinstance(node.ctx, ast.Store):
                found.setdefault(node.id, "")
            elif isinstance(node, ast.FunctionDef):
                found.setdefault(node.name, "")
    return found


def check_names(lines: dict[str, str], bound: dict[str, str]) -> None:
    """Refuse a name of the rules' cell that the rest of the notebook uses for something else."""
    for name, line in lines.items():
        if name in bound and line != bound[name]:
            raise InputError(
                f"name {name}, which your rules use, has a meaning of its own in the study's notebook; give "
                "it another name in your cell."
            )
