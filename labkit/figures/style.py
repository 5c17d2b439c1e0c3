"""The look that all figures share, and how they are kept.

Colours are those of Okabe and Ito, "Color Universal Design: how to make figures and presentations that are
friendly to colorblind people" (2002, revised 2008), without the yellow, which is too pale for lines. Rules
are told apart by marker, dashes and a label at the line as well, so that a print in grey stays readable. The
background is white and opaque: dark text would vanish on a dark page.
"""

from collections.abc import Callable, Iterable
from functools import wraps
from pathlib import Path
from typing import Any, ParamSpec

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure

from labkit.policies.naming import shown_name

P = ParamSpec("P")

COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#56B4E9", "#E69F00", "#000000")
MARKERS = ("o", "s", "^", "D", "v", "P", "X")
DASHES: tuple = (
    "-",
    (0, (5, 1.5)),
    (0, (1.5, 1)),
    (0, (6, 1.5, 1.5, 1.5)),
    (0, (3, 1)),
    (0, (8, 2)),
    (0, (1, 2)),
)
INK, FAINT, PAPER = "#222222", "#8A8A8A", "#FFFFFF"

# Pale to dark in grey as well: from the palette's sky blue over its blue to vermillion's dark shade.
FILL = LinearSegmentedColormap.from_list("fill", ["#E8F3FA", "#56B4E9", "#0072B2", "#3B1F4A"])

SETTINGS: dict[str, Any] = {
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "axes.facecolor": PAPER,
    "axes.edgecolor": FAINT,
    "axes.labelcolor": INK,
    "axes.titlecolor": INK,
    "axes.titlelocation": "left",
    "axes.titlesize": 11,
    "axes.titleweight": "bold",
    "axes.labelsize": 10,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.axisbelow": True,
    "axes.unicode_minus": True,
    "grid.color": "#DDDDDD",
    "grid.linewidth": 0.6,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 9,
    "ytick.labelsize": 9,
    "text.color": INK,
    "text.parse_math": False,  # names of servers are drawn as they are, dollar signs too
    "font.family": "DejaVu Sans",
    "font.size": 9,
    "lines.linewidth": 1.8,
    "lines.markersize": 6,
    "legend.frameon": False,
    "svg.hashsalt": "labkit",
    "svg.fonttype": "path",
}


def styled(draw: Callable[P, Figure]) -> Callable[P, Figure]:
    """Run a drawing function under the shared settings, leaving the user's own as they were."""

    @wraps(draw)
    def run(*args: P.args, **kwargs: P.kwargs) -> Figure:
        with mpl.rc_context():
            mpl.rcdefaults()
            mpl.rcParams.update(SETTINGS)  # type: ignore[arg-type]
            return draw(*args, **kwargs)

    return run


def plain(value: float, _: float) -> str:
    """Return the words at a tick; a power of ten at the end of an axis would get in the way of others."""
    return f"{value:g}"


def grouped(value: float, _: float) -> str:
    """Return the words at a tick of a long axis, with thousands separated."""
    return f"{value:,.0f}" if abs(value) >= 1000 else f"{value:g}"


def looks(names: Iterable[str]) -> dict[str, dict]:
    """Return colour, marker and dashes for each name; the same names get the same looks in every figure."""
    return {
        name: {
            "color": COLOURS[at % len(COLOURS)],
            "marker": MARKERS[at % len(MARKERS)],
            "linestyle": DASHES[at % len(DASHES)],
        }
        for at, name in enumerate(sorted(set(names)))
    }


def spread(heights: Iterable[float], least: float) -> np.ndarray:
    """Move label positions apart so that neighbours keep a distance of at least `least`.

    Parameters
    ----------
    heights : iterable of float
        Wished positions.
    least : float
        Least distance, in the same units.

    Returns
    -------
    numpy.ndarray
        Positions in the same order: groups that were too close are laid out evenly about their own middle.
    """
    wished = np.array(list(heights), dtype=np.float64)
    order = np.argsort(wished, kind="stable")
    groups: list[list[int]] = []
    for at in order:
        groups.append([int(at)])
        while len(groups) > 1 and _overlap(wished[groups[-2]], wished[groups[-1]], least):
            last = groups.pop()
            groups[-1] += last
    placed = np.empty_like(wished)
    for group in groups:
        placed[group] = _even(wished[group], least)
    return placed


def _even(wished: np.ndarray, least: float) -> np.ndarray:
    return wished.mean() + least * (np.arange(len(wished)) - (len(wished) - 1) / 2)


def _overlap(below: np.ndarray, above: np.ndarray, least: float) -> bool:
    return bool(_even(above, least)[0] - _even(below, least)[-1] < least)


def label_ends(axes: Axes, x: float, ends: dict[str, float], looks_of: dict[str, dict]) -> None:
    """Write each name beside the end of its line, in its colour, without overlaps."""
    scale = axes.transData
    heights = [scale.transform((x, y))[1] for y in ends.values()]
    pixels = spread(heights, 12 * axes.figure.dpi / 72)
    for (name, y), height, pixel in zip(ends.items(), heights, pixels, strict=True):
        axes.annotate(
            shown_name(name),
            (x, y),
            xytext=(10, (pixel - height) * 72 / axes.figure.dpi),
            textcoords="offset points",
            va="center",
            color=looks_of[name]["color"],
            annotation_clip=False,
        )


def save_figure(figure: Figure, folder: str | Path, name: str) -> list[Path]:
    """Write a figure as PNG (144 dots per inch) and SVG; equal figures give equal files.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    folder : path
        Where the two files go; it must exist.
    name : str
        File name without extension.

    Returns
    -------
    list of pathlib.Path
        The PNG and the SVG file.
    """
    paths = [Path(folder) / f"{name}.png", Path(folder) / f"{name}.svg"]
    with mpl.rc_context({"svg.hashsalt": "labkit", "svg.fonttype": "path"}):
        figure.savefig(paths[0], dpi=144, metadata={"Software": None})
        figure.savefig(paths[1], metadata={"Date": None})
    return paths
