"""Figures in a notebook, and the files of an answer."""

import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from IPython.display import Image
from matplotlib.figure import Figure

from labkit.analysis.survey_words import rerouted_table
from labkit.errors import InputError
from labkit.figures.saving import save_figure
from labkit.figures.style import ON_PAGE, Drawing, alt_text
from labkit.survey.facts import Survey
from labkit.text import harmless

# Kinds of files that an answer's figures are written as.
KINDS = (".png", ".svg")


def picture(figure: Drawing, alt: str = "") -> Image:
    """Return a figure as an image for a notebook's page.

    Parameters
    ----------
    figure : Drawing
        Any figure of the kit.
    alt : str
        What it shows, for readers who cannot see it; empty: the figure's own sentence.
    """
    return Image(figure.png(), width=round(ON_PAGE * figure.get_figwidth()), alt=alt or alt_text(figure))


def write_answer_files(
    folder: Path, table: pd.DataFrame, text: str, figures: Mapping[str, Figure]
) -> list[Path]:
    """Write answer.csv, answer.txt and each figure as PNG and SVG.

    Parameters
    ----------
    folder : pathlib.Path
        Made when it is not there.
    table : pandas.DataFrame
        The answer table.
    text : str
        What the command line prints.
    figures : dict of str to Figure
        File name without extension → figure.

    Raises
    ------
    InputError
        When the folder cannot be written.
    """
    return _write(folder, {"answer": table}, {"answer.txt": text}, figures)


def write_survey_files(
    folder: Path,
    best: Survey,
    lost: pd.DataFrame | None,
    links: pd.DataFrame | None,
    text: str,
    figures: Mapping[str, Figure],
) -> list[Path]:
    """Write a survey: its tables as CSV, all of it as survey.json, the text as answer.txt, and the figures.

    Parameters
    ----------
    folder : pathlib.Path
        Made when it is not there.
    best : Survey
    lost, links : pandas.DataFrame or None
        Tables of `labkit.outages` and `labkit.advise_links`; None writes no such table.
    text : str
        What the command line prints.
    figures : dict of str to Figure
        File name without extension → figure.

    Raises
    ------
    InputError
        When the folder cannot be written.
    """
    facts = best.table()
    tables = {"facts": facts, "profile": best.profile, "split": best.split}
    tables |= {name: table for name, table in (("outages", lost), ("links", links)) if table is not None}
    if links is not None and len(links):
        tables["rerouted"] = rerouted_table(best.fleet, links)
        tables["links"] = links.drop(columns="taken_from")
    tables = {name: _joined(table) for name, table in tables.items()}
    data = {
        "facts": dict(zip(facts["fact"], facts["value"], strict=True)),
        "profile": best.profile.to_dict("records"),
        "outages": None if lost is None else lost.to_dict("records"),
        "links": None if links is None else links.to_dict("records"),
    }
    return _write(folder, tables, {"answer.txt": text, "survey.json": json.dumps(_plain(data))}, figures)


def _joined(table: pd.DataFrame) -> pd.DataFrame:
    """Return a table for a CSV file: names of a set are parted by semicolons."""
    return table.map(lambda value: "; ".join(map(str, value)) if isinstance(value, tuple) else value)


def _harmless(table: pd.DataFrame) -> pd.DataFrame:
    """Return a table whose texts no spreadsheet takes for formulas; numbers stay as they are."""
    texts = [name for name in table.columns if not pd.api.types.is_numeric_dtype(table[name].dtype)]
    changed = table.assign(**{str(name): table[name].map(_cell) for name in texts})
    return changed.rename(columns=_cell)


def _cell(value: Any) -> Any:
    """Return a harmless cell; a bare carriage return, which would not be quoted, becomes a line feed."""
    value = harmless(value)
    return value.replace("\r\n", "\n").replace("\r", "\n") if isinstance(value, str) else value


def _plain(value: Any) -> Any:
    """Return a value as JSON knows it: a number that is not finite is null."""
    if isinstance(value, Mapping):
        return {str(key): _plain(each) for key, each in value.items()}
    if isinstance(value, tuple | list):
        return [_plain(each) for each in value]
    if isinstance(value, np.generic):
        value = value.item()
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _write(
    folder: Path, tables: Mapping[str, pd.DataFrame], texts: Mapping[str, str], figures: Mapping[str, Figure]
) -> list[Path]:
    try:
        folder.mkdir(parents=True, exist_ok=True)
        written = [folder / f"{name}.csv" for name in tables]
        for path, table in zip(written, tables.values(), strict=True):
            _harmless(table).to_csv(path, index=False, lineterminator="\n")
        for name, text in texts.items():
            (folder / name).write_text(text + "\n", encoding="utf-8", newline="\n")
            written.append(folder / name)
        for name, figure in figures.items():
            written += [save_figure(figure, folder / f"{name}{kind}") for kind in KINDS]
    except OSError as error:
        raise InputError(
            f"output {folder} cannot be written ({error.strerror}); name another folder."
        ) from None
    return written
