"""Figures as files: the same figure always gives the same bytes."""

from io import BytesIO
from pathlib import Path
from typing import Any

import matplotlib as mpl
from matplotlib.figure import Figure

from labkit.errors import InputError
from labkit.figures.style import DOTS_PER_INCH, alt_text

# Words stay words: they can be found, copied, and set in another face by whoever makes the page.
_VECTOR = {"svg.hashsalt": "labkit", "svg.fonttype": "none", "pdf.fonttype": 42, "pdf.use14corefonts": False}


def save_figure(figure: Figure, path: str | Path) -> Path:
    """Write a figure to a file; equal figures give equal bytes.

    SVG and PDF are vectors with words as words; PNG has 144 dots an inch. No file holds a date or the name of
    a program; each holds `labkit.figures.style.alt_text`. A file that is there is replaced.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        Any figure, of the kit or not.
    path : str or pathlib.Path
        Ends in .svg, .pdf or .png; its folder must exist.

    Returns
    -------
    pathlib.Path

    Raises
    ------
    InputError
        When `figure` is no figure, the name ends otherwise, or the file cannot be written.

    Examples
    --------
    >>> import tempfile
    >>> import labkit as lk
    >>> from labkit.figures.fair_levels import fair_levels
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     written = lk.save_figure(fair_levels(lk.survey(lk.ring(8)).profile), f"{folder}/levels.svg")
    ...     written.name, "share of the total capacity" in written.read_text()
    ('levels.svg', True)
    """
    if not isinstance(figure, Figure):
        raise InputError(f"figure is {type(figure).__name__}; give a matplotlib Figure.")
    path = Path(path)
    kind = path.suffix.lower()
    if kind not in _ABOUT:
        raise InputError(f"path is {str(path)!r}; end its name in {' or '.join(_ABOUT)}.")
    alt = alt_text(figure)
    about: dict[str, Any] = {name: alt if value == _ALT else value for name, value in _ABOUT[kind].items()}
    stream = BytesIO()
    with mpl.rc_context(_VECTOR):  # type: ignore[arg-type]
        figure.savefig(stream, format=kind[1:], dpi=DOTS_PER_INCH if kind == ".png" else 72, metadata=about)
    content = stream.getvalue()
    if kind == ".svg":
        content = content.replace(_FACE, _FACES)
    try:
        path.write_bytes(content)
    except OSError as error:
        raise InputError(
            f"path {path} cannot be written ({error.strerror}); name a file in a folder that exists."
        ) from None
    return path


# Where the face of the words is missing, one of like widths, so that labels stay apart.
_FACE, _FACES = b"font-family: 'DejaVu Sans'", b"font-family: 'DejaVu Sans', Verdana, sans-serif"
_ALT = object()
# What each kind of file says about itself, None for what it would say unasked.
_ABOUT: dict[str, dict[str, Any]] = {
    ".svg": {"Date": None, "Creator": None, "Title": _ALT, "Description": _ALT},
    ".pdf": {"CreationDate": None, "Creator": None, "Producer": None, "Subject": _ALT},
    ".png": {"Software": None, "Description": _ALT},
}
