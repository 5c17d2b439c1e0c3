"""The page of a report from its parts; every text is escaped, only chapters are HTML already."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup

from labkit.reports.body import Chapter
from labkit.reports.decision import CAUTION, Decision
from labkit.reports.origin import RUN_HEADERS, Origin
from labkit.studies.model import Study
from labkit.studies.page import check_nothing_fetched

FOLDER = Path(__file__).parent
TEMPLATE, LOOK = "page.html", "look.css"

# Ids of the parts that every report has.
ANCHORS = ("decision", "contents", "origin", "repeat", "main")


@dataclass(frozen=True)
class Content:
    """What a report holds.

    Attributes
    ----------
    study : Study
    decisions : sequence of Decision
        The first pages.
    chapters : sequence of Chapter
    origin : Origin
    steps : sequence of (str, str)
        Commands, and what each does.
    notes : sequence of str
        What stands in the way of repeating.
    """

    study: Study
    decisions: Sequence[Decision]
    chapters: Sequence[Chapter]
    origin: Origin
    steps: Sequence[tuple[str, str]]
    notes: Sequence[str]


def render(content: Content, moment: datetime) -> str:
    """Return the page.

    Parameters
    ----------
    content : Content
    moment : datetime.datetime
        When it is made; stands in one place, and nothing else depends on it.
    """
    environment = Environment(
        loader=FileSystemLoader(FOLDER),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["paragraphs"] = paragraphs
    chapters = [(chapter.heading, Markup(chapter.content)) for chapter in content.chapters]
    made = environment.get_template(TEMPLATE).render(
        content=content,
        chapters=chapters,
        caution=CAUTION,
        run_headers=RUN_HEADERS,
        look=Markup((FOLDER / LOOK).read_text(encoding="utf-8")),
        moment=moment.astimezone(UTC),
    )
    check_nothing_fetched(made)
    return made


def paragraphs(text: str) -> list[str]:
    """Return the paragraphs of a text, which blank lines part."""
    return [" ".join(part.split()) for part in text.split("\n\n") if part.strip()]
