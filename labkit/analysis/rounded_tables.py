"""A summary table as text for a spreadsheet, a page and a paper, each number rounded by its uncertainty."""

import csv
import io
import re
from collections.abc import Sequence
from typing import Any

import pandas as pd

from labkit.analysis.rounding import at_place, exact, last_place, rounded
from labkit.analysis.summary import LIMITS

# A spreadsheet takes a text that begins so for a formula.
_FORMULA = ("=", "+", "-", "@")

_TEX = {
    "\\": r"\textbackslash{}",
    "~": r"\textasciitilde{}",
    "^": r"\textasciicircum{}",
    "<": r"\textless{}",
    ">": r"\textgreater{}",
    "|": r"\textbar{}",
    "±": r"$\pm$",
    "×": r"$\times$",
    # Unlike an escaped brace these leave the braces of a BibTeX field balanced.
    "{": r"\textbraceleft{}",
    "}": r"\textbraceright{}",
    **{sign: f"\\{sign}" for sign in "&%$#_"},
}


def csv_text(table: pd.DataFrame, measures: Sequence[str]) -> str:
    """Return a table of `summarise` as CSV, values and errors in columns of their own.

    Parameters
    ----------
    table : pandas.DataFrame
    measures : sequence of str
        The measures in it.
    """
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow([_harmless(str(name)) for name in table.columns])
    for row, texts in _rows(table, measures):
        writer.writerow(
            [_harmless(texts[name]) if isinstance(row[name], str) else texts[name] for name in table.columns]
        )
    return stream.getvalue()


def markdown_text(table: pd.DataFrame, measures: Sequence[str], note: str = "") -> str:
    """Return a table of `summarise` in Markdown: value ± standard error in one cell, and a note below."""
    shown = _shown(table, measures)
    numbers = [_is_right(table[name]) for name in shown]
    lines = [
        [_markdown(name) for name in shown],
        ["---:" if right else "---" for right in numbers],
    ]
    for _, texts in _rows(table, measures):
        lines.append(
            [
                f"{texts[name]} ± {texts[f'{name}_error']}" if name in measures else _markdown(texts[name])
                for name in shown
            ]
        )
    text = "".join(f"| {' | '.join(cells)} |\n" for cells in lines)
    return f"{text}\n{_markdown(note)}\n" if note else text


def latex_text(table: pd.DataFrame, measures: Sequence[str], note: str = "") -> str:
    """Return a table of `summarise` as a plain LaTeX tabular that needs no package.

    A note stands in a last row over all columns.
    """
    shown = _shown(table, measures)
    columns = "".join("r" if _is_right(table[name]) else "l" for name in shown)
    lines = [rf"\begin{{tabular}}{{{columns}}}", r"\hline", _tex_row([tex_text(name) for name in shown])]
    lines.append(r"\hline")
    for row, texts in _rows(table, measures):
        cells = []
        for name in shown:
            if name in measures:
                value, error = _tex_number(texts[name]), _tex_number(texts[f"{name}_error"])
                cells.append(rf"${value} \pm {error}$")
            else:
                cells.append(
                    f"${_tex_number(texts[name])}$" if _is_number(row[name]) else tex_text(texts[name])
                )
        lines.append(_tex_row(cells))
    lines.append(r"\hline")
    if note:
        lines.append(
            _tex_row(
                [rf"\multicolumn{{{len(shown)}}}{{p{{0.9\linewidth}}}}{{\footnotesize {tex_text(note)}}}"]
            )
        )
    return "\n".join([*lines, r"\end{tabular}", ""])


def _shown(table: pd.DataFrame, measures: Sequence[str]) -> list[str]:
    errors = {f"{name}_error" for name in measures}
    return [str(name) for name in table.columns if name not in errors]


def _is_right(column: pd.Series) -> bool:
    return pd.api.types.is_numeric_dtype(column) and not pd.api.types.is_bool_dtype(column)


def _rows(table: pd.DataFrame, measures: Sequence[str]) -> list[tuple[dict[str, Any], dict[str, str]]]:
    """Return each row with the text of each of its cells."""
    rows = [dict(zip(map(str, table.columns), row, strict=True)) for row in table.itertuples(index=False)]
    return [(row, _texts(row, measures)) for row in rows]


def _texts(row: dict[str, Any], measures: Sequence[str]) -> dict[str, str]:
    texts = {name: _label(value) for name, value in row.items()}
    for name in measures:
        texts[name], texts[f"{name}_error"] = rounded(row[name], row[f"{name}_error"])
    if LIMITS[0] in row:
        error = (row[LIMITS[2]] - row[LIMITS[1]]) / 2
        for name in LIMITS:
            texts[name] = at_place(row[name], last_place(error)) if error else exact(row[name])
    return texts


def _label(value: Any) -> str:
    if isinstance(value, str | bool | int):
        return str(value)
    if pd.isna(value):
        return ""
    return repr(float(value)) if isinstance(value, float) else str(value)


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and not pd.isna(value)


def _harmless(text: str) -> str:
    line = " ".join(text.split())
    return f"'{line}" if line.startswith(_FORMULA) else line


def _markdown(text: str) -> str:
    return re.sub(r"([\\`*_\[\]<>|~$&#])", r"\\\1", " ".join(text.split()))


def tex_text(text: str) -> str:
    """Return a text so that LaTeX shows every sign in it as it is."""
    escaped = "".join(_TEX.get(sign, sign) for sign in " ".join(text.split()))
    return escaped.replace("--", "-{}-").replace("--", "-{}-")


def _tex_number(text: str) -> str:
    digits, _, power = text.partition("e")
    return rf"{digits} \times 10^{{{int(power)}}}" if power else digits


def _tex_row(cells: list[str]) -> str:
    return f"{' & '.join(cells)} \\\\"
