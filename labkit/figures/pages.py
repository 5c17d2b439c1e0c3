"""Figures in a notebook, and the files of an answer."""

from collections.abc import Mapping
from io import BytesIO
from pathlib import Path

import pandas as pd
from IPython.display import Image
from matplotlib.figure import Figure

from labkit.errors import InputError
from labkit.figures.style import save_figure

DOTS_PER_INCH = 144


def picture(figure: Figure, alt: str) -> Image:
    """Return a figure as an image for a notebook's page.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    alt : str
        What it shows, for readers who cannot see it.
    """
    stream = BytesIO()
    figure.savefig(stream, format="png", dpi=DOTS_PER_INCH, metadata={"Software": None})
    return Image(stream.getvalue(), width=round(100 * figure.get_figwidth()), alt=alt)


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
    try:
        folder.mkdir(parents=True, exist_ok=True)
        table.to_csv(folder / "answer.csv", index=False, lineterminator="\n")
        (folder / "answer.txt").write_text(text + "\n", encoding="utf-8", newline="\n")
        drawn = [path for name, figure in figures.items() for path in save_figure(figure, folder, name)]
    except OSError as error:
        raise InputError(
            f"output {folder} cannot be written ({error.strerror}); name another folder."
        ) from None
    return [folder / "answer.csv", folder / "answer.txt", *drawn]
