"""The same view on paper: for a page that nobody can click, and for a saved notebook without its kernel."""

import base64
from html import escape
from io import BytesIO
from typing import Any

import numpy as np
from matplotlib.axes import Axes

from labkit.explorer import strokes
from labkit.explorer.board import REACH
from labkit.explorer.state import State
from labkit.explorer.words import alt_in_words, facts_in_html, key_in_words, measure_in_words, side_in_words
from labkit.figures.style import FILL, INK, Drawing, plain, styled
from labkit.text import printable

# Inches: side of a panel; dots an inch, and the width on the page.
SIDE, DOTS, PIXELS = 3.8, 144, 100


@styled
def sheet(state: State) -> Drawing:
    """Draw the state, one panel a rule."""
    panels = len(state.shown)
    figure = Drawing(figsize=(SIDE * panels + 0.9, SIDE + 0.5), layout="constrained")
    low, high = state.limits()
    every = figure.subplots(1, panels, squeeze=False)[0]
    for axes, name in zip(every, state.shown, strict=True):
        _panel(axes, state, name, low, high)
    bar = figure.colorbar(every[0].collections[-1], ax=list(every), fraction=0.05, shrink=0.85)
    bar.ax.yaxis.set_major_formatter(plain)
    bar.set_label(measure_in_words(state))
    return figure


def _panel(axes: Axes, state: State, name: str, low: float, high: float) -> None:
    part, places = state.part, state.part.places
    areas = (strokes.sizes(state, 72 * SIDE)) ** 2
    axes.set(xlim=(-REACH, REACH), ylim=(-REACH, REACH), aspect="equal")
    axes.set_axis_off()
    for width, chain in zip(strokes.WIDTHS, strokes.chains(state), strict=True):
        axes.plot(chain[:, 0], chain[:, 1], color=strokes.LINES, linewidth=0.75 * width, zorder=1)
    chain = strokes.focus(state)
    axes.plot(chain[:, 0], chain[:, 1], color=INK, linewidth=1.8, zorder=2)
    middles = strokes.hubs(state)
    axes.plot(middles[:, 0], middles[:, 1], "D", color=strokes.LINES, markersize=5, zorder=2)
    ring = strokes.ringed(state)
    rings = (np.sqrt(areas[ring]) + 5) ** 2
    _dots(axes, places[ring], s=rings, facecolors="none", edgecolors=strokes.MARK, linewidths=1.6, zorder=3)
    at = strokes.place_in_part(state)
    if at is not None:
        size = (np.sqrt(areas[at]) + 9) ** 2
        _dots(axes, places[[at]], s=size, facecolors="none", edgecolors=INK, linewidths=2.4, zorder=3)
    values = state.values(name)[part.servers]
    _dots(
        axes, places, s=areas, c=values, cmap=FILL, vmin=low, vmax=high, edgecolors=strokes.rims(state),
        linewidths=0.6, zorder=4,
    )  # fmt: skip
    words = printable(name)
    axes.set_title(
        f"{words if len(words) < 45 else words[:44] + '…'}\n{side_in_words(state, name)}", fontsize=9
    )


def _dots(axes: Axes, places: np.ndarray, **look: Any) -> None:
    axes.scatter(places[:, 0], places[:, 1], **look)


def page(state: State) -> str:
    """Return the view as HTML that needs nothing else: the picture, how to read it, and the facts."""
    figure = sheet(state)
    stream = BytesIO()
    figure.savefig(stream, format="png", dpi=DOTS, metadata={"Software": None})
    data = base64.b64encode(stream.getvalue()).decode("ascii")
    width = round(PIXELS * figure.get_figwidth())
    return (
        f'<img src="data:image/png;base64,{data}" width="{width}" style="max-width:100%" '
        f'alt="{escape(alt_in_words(state), quote=True)}">'
        f"<p>{escape(key_in_words(state))}.</p>{facts_in_html(state)}"
    )
