"""The chapters of a report: executed notebooks without their code, as HTML that stands on its own."""

import html
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from bs4 import BeautifulSoup
from bs4.element import Tag

from labkit.reports.cleaning import clean
from labkit.reports.pictures import caption_of, figure_html
from labkit.reports.tables import mend_table

HEADINGS = ("h1", "h2", "h3", "h4", "h5", "h6")
UNTITLED = "The analysis"
NOT_DESCRIBED = "its author did not say what it shows"

# papermill's own notes of a failure speak of numbered cells, which a report does not show
_PAPERMILL = "papermill-error-cell-tag"
# What needs a program in the page to be seen.
_LIVELY = ("application/vnd.jupyter.widget-view+json", "application/javascript")


@dataclass
class Heading:
    """An entry of the table of contents, with those below it."""

    text: str
    anchor: str
    below: list["Heading"] = field(default_factory=list)


@dataclass(frozen=True)
class Chapter:
    """A chapter: its heading with those inside it, and its content as HTML, the heading left out."""

    heading: Heading
    content: str


@dataclass(frozen=True)
class Source:
    """An executed notebook, and what its chapter is called; empty: by the notebook's own title."""

    notebook: Path
    title: str = ""


def chapters_of(sources: Sequence[Source], taken: Sequence[str] = ()) -> list[Chapter]:
    """Return executed notebooks as chapters, with figures and tables numbered through.

    Parameters
    ----------
    sources : sequence of Source
    taken : sequence of str
        Anchors that the report uses elsewhere.
    """
    anchors, counts = set(taken), {"figure": 0, "table": 0}
    return [_chapter(source, anchors, counts) for source in sources]


def _chapter(source: Source, anchors: set[str], counts: dict[str, int]) -> Chapter:
    page = _exported(source.notebook)
    for element in page.find_all("div"):
        if not element.find_parent("table"):
            element.unwrap()
    title = source.title
    first = page.find(HEADINGS)
    if first is not None and first.name == "h1":
        title = title or first.get_text(" ", strip=True)
        first.decompose()
    top = Heading(title or UNTITLED, _anchor(title or UNTITLED, anchors))
    _order_headings(page, top, anchors)
    _number(page, top.text, counts)
    for block in page.find_all("pre"):
        block["tabindex"] = "0"  # it may be wider than the page, and be scrolled
    return Chapter(top, page.decode(formatter="minimal").strip())


def _exported(path: Path) -> BeautifulSoup:
    """Return what a notebook shows; each piece is cleaned alone, so that none can swallow those after it."""
    import nbformat
    from nbconvert.exporters import HTMLExporter

    exporter = HTMLExporter(
        template_name="basic",
        exclude_input=True,
        exclude_input_prompt=True,
        exclude_output_prompt=True,
        exclude_anchor_links=True,
        exclude_raw=True,
    )
    notebook = nbformat.read(path, as_version=4)
    page = BeautifulSoup("", "html.parser")
    for cell in notebook.cells:
        if _PAPERMILL in cell.metadata.get("tags", []):
            continue
        outputs = [[output] for output in _shown(cell.outputs)] if cell.cell_type == "code" else [[]]
        for output in outputs:
            piece = {**cell, "outputs": output} if output else cell
            made, _ = exporter.from_notebook_node(nbformat.from_dict({**notebook, "cells": [piece]}))
            part = BeautifulSoup(made, "html.parser")
            clean(part)
            page.extend(list(part.contents))
    return page


def _shown(outputs: Sequence[Any]) -> Iterator[Any]:
    """Yield the outputs that a report shows, pictures as figures and errors as sentences."""
    from nbformat.v4 import new_output

    for output in outputs:
        if output.output_type == "stream" and output.name == "stderr":
            continue  # bars and warnings, which tell of the execution and not of the fleet
        picture = figure_html(output)
        if output.output_type == "error":
            text = html.escape(f"{output.ename}: {output.evalue}")
            yield new_output("display_data", {"text/html": f"<p><strong>Stopped:</strong> {text}</p>"})
        elif picture is not None:
            yield new_output("display_data", {"text/html": picture})
        elif not any(kind in output.get("data", {}) for kind in _LIVELY):
            yield output


def _order_headings(page: BeautifulSoup, top: Heading, anchors: set[str]) -> None:
    """Put the headings of a chapter below its own, none deeper than one level below the one before."""
    level, parents = 2, [top]
    for element in page.find_all(HEADINGS):
        text = element.get_text(" ", strip=True)
        if not text:
            element.decompose()
            continue
        level = min(max(int(element.name[1]) + 1, 3), level + 1, 6)
        element.name = f"h{level}"
        entry = Heading(text, _anchor(text, anchors))
        element["id"] = entry.anchor
        del parents[level - 2 :]
        parents[-1].below.append(entry)
        parents.append(entry)


def _number(page: BeautifulSoup, title: str, counts: dict[str, int]) -> None:
    """Give figures and tables numbers and captions; a table is called by the heading that it stands under."""
    called: dict[str, int] = {}
    for element in page.find_all(["img", "table"]):
        if element.name == "img":
            counts["figure"] += 1
            element["alt"] = str(element.get("alt", "")) or f"Figure {counts['figure']}: {NOT_DESCRIBED}"
            frame = element.find_parent("figure") or element.wrap(page.new_tag("figure"))
            caption = page.new_tag("figcaption")
            caption.string = f"Figure {counts['figure']}. {caption_of(str(element['alt']))}"
            frame.append(caption)
        elif element.find_parent("table") is None:
            counts["table"] += 1
            above = element.find_previous(HEADINGS)
            name = above.get_text(" ", strip=True) if isinstance(above, Tag) else title
            called[name] = called.get(name, 0) + 1
            more = f" ({called[name]})" if called[name] > 1 else ""
            mend_table(page, element, f"Table {counts['table']}. {name}{more}")


def _anchor(text: str, taken: set[str]) -> str:
    """Return an id for a heading that no other has."""
    word = re.sub(r"[^a-z0-9]+", "-", text.lower()).strip("-")[:60] or "part"
    found, number = word, 1
    while found in taken:
        number += 1
        found = f"{word}-{number}"
    taken.add(found)
    return found
