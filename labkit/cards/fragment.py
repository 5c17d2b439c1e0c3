"""A piece of HTML: facts as a table, and further tables below, for pages of any theme and for exports.

Colours are the page's: JupyterLab's own variables where there are any, else what the text around has. There
is no script, no style sheet and nothing from elsewhere. All words may come from strangers' files and are
escaped; characters that change how a line runs are shown as numbers.
"""

import math
import numbers
from collections.abc import Sequence
from dataclasses import dataclass, field
from html import escape
from typing import Any

from labkit.text import printable

# Rows of a table, and characters of a cell, that are shown.
ROWS, CHARACTERS = 8, 80

_QUIET = "var(--jp-content-font-color2, inherit)"
_LINE = "1px solid var(--jp-border-color1, rgba(128, 128, 128, 0.6))"
_TABLE = f"border-collapse: collapse; border: none; border-top: {_LINE}; margin: 0 0 0.8em 0; max-width: 100%"
_CAPTION = (
    "caption-side: top; text-align: left; color: inherit; padding: 0.3em 0; font-weight: 600; "
    "white-space: nowrap"
)
_CELL = f"padding: 0.25em 0.9em 0.25em 0; border: none; border-bottom: {_LINE}; vertical-align: top"


@dataclass
class Listing:
    """A table of which the first rows are shown.

    Attributes
    ----------
    caption : str
    columns : sequence of str
    rows : sequence of sequence
        Only those to be shown, at most `ROWS`.
    total : int
        How many there are.
    """

    caption: str
    columns: Sequence[str]
    rows: Sequence[Sequence[Any]]
    total: int = 0


@dataclass
class Card:
    """What is shown of an object.

    Attributes
    ----------
    title : str
    facts : sequence of (name, value, meaning)
        A fact a row; the meaning, with the unit, may be empty.
    listings : sequence of Listing
        Further tables.
    note : str
        A sentence below, such as what a number must not be taken for.
    """

    title: str
    facts: Sequence[tuple[str, Any, str]]
    listings: Sequence[Listing] = field(default_factory=list)
    note: str = ""


def html(card: Card) -> str:
    """Return a card as HTML."""
    parts = [_facts(card), *(_listing(each) for each in card.listings)]
    if card.note:
        parts.append(f'<p style="color: {_QUIET}; margin: 0 0 0.8em 0">{_text(card.note, 1000)}</p>')
    return f'<div style="overflow-x: auto">{"".join(parts)}</div>'


def number(value: Any, digits: int = 4) -> str:
    """Return a number in words: thousands separated, so many digits, – for what is no number."""
    if isinstance(value, bool) or not isinstance(value, numbers.Real):
        return str(value)
    if isinstance(value, numbers.Integral):
        whole = int(value)
        if abs(whole) < 10**15:
            return f"{whole:,}".replace("-", "−")
        return f"about {'−' if whole < 0 else ''}10^{len(str(abs(whole))) - 1}"
    amount = float(value)
    if not math.isfinite(amount):
        return "–" if math.isnan(amount) else ("∞" if amount > 0 else "−∞")
    if amount == round(amount) and abs(amount) < 1e15:
        return f"{amount:,.0f}".replace("-", "−")
    words = f"{amount:#.{digits}g}"
    if abs(float(words)) >= 10**digits:  # as it will be written: 9999.99 is 10,000
        words = f"{amount:,.0f}" if abs(amount) < 1e15 else f"{amount:.{digits}g}"
    return words.rstrip(".").replace("-", "−", 1) if amount < 0 else words.rstrip(".")


def span(low: float, high: float) -> str:
    """Return a range of numbers in words."""
    return f"{number(low)} each" if low == high else f"{number(low)} to {number(high)}"


def names(some: Sequence[Any], total: int) -> str:
    """Return some names in words, and how many more there are."""
    shown = ", ".join(_cut(str(each), 40) for each in some)
    more = total - len(some)
    return f"{shown} and {more:,} more" if more > 0 else shown


def _facts(card: Card) -> str:
    rows = "".join(
        f'<tr><th scope="row" style="{_CELL}; text-align: left; font-weight: 500">{_text(name)}</th>'
        f'<td style="{_CELL}; text-align: left">{_value(value)}</td>'
        f'<td style="{_CELL}; text-align: left; color: {_QUIET}">{_text(meaning, 200)}</td></tr>'
        for name, value, meaning in card.facts
    )
    head = _head(("what", "value", "meaning"), [False] * 3)
    return _table(card.title, head, rows)


def _listing(listing: Listing) -> str:
    rows = list(listing.rows)[:ROWS]
    total = max(listing.total, len(listing.rows))
    caption = listing.caption
    if total > len(rows):
        caption += f" (the first {len(rows):,} of {total:,})"
    columns = list(zip(*rows, strict=True)) if rows else [()] * len(listing.columns)
    right = [bool(column) and all(isinstance(each, numbers.Real) for each in column) for column in columns]
    lines = []
    for row in rows:
        cells = []
        for at, value in enumerate(row):
            style = f"{_CELL}; text-align: {'right' if right[at] else 'left'}"
            begin = '<th scope="row"' if at == 0 else "<td"
            weight = "; font-weight: 500" if at == 0 else ""
            cells.append(f'{begin} style="{style}{weight}">{_value(value)}</{"th" if at == 0 else "td"}>')
        lines.append(f"<tr>{''.join(cells)}</tr>")
    return _table(caption, _head(listing.columns, right), "".join(lines))


def _head(columns: Sequence[str], right: Sequence[bool]) -> str:
    cells = "".join(
        f'<th scope="col" style="{_CELL}; text-align: {"right" if aside else "left"}; color: {_QUIET}; '
        f'font-weight: 400">{_text(column)}</th>'
        for column, aside in zip(columns, right, strict=True)
    )
    return f"<thead><tr>{cells}</tr></thead>"


def _table(caption: str, head: str, rows: str) -> str:
    title = f'<caption style="{_CAPTION}">{_text(caption, 200)}</caption>'
    return f'<table style="{_TABLE}">{title}{head}<tbody>{rows}</tbody></table>'


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    return _text(number(value), 400)


def _text(value: Any, longest: int = CHARACTERS) -> str:
    return escape(printable(_cut(str(value), longest)), quote=True)


def _cut(text: str, longest: int) -> str:
    return text if len(text) <= longest else f"{text[: longest - 1]}…"
