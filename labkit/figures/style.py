"""The look that all figures share: colours, type, sizes, and the sentence for those who cannot see them.

Figures bring their own paper, white and opaque; on a dark page they are light sheets. Transparent figures
would need lines that read on white and on dark alike, all of one middling lightness: they could not be told
apart in grey, and no word can have a contrast of 4.5 to both grounds.

Rules are told apart by colour, marker, dashes and a label at the line (`labkit.figures.looks`), so that
neither colour vision nor a printer's ink decides what can be read.
"""

import base64
from collections.abc import Callable
from functools import wraps
from io import BytesIO
from typing import Any, ParamSpec

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.colors import LinearSegmentedColormap, to_hex, to_rgb
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, NullLocator

P = ParamSpec("P")

# Blue, vermillion, bluish green, reddish purple and black are of Okabe and Ito, "Color Universal Design: how
# to make figures and presentations that are friendly to colorblind people" (2002, revised 2008); indigo, wine
# and purple of Paul Tol, "Colour schemes", SRON technical note SRON/EPS/TN/09-002, issue 3.2 (2021). Of both
# only what has a contrast of 3 to white, chosen so that no two look alike to any kind of colour vision.
BLUE, VERMILLION, GREEN, ROSE = "#0072B2", "#D55E00", "#009E73", "#CC79A7"
INDIGO, WINE, PURPLE, BLACK = "#332288", "#882255", "#AA3377", "#000000"
COLOURS = (BLUE, VERMILLION, GREEN, ROSE, INDIGO, WINE, PURPLE, BLACK)
# What is no rule: words and axes, second lines, grids and bars behind, the paper.
INK, FAINT, PALE, PAPER = "#222222", "#767676", "#DDDDDD", "#FFFFFF"

# Pale to dark in grey as well: from sky blue over blue to the dark shade of purple.
FILL = LinearSegmentedColormap.from_list("fill", ["#E8F3FA", "#56B4E9", "#0072B2", "#3B1F4A"])

# Type in points, three steps: titles, what axes measure, all other words.
TITLE, LABEL, WORDS = 11, 10, 9
# Inches. A page shows 100 dots an inch and JupyterLab has 848 beside its file list on a screen 1280 wide, so
# that nothing is scaled down; over the width of A4 paper the smallest words are then 6.8 points.
WIDTH = 8.4
LOW, TALL = 3.4, 4.4
COLUMNS = 2
ON_PAGE = 100
DOTS_PER_INCH = 144

SETTINGS: dict[str, Any] = {
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "axes.facecolor": PAPER,
    "axes.edgecolor": FAINT,
    "axes.labelcolor": INK,
    "axes.titlecolor": INK,
    "axes.titlelocation": "left",
    "axes.titlesize": TITLE,
    "axes.titleweight": "bold",
    "axes.labelsize": LABEL,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.axisbelow": True,
    "axes.unicode_minus": True,
    "grid.color": PALE,
    "grid.linewidth": 0.6,
    "xtick.color": FAINT,
    "ytick.color": FAINT,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": WORDS,
    "ytick.labelsize": WORDS,
    "text.color": INK,
    "text.parse_math": False,  # names of servers are drawn as they are, dollar signs too
    "font.family": "DejaVu Sans",
    "font.size": WORDS,
    "lines.linewidth": 1.6,
    "lines.markersize": 5,
    "figure.constrained_layout.w_pad": 0.09,
    "figure.constrained_layout.h_pad": 0.09,
    "legend.frameon": False,
    "legend.edgecolor": PALE,
    "legend.fontsize": WORDS,
}


class Drawing(Figure):
    """A matplotlib Figure that shows itself in a notebook, with the sentence that says what it shows."""

    alt = ""

    def __repr__(self) -> str:
        return f"<figure: {alt_text(self)}>"

    def png(self) -> bytes:
        """Return the figure as PNG at twice the dots of a plain screen."""
        stream = BytesIO()
        self.savefig(stream, format="png", dpi=DOTS_PER_INCH, metadata={"Software": None})
        return stream.getvalue()

    def _repr_mimebundle_(self, **_: Any) -> tuple[dict[str, str], dict[str, Any]]:
        about = {"width": round(ON_PAGE * self.get_figwidth()), "alt": alt_text(self)}
        bundle = {"image/png": base64.b64encode(self.png()).decode(), "text/plain": repr(self)}
        return bundle, {"image/png": about}


def styled(draw: Callable[P, Drawing]) -> Callable[P, Drawing]:
    """Run a drawing function under the shared settings, leaving the user's own as they were."""

    @wraps(draw)
    def run(*args: P.args, **kwargs: P.kwargs) -> Drawing:
        with mpl.rc_context():
            mpl.rcdefaults()
            mpl.rcParams.update(SETTINGS)  # type: ignore[arg-type]
            return draw(*args, **kwargs)

    run.is_figure = True  # type: ignore[attr-defined]
    return run


def sheet(height: float = TALL) -> Drawing:
    """Return an empty figure as wide as a page's text.

    Parameters
    ----------
    height : float
        In inches: `LOW`, `TALL`, or as many rows as there are.
    """
    return Drawing(figsize=(WIDTH, height), layout="constrained")


def side_by_side(count: int, *, sharey: bool) -> tuple[Drawing, np.ndarray]:
    """Return a figure as wide as a page's text with so many panels, two a row, and the panels in order."""
    columns = min(COLUMNS, count)
    rows = -(-count // columns)
    figure = sheet((TALL - 0.2) * rows + 0.2)
    panels = figure.subplots(rows, columns, sharey=sharey, squeeze=False).ravel()
    for axes in panels[count:]:
        axes.set_visible(False)
    return figure, panels[:count]


def describe(figure: Drawing, sentence: str) -> Drawing:
    """Say what a figure shows, for readers who cannot see it; return the figure."""
    words = " ".join(sentence.split())
    figure.alt = words[:1].upper() + words[1:]
    return figure


def alt_text(figure: Figure) -> str:
    """Return one sentence that says what a figure shows, for readers who cannot see it.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        Figures of the kit carry a sentence made from their data; of any other figure the titles and
        the words at its axes are returned.

    Examples
    --------
    >>> import labkit as lk
    >>> from labkit.figures.fair_levels import fair_levels
    >>> from labkit.figures.style import alt_text
    >>> alt_text(fair_levels(lk.survey(lk.ring(8)).profile))
    'Fair utilisation of 8 servers against the share of the capacity: all servers at 1.000.'
    """
    if getattr(figure, "alt", ""):
        return str(figure.alt)  # type: ignore[attr-defined]
    parts = [_axes_words(axes) for axes in figure.axes]
    return "Figure: " + ("; ".join(part for part in parts if part) or "without words") + "."


def _axes_words(axes: Axes) -> str:
    title = axes.get_title(loc="left") or axes.get_title()
    against = " against ".join(filter(None, [axes.get_ylabel(), axes.get_xlabel()]))
    return ", ".join(filter(None, [title, against]))


def contrast(colour: Any, ground: Any = PAPER) -> float:
    """Return the contrast of two colours, 1 to 21, as WCAG 2.2 defines it."""
    one, other = sorted([_luminance(colour), _luminance(ground)])
    return (other + 0.05) / (one + 0.05)


def _luminance(colour: Any) -> float:
    parts = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in to_rgb(colour)]
    return 0.2126 * parts[0] + 0.7152 * parts[1] + 0.0722 * parts[2]


def for_words(colour: Any) -> str:
    """Return a colour's own shade that is dark enough for words on paper (a contrast of 4.5)."""
    parts = to_rgb(colour)
    while contrast(parts) < 4.55:
        parts = tuple(0.97 * part for part in parts)  # type: ignore[assignment]
    return str(to_hex(parts))


def plain(value: float, _: float) -> str:
    """Return the words at a tick; a power of ten at the end of an axis would get in the way of others."""
    return f"{value:g}".replace("-", "−", 1) if value < 0 else f"{value:g}"


def grouped(value: float, _: float) -> str:
    """Return the words at a tick of a long axis, with thousands separated."""
    return f"{value:,.0f}" if abs(value) >= 1000 else f"{value:g}"


def percents(value: float, _: float) -> str:
    """Return the words at a tick of an axis of shares."""
    return f"{100 * value:g} %"


def amount(value: float, unit: str) -> str:
    """Return a length of time in words: one hour is "1 hour", not "1 hours"."""
    one = value == 1 and len(unit) > 2 and unit.endswith("s")
    return f"{value:.4g} {unit[:-1] if one else unit}"


def log_ticks(axis: Axis, low: float, high: float, most: int) -> None:
    """Put ticks at round numbers on a logarithmic axis, as many as have room, and no others.

    Parameters
    ----------
    axis : matplotlib.axis.Axis
    low, high : float
        The span, both above 0.
    most : int
        Ticks that have room.
    """
    decades = np.arange(np.floor(np.log10(low)), np.ceil(np.log10(high)) + 1)
    for steps in ((1, 1.5, 2, 3, 5, 7), (1, 2, 5), (1, 3), (1,)):
        found = [step * 10.0**decade for decade in decades for step in steps]
        inside = [place for place in found if low <= place <= high]
        if len(inside) <= most:
            break
    else:
        inside = inside[:: -(-len(inside) // most)]
    axis.set_major_locator(FixedLocator(inside or [low, high]))
    axis.set_minor_locator(NullLocator())


def counted(value: float, _: float) -> str:
    """Return the words at a tick of an axis of whole numbers, with thousands separated."""
    return f"{value:,.0f}"
