"""A report of a study: one page that stands on its own, the decision first, and a PDF of it if wanted."""

from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from labkit.errors import InputError
from labkit.records.project import ANSWERS, ROOT
from labkit.records.schema import row_of_origin
from labkit.records.store import Store, open_store
from labkit.reports.body import chapters_of
from labkit.reports.origin import origin_of
from labkit.reports.printing import find_browser, printed
from labkit.reports.rendering import ANCHORS, Content, render
from labkit.reports.repeating import notes_to_repeat, steps_to_repeat
from labkit.reports.sources import check_answered, sources_of
from labkit.reports.target import check_target, place_of, write_beside
from labkit.studies.model import find_study, read_study
from labkit.studies.recorded import recorded_tables


@dataclass(frozen=True)
class Report:
    """What was written.

    Attributes
    ----------
    page : Path
        The page.
    pdf : Path or None
        The PDF, where one was asked for.
    warning : str
        What its reader must see first: a limit of the study that does not hold; empty: nothing.
    """

    page: Path
    pdf: Path | None = None
    warning: str = ""


def write_report(
    study: str,
    *,
    store: str | Path | Store | None = None,
    to: str | Path | None = None,
    replace: bool = False,
    pdf: bool = False,
    output: str | Path | None = None,
    moment: datetime | None = None,
    root: Path = ROOT,
    say: Callable[[str], None] = lambda sentence: None,
) -> Report:
    """Write the report of a study whose runs are all recorded, as one HTML file that needs nothing else.

    The same records, code and answers give the same bytes, apart from the moment of making.

    Parameters
    ----------
    study : str
        A study of experiments/, or the path of a TOML file; its file names an answer notebook.
    store : str, Path or Store, optional
        Where the records are; default the project's own store.
    to : str or Path, optional
        A file that ends in .html, or a folder that is there; default results/reports/<study>.html.
    replace : bool
        Write over files that are there.
    pdf : bool
        Print the page to a PDF beside it, too, with a browser of this machine.
    output : str or Path, optional
        Folder of the answers; default results/answers. An answer that is not there yet is made.
    moment : datetime.datetime, optional
        When it is made; default now.
    root : Path
        The checkout that it is made with.
    say : callable
        Called with a sentence for the user before anything that takes time.

    Returns
    -------
    Report

    Raises
    ------
    InputError
        When there is no such study, it has no answer, a run is not recorded, its answer fails, the place is
        not free or no place for a page, or a PDF cannot be made. No report is written then.
    StoreError
        When a record is damaged or the place cannot be written.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.write_report("demo", to="report.txt")
    Traceback (most recent call last):
    ...
    labkit.errors.InputError: to is 'report.txt'; give a folder that is there, or a file that ends in .html.
    """
    study = str(study)
    _check_no_folder(study)
    asked = read_study(study)
    check_answered(asked)
    page = place_of(asked.name, to)
    paper = page.with_suffix(".pdf") if pdf else None
    for target in filter(None, (page, paper)):
        check_target(target, replace)
    browser = find_browser() if pdf else ""
    records = store if isinstance(store, Store) else open_store(store)
    origins = [row_of_origin(table) for table in recorded_tables(asked, study, records)]
    answers = Path(output).absolute() if output else ANSWERS
    decisions, sources = sources_of(asked, records, answers / asked.name, say)
    origin = origin_of(asked, find_study(study), origins, root)
    chapters = chapters_of(sources, ANCHORS)
    places = {"output": str(answers) if output else "", "to": str(page) if to else ""}
    steps, notes = steps_to_repeat(study, origin, records, **places), notes_to_repeat(origin)
    content = Content(asked, decisions, chapters, origin, steps, notes)
    text = render(content, moment or datetime.now(UTC)).encode("utf-8")
    if paper is not None:
        say(f"printing the page with {browser}")
        write_beside(paper, printed(browser, text))
    write_beside(page, text)
    warning = next((each.warning for each in decisions if each.warning), "")
    return Report(page, paper, warning)


def _check_no_folder(study: str) -> None:
    if not study.endswith(".toml") and (Path(study) / "servers.csv").is_file():
        raise InputError(
            f"study is {study!r}, the folder of a fleet; a report is made of a study: write one that names "
            "this fleet, as experiments/demo.toml does, and give its .toml file."
        )
