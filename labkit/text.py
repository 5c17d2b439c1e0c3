"""Plain text: aligned columns for a terminal, and names with parameters."""

import inspect
import re
from collections.abc import Mapping
from typing import Any

from labkit.checks import nearest
from labkit.errors import InputError

# A spreadsheet takes a text that begins so for a formula, some also in their wide forms.
FORMULA = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")

# Characters of a name with its parameters.
LONGEST = 2_000

_FORM = re.compile(r"\s*([\w-]+)\s*(?:\((.*)\))?\s*")


def align(rows: list[list[str]]) -> str:
    """Return rows of texts as lines with aligned columns, each a line; the first row is the header."""
    rows = [[printable(cell) for cell in row] for row in rows]
    widths = [max(len(cell) for cell in column) for column in zip(*rows, strict=True)]
    return "\n".join(
        "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
    )


def printable(text: str) -> str:
    r"""Return a text for a line of a terminal, which obeys some characters instead of showing them.

    Each character that cannot be printed becomes its number, such as ``\x1b``, ``\u202e`` or ``\U000e0041``.
    """
    if text.isprintable():
        return text
    return "".join(each if each.isprintable() else _number_of(each) for each in text)


def short(name: Any, longest: int = 40) -> str:
    """Return a name for a table, cut when it is so long that it would push the other columns out."""
    text = str(name)
    return text if len(text) <= longest else f"{text[: longest - 1]}…"


def _number_of(character: str) -> str:
    number = ord(character)
    if number > 0xFFFF:
        return f"\\U{number:08x}"
    return f"\\u{number:04x}" if number > 0xFF else f"\\x{number:02x}"


def harmless(value: Any) -> Any:
    """Return a cell for a spreadsheet: text that it would take for a formula gets an apostrophe before it."""
    return f"'{value}" if isinstance(value, str) and value.startswith(FORMULA) else value


def name_part(text: str) -> str | None:
    """Return the part before the parameters, as `mixed` in ``"mixed(beta=0.5)"``; None when it is no name."""
    form = _FORM.fullmatch(text) if len(text) <= LONGEST else None
    return form.group(1) if form else None


def from_name(argument: str, text: Any, kinds: Mapping[str, type], example: str, value: str = "0.5") -> Any:
    """Return an object of one of the `kinds` from its name in words.

    Parameters
    ----------
    argument : str
        What a refusal calls the text, such as "policy".
    text : str
        A name and its parameters, such as ``"mixed(beta=0.5)"``; anything else is refused.
    kinds : mapping of str to type
        Classes by name; their parameters are numbers or words.
    example : str
        A name that a refusal shows.
    value : str
        What a refusal gives a missing parameter in its example.

    Raises
    ------
    InputError
        Unknown name, unknown or missing parameter, or a value that the class refuses.
    """
    form = _FORM.fullmatch(text) if isinstance(text, str) and len(text) <= LONGEST else None
    if form is None:
        raise InputError(f"{argument} is {text!r}; give a {argument} or its name, such as {example!r}.")
    name, inside = form.groups()
    if name not in kinds:
        raise InputError(f"{argument} is {text!r}; {nearest(name, kinds)}.")
    known = inspect.signature(kinds[name]).parameters
    values: dict[str, Any] = {}
    for part in filter(None, (part.strip() for part in (inside or "").split(","))):
        # A colon will do: a line of a notebook's parameters cell may hold one equals sign only.
        sign = "=" if "=" in part else ":"
        key, equals, given = (piece.strip() for piece in part.partition(sign))
        if key in values:
            raise InputError(f"{argument} is {text!r}; give {key} once.")
        if not equals or key not in known:
            allowed = nearest(key, known) if known else "it takes no parameters"
            raise InputError(f"{argument} is {text!r}, with {part!r}; {allowed}.")
        values[key] = _number_or_word(given)
    needed = [key for key, about in known.items() if about.default is about.empty]
    if not set(needed) <= values.keys():
        missing = " and ".join(key for key in needed if key not in values)
        shown = ", ".join(f"{key}={value}" for key in needed)
        raise InputError(f"{argument} is {text!r}; it needs {missing}, as in '{name}({shown})'.")
    return kinds[name](**values)


def _number_or_word(text: str) -> float | str:
    try:
        return int(text) if re.fullmatch(r"[+-]?[0-9]+", text) else float(text)
    except ValueError:
        return text
