"""A user's rules as the text of one notebook cell that needs nothing else."""

import ast
import inspect
import sys
from collections.abc import Callable, Iterable
from types import ModuleType
from typing import Any

import numpy as np

from labkit.errors import InputError
from labkit.policies.outside import outside_of, plain_function, text_of
from labkit.policies.own_rule import OwnRule

# Numbers of an array that a cell writes out.
MOST_NUMBERS = 1_000


class _Cell:
    """Lines by the name that they define, in the order in which they must stand."""

    def __init__(self) -> None:
        self.imports: dict[str, str] = {}
        self.values: dict[str, str] = {}
        self.functions: dict[str, str] = {}

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
        if not text_of(rule.function):
            raise InputError(f"policy {rule.name} has no source text; write it in a cell of a notebook.")
        _add_function(cell, rule.name, rule.function.__name__, rule.function)
    return cell.text(), cell.imports | cell.values | dict.fromkeys(cell.functions, "def")


def _add_function(cell: _Cell, rule: str, name: str, function: Callable) -> None:
    text = text_of(function)
    if name in cell.functions and cell.functions[name] == text:
        return
    for known, value in {**outside_of(function), **_around(function, text)}.items():
        if value is not function and plain_function(value) is not function:
            _add_value(cell, rule, known, value)
    cell.put(cell.functions, name, text)


def _around(function: Callable, text: str) -> dict[str, Any]:
    """Return what the decorators, defaults and annotations of a function name."""
    node = ast.parse(text).body[0]
    if not isinstance(node, ast.FunctionDef):
        return {}
    arguments = node.args.args
    parts = [*node.decorator_list, *node.args.defaults, *(each.annotation for each in arguments)]
    names = {
        each.id
        for part in [*parts, node.returns]
        if part
        for each in ast.walk(part)
        if isinstance(each, ast.Name)
    }
    known = {**inspect.getclosurevars(function).nonlocals, **function.__globals__}
    return {name: known[name] for name in sorted(names) if name in known}


def _add_value(cell: _Cell, rule: str, name: str, value: Any) -> None:
    inner = plain_function(value)
    home = str(getattr(value, "__module__", None) or "")
    if isinstance(value, ModuleType):
        if getattr(value, "__file__", None) is None and value.__name__ not in sys.stdlib_module_names:
            raise InputError(_refusal(rule, name, "a module that no file holds"))
        alone = value.__name__ == name
        cell.put(cell.imports, name, f"import {value.__name__}" + ("" if alone else f" as {name}"))
    elif home and home != "__main__" and getattr(sys.modules.get(home), name, None) is value and _kept(home):
        cell.put(cell.imports, name, f"from {home} import {name}")
    elif inner is not None and text_of(inner):
        _add_function(cell, rule, name, inner)
    else:
        line = _literal(rule, name, value)
        if line.startswith("np."):
            cell.put(cell.imports, "np", "import numpy as np")
        cell.put(cell.values, name, f"{name} = {line}")


def _kept(home: str) -> bool:
    """Tell whether a module is an installed one, which another session finds, too."""
    package = home.split(".")[0]
    file = getattr(sys.modules.get(package), "__file__", None) or ""
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
