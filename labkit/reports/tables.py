"""Tables of a report: a caption, one row of headers that say what they head, numbers aligned to the right."""

import re

from bs4 import BeautifulSoup
from bs4.element import Tag

_NUMBER = re.compile(r"[+−-]?[\d,. ]*\d[\d,.]*(e[+-]?\d+)?( ?%)?( ?(–|to|±) ?[+−-]?\d[\d,.]*)?")
# Columns of a table that paper holds only in small type.
WIDE = 13
# Letters of a cell whose line is not broken on the screen.
SHORT = 24
_NOTHING = ("", "–", "-", "NaN", "nan", "None", "<NA>")


def mend_table(page: BeautifulSoup, table: Tag, caption: str) -> None:
    """Give a table, in place, its caption and headers, and room to scroll in where it is too wide.

    Parameters
    ----------
    page : bs4.BeautifulSoup
        What the table stands in.
    table : bs4.Tag
    caption : str
    """
    head = table.find("thead")
    if head is not None:
        _join_headers(head)
        _drop_row_numbers(table, head)
    for cell in table.find_all("th"):
        in_head = cell.find_parent("thead") is not None
        cell["scope"] = "col" if in_head else "rowgroup" if cell.has_attr("rowspan") else "row"
        if not cell.get_text(strip=True) and not cell.find(True):
            cell.name = "td"  # an empty header heads nothing
            del cell["scope"]
    _align(table)
    if max(len(row.find_all(["th", "td"])) for row in table.find_all("tr") or [table]) > WIDE:
        table["class"] = "wide"
    if table.caption is None:
        title = page.new_tag("caption")
        title.string = caption
        table.insert(0, title)
    frame = page.new_tag("div", attrs={"class": "table", "tabindex": "0", "role": "region"})
    frame["aria-label"] = caption
    table.wrap(frame)


def _join_headers(head: Tag) -> None:
    """Make one row of the two that pandas writes: names of columns, and below them names of the index."""
    rows = head.find_all("tr")
    if len(rows) != 2:
        return
    above, below = (row.find_all(["th", "td"]) for row in rows)
    texts = [[cell.get_text(strip=True) for cell in row] for row in (above, below)]
    named = next((at for at, text in enumerate(texts[1]) if not text), len(below))
    if len(above) != len(below) or any(texts[1][named:]) or not named:
        return
    for cell, other in zip(above[:named], below[:named], strict=True):
        cell.clear()
        cell.extend(list(other.contents))
    rows[1].decompose()


def _drop_row_numbers(table: Tag, head: Tag) -> None:
    """Leave out a first column of nothing but 0, 1, 2 ... without a name: pandas numbers rows so."""
    first_of_head = head.find(["th", "td"])
    if first_of_head is None or first_of_head.get_text(strip=True) or head.select_one("[colspan]"):
        return
    firsts = table.select("tbody tr > :first-child")
    texts = [cell.get_text(strip=True) if cell.name == "th" else "" for cell in firsts]
    if texts and texts == [str(at) for at in range(len(texts))]:
        for cell in (first_of_head, *firsts):
            cell.decompose()


def _align(table: Tag) -> None:
    """Mark cells by what their columns hold, headers too: numbers, short words or long ones."""
    rows = [row.find_all(["th", "td"]) for row in table.find_all("tr") if row.find_parent("thead") is None]
    headers = [row.find_all(["th", "td"]) for row in table.select("thead tr")]
    if table.select_one("tbody [rowspan], tbody [colspan]"):  # cells do not stand under their headers
        columns, headers = [[cell] for row in rows for cell in row], []
    else:
        columns = [[row[at] for row in rows if at < len(row)] for at in range(max(map(len, rows), default=0))]
    for at, column in enumerate(columns):
        kind = _kind_of([cell.get_text(strip=True) for cell in column])
        for cell in (*column, *(row[at] for row in headers if at < len(row))):
            cell["class"] = kind


def _kind_of(texts: list[str]) -> str:
    if any(map(_NUMBER.fullmatch, texts)) and all(
        text in _NOTHING or _NUMBER.fullmatch(text) for text in texts
    ):
        return "number"
    return "short" if max(map(len, texts)) <= SHORT else "long"
