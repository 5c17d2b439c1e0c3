"""What a rule takes from outside itself: names, their values, and the text that a record keeps of both."""

import dis
import hashlib
import inspect
import re
import sys
import textwrap
from collections.abc import Callable, Iterator
from types import CodeType, FunctionType, ModuleType
from typing import Any

import numpy as np

# Values of an array that a record writes out.
SHOWN = 100

# Installed packages that rules use; records name their versions.
_LIBRARIES = ("numpy", "numba", "scipy", "pandas", "labkit", "math")
_LOADS = ("LOAD_GLOBAL", "LOAD_NAME", "LOAD_DEREF", "LOAD_CLASSDEREF")


def plain_function(value: Any) -> FunctionType | None:
    """Return the Python function behind a value, also behind one that numba compiles, or None."""
    inner = getattr(value, "py_func", value)
    return inner if isinstance(inner, FunctionType) else None


def outside_of(function: Callable) -> dict[str, Any]:
    """Return the names that a function reads from outside with their present values, sorted by name.

    Names that mean nothing yet, and Python's own, are left out.
    """
    cells = dict(
        zip(function.__code__.co_freevars, getattr(function, "__closure__", None) or (), strict=False)
    )
    found = {}
    for name in sorted(set(_names_read(function.__code__))):
        if name in cells:
            try:
                found[name] = cells[name].cell_contents
            except ValueError:  # not set yet
                continue
        elif name in function.__globals__:
            found[name] = function.__globals__[name]
    return found


def _names_read(code: CodeType) -> Iterator[str]:
    return (chain[0] for chain in _chains(code))


def _chains(code: CodeType) -> Iterator[tuple[str, ...]]:
    """Return each name that code reads from outside, with the attributes read of it right away."""
    chain: tuple[str, ...] = ()
    for step in dis.get_instructions(code):
        if step.opname == "EXTENDED_ARG":
            continue
        if chain and step.opname in ("LOAD_ATTR", "LOAD_METHOD"):
            chain += (step.argval,)
            continue
        if chain:
            yield chain
        chain = (step.argval,) if step.opname in _LOADS else ()
    for inner in filter(inspect.iscode, code.co_consts):
        yield from _chains(inner)


def values_reached(function: Callable) -> dict[str, Any]:
    """Return what `outside_of` does, with attributes of the user's own modules, and default arguments.

    Attributes go by ``module.name``, defaults by the name of their argument.
    """
    found = outside_of(function)
    attributes = {}
    for name, *rest in _chains(function.__code__):
        value, path = found.get(name), name
        for attribute in rest:
            if not isinstance(value, ModuleType) or _is_library(value.__name__):
                break
            value, path = getattr(value, attribute, None), f"{path}.{attribute}"
        if path != name:
            attributes[path] = value
    code, given = function.__code__, getattr(function, "__defaults__", None) or ()
    names = code.co_varnames[code.co_argcount - len(given) : code.co_argcount]
    defaults = dict(zip(names, given, strict=True)) | (getattr(function, "__kwdefaults__", None) or {})
    return found | dict(sorted(attributes.items())) | defaults


def fingerprints(function: Callable, seen: frozenset = frozenset()) -> dict[str, str]:
    """Return a text for each value from outside that differs when the value does.

    Functions count by their code and what they take from outside themselves, as ``helper.name``; library
    modules and objects that cannot be looked into by what they are only.
    """
    found = {}
    for name, value in values_reached(function).items():
        inner = plain_function(value)
        found[name] = _fingerprint(value)
        if inner is not None and inner not in seen and inner is not function and not _of_library(inner):
            more = fingerprints(inner, seen | {inner, function})
            found |= {f"{name}.{key}": each for key, each in more.items()}
    return found


def _fingerprint(value: Any) -> str:
    inner = plain_function(value)
    if inner is not None:
        return _code_digest(inner)
    if isinstance(value, np.ndarray):
        return _array_words(value)
    if isinstance(value, bool | int | float | complex | str | bytes | tuple | list | dict | set | np.generic):
        return f"{type(value).__name__} {value!r}"
    return f"{type(value).__name__}"


def _of_library(function: FunctionType) -> bool:
    """Tell whether a function comes from an installed package, whose text no record needs."""
    return (function.__module__ or "").split(".")[0] in _LIBRARIES


def _is_library(module: str) -> bool:
    package = module.split(".")[0]
    return package in _LIBRARIES or package in sys.stdlib_module_names


def _array_words(array: np.ndarray) -> str:
    shape = " × ".join(map(str, array.shape)) or "one value"
    digest = hashlib.sha256(np.ascontiguousarray(array).tobytes()).hexdigest()
    return f"array of {array.dtype}, {shape}, SHA-256 {digest}"


def _code_digest(function: FunctionType) -> str:
    code = function.__code__
    constants = [value for value in code.co_consts if not inspect.iscode(value)]
    return hashlib.sha256(code.co_code + repr((constants, code.co_names)).encode()).hexdigest()


def text_of(function: Callable) -> str:
    """Return the source of a function without the indentation around it, or "" when there is none."""
    try:
        text = textwrap.dedent(inspect.getsource(function))
    except (OSError, TypeError):
        return ""
    # For code made from a string some Python versions return the lines of another file.
    name = re.escape(function.__code__.co_name)
    return text if re.search(rf"def\s+{name}\s*[\[(]", text) else ""


def source_of(function: Callable, seen: frozenset = frozenset()) -> str:
    """Return the text of a rule as it is recorded: its source, and what it takes from outside."""
    text = text_of(function)
    if not text:
        code = function.__code__
        constants = [value for value in code.co_consts if not inspect.iscode(value)]
        digest = hashlib.sha256(code.co_code + repr(constants).encode()).hexdigest()
        text = f"# no source text; digest of the compiled function: {digest}\n"
    for name, value in values_reached(function).items():
        inner = plain_function(value)
        if isinstance(value, bool | int | float | str | tuple | np.generic):
            text += f"# {name} = {value!r}\n"
        elif isinstance(value, np.ndarray):
            listed = f" = {value.tolist()}" if value.size <= SHOWN else ""
            text += f"# {name}{listed}: {_array_words(value)}\n"
        elif isinstance(value, ModuleType):
            continue
        elif inner is not None and inner not in seen and inner is not function and not _of_library(inner):
            written = source_of(inner, seen | {function, inner})
            text += f"# {name} is\n{textwrap.indent(written, '#     ', lambda line: True)}"
    return text
