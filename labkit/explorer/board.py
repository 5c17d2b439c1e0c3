"""The drawing that answers clicks: one panel a rule, the same places and colours in both."""

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import plotly.graph_objects as go

from labkit.analysis.wording import quantity, writer
from labkit.explorer import strokes
from labkit.explorer.state import State
from labkit.explorer.words import measure_in_words, safe, side_in_words
from labkit.figures.style import FAINT, INK, PAPER

# Pixels: width beside the file list of a screen 1280 wide, room for the colour bar, side of a panel's square,
# and what is above it.
WIDTH, BAR, SIDE, ABOVE = 846, 90, 346, 46
REACH = 1.12
FONT = "DejaVu Sans, Verdana, sans-serif"
# What each panel holds, from the back to the front.
LAYERS = ("lines 0", "lines 1", "lines 2", "lines 3", "hubs", "choices", "rings", "servers", "selected")


class Board:
    """A plotly figure kept in step with a state.

    Parameters
    ----------
    state : State
    clicked : callable
        Called with the position of a server that was clicked.
    """

    def __init__(self, state: State, clicked: Callable[[int], None]) -> None:
        self.state, self._clicked = state, clicked
        self.figure = go.FigureWidget(
            data=[self._trace(layer, panel) for panel in range(len(state.shown)) for layer in LAYERS],
            layout=self._layout(),
        )
        # The wheel stays with the page, which would else stop moving under the pointer.
        buttons = [["zoom2d", "pan2d", "resetScale2d", "toImage"]]
        config = {"displaylogo": False, "scrollZoom": False, "doubleClick": "reset"}
        self.figure._config = config | {"modeBarButtons": buttons}
        for panel in range(len(state.shown)):
            self._of(panel, "servers").on_click(self._answer)
        self.redraw()

    def _of(self, panel: int, layer: str) -> Any:
        return self.figure.data[panel * len(LAYERS) + LAYERS.index(layer)]

    def _answer(self, _: Any, points: Any, __: Any) -> None:
        if points.point_inds:
            self._clicked(int(self.state.part.servers[points.point_inds[0]]))

    def _trace(self, layer: str, panel: int) -> go.Scatter:
        axes = {"xaxis": f"x{panel + 1}", "yaxis": f"y{panel + 1}", "showlegend": False}
        if layer.startswith("lines"):
            width = strokes.WIDTHS[int(layer[-1])]
            return go.Scatter(
                mode="lines", line={"color": strokes.LINES, "width": width}, hoverinfo="skip", **axes
            )
        if layer == "choices":
            return go.Scatter(mode="lines", line={"color": INK, "width": 2.2}, hoverinfo="skip", **axes)
        if layer == "hubs":
            look = {"symbol": "diamond", "size": 7, "color": strokes.LINES, "line": {"width": 0}}
            return go.Scatter(mode="markers", marker=look, hoverinfo="text", **axes)
        if layer == "servers":
            look = {"coloraxis": "coloraxis", "opacity": 1}
            return go.Scatter(mode="markers", marker=look, hoverinfo="text", **axes)
        ring: dict[str, Any] = {
            "symbol": "circle-open",
            "opacity": 1,
            "color": strokes.MARK if layer == "rings" else INK,
        }
        ring["line"] = {"width": 2 if layer == "rings" else 3, "color": ring["color"]}
        return go.Scatter(mode="markers", marker=ring, hoverinfo="skip", **axes)

    def _layout(self) -> dict[str, Any]:
        panels = len(self.state.shown)
        axis = {"visible": False, "range": [-REACH, REACH], "fixedrange": False}
        layout: dict[str, Any] = {
            "width": WIDTH if panels > 1 else SIDE + 2 * BAR,
            "height": SIDE + ABOVE + 8,
            "margin": {"l": 6, "r": 6, "t": ABOVE, "b": 8},
            "paper_bgcolor": PAPER,
            "plot_bgcolor": PAPER,
            "font": {"family": FONT, "size": 12, "color": INK},
            "hoverlabel": {"bgcolor": PAPER, "bordercolor": FAINT, "font": {"color": INK, "family": FONT}},
            "dragmode": "pan",
            "hovermode": "closest",
            "modebar": {
                "color": FAINT,
                "activecolor": INK,
                "bgcolor": "rgba(255,255,255,0)",
            },
            "coloraxis": {
                "colorscale": strokes.STEPS,
                "colorbar": {
                    "thickness": 14,
                    "len": 0.9,
                    "outlinewidth": 0,
                    "x": 1.0,
                    "xpad": 8,
                    "title": {"side": "right"},
                },
            },
        }
        for panel in range(panels):
            x, y = (axis | {"domain": _domain(panel, panels)}), dict(axis)
            if panel:
                x["matches"], y["matches"] = "x", "y"
            x["anchor"], y["anchor"] = f"y{panel + 1}", f"x{panel + 1}"
            y |= {"scaleanchor": "x", "scaleratio": 1} if not panel else {}
            layout |= {f"xaxis{panel + 1}": x, f"yaxis{panel + 1}": y}
        return layout

    def redraw(self) -> None:
        """Draw the state afresh: another part of the fleet, or other rules."""
        state = self.state
        places, sizes = state.part.places, strokes.sizes(state, SIDE)
        lines, hubs, ring = strokes.chains(state), strokes.hubs(state), strokes.ringed(state)
        rims = strokes.rims(state)
        words = self._choices_in_words()
        for panel in range(len(state.shown)):
            for step, chain in enumerate(lines):
                _put(self._of(panel, f"lines {step}"), chain)
            _put(self._of(panel, "hubs"), hubs, hovertext=words)
            _put(self._of(panel, "rings"), places[ring], marker={"size": sizes[ring] + 6})
            marker = {"size": sizes, "line": {"color": rims, "width": 0.8}}
            _put(self._of(panel, "servers"), places, marker=marker)
        self._colour()
        self._select()
        self.zoom(None)

    def recolour(self) -> None:
        """Show other loads on the same places."""
        self._colour()
        self._select()

    def reselect(self) -> None:
        """Show another selection on the same places."""
        self._select()

    def zoom(self, factor: float | None) -> None:
        """Show a part of the drawing `factor` times as wide, around the selected server; None: all of it."""
        middle, half = np.zeros(2), REACH
        if factor is not None:
            low, high = self.figure.layout.xaxis.range
            bottom, top = self.figure.layout.yaxis.range
            half = factor * min(high - low, top - bottom) / 2
            at = strokes.place_in_part(self.state)
            here = np.array([(low + high) / 2, (bottom + top) / 2])
            middle = here if at is None else self.state.part.places[at]
        with self.figure.batch_update():
            self.figure.layout.xaxis.range = [middle[0] - half, middle[0] + half]
            self.figure.layout.yaxis.range = [middle[1] - half, middle[1] + half]

    def _colour(self) -> None:
        state = self.state
        words = self._servers_in_words()
        for panel, name in enumerate(state.shown):
            values = state.values(name)[state.part.servers]
            self._of(panel, "servers").update(marker={"color": values}, hovertext=words)
        low, high = state.limits()
        title = {"text": measure_in_words(state)}
        self.figure.layout.coloraxis.update(cmin=low, cmax=high, colorbar={"title": title})

    def _select(self) -> None:
        state = self.state
        at = strokes.place_in_part(state)
        here = np.array([] if at is None else [at], dtype=np.int64)
        sizes = strokes.sizes(state, SIDE)
        chain = strokes.focus(state)
        for panel in range(len(state.shown)):
            _put(self._of(panel, "choices"), chain)
            _put(self._of(panel, "selected"), state.part.places[here], marker={"size": sizes[here] + 12})
        self.figure.layout.annotations = [*self._titles(), *self._names(at)]

    def _titles(self) -> list[dict[str, Any]]:
        panels = len(self.state.shown)
        shared = {
            "xref": "paper",
            "yref": "paper",
            "y": 1,
            "xanchor": "left",
            "yanchor": "bottom",
            "showarrow": False,
        }
        notes = []
        for panel, name in enumerate(self.state.shown):
            words = f"<b>{escaped(name, 44)}</b><br>{escaped(side_in_words(self.state, name), 70)}"
            notes.append(
                {
                    "text": words,
                    "x": _domain(panel, panels)[0],
                    "align": "left",
                    "yshift": 6,
                    "font": {"size": 12},
                }
                | shared
            )
        return notes

    def _names(self, at: int | None) -> list[dict[str, Any]]:
        if at is None:
            return []
        x, y = self.state.part.places[at]
        words = escaped(self.state.name(int(self.state.selected or 0)), 24)
        return [
            {
                "text": words, "x": x, "y": y, "xref": f"x{panel + 1}", "yref": f"y{panel + 1}",
                "showarrow": False, "bgcolor": "rgba(255,255,255,0.85)", "borderpad": 1, **_beside(x, y),
            }
            for panel in range(len(self.state.shown))
        ]  # fmt: skip

    def _servers_in_words(self) -> list[str]:
        state = self.state
        values = [state.values(name) for name in state.shown]
        write = writer(max(each.max() for each in values))
        return [
            f"<b>{escaped(state.name(server))}</b><br>capacity {quantity(state.capacity[server])}"
            + "".join(
                f"<br>{escaped(name, 28)}: {write(each[server])}"
                for name, each in zip(state.shown, values, strict=True)
            )
            for server in state.part.servers
        ]

    def _choices_in_words(self) -> list[str]:
        surroundings = self.state.surroundings
        return [
            " or ".join(escaped(self.state.name(each), 24) for each in surroundings.members(group.row))
            + f"<br>demand {quantity(group.demand)}"
            for group in self.state.part.groups
        ]


def escaped(text: str, longest: int = 40) -> str:
    """Return a text for the drawing, which obeys a few tags and takes dollar signs for formulas."""
    return safe(text, longest).replace("$", "&#36;")


def _beside(x: float, y: float) -> dict[str, Any]:
    """Return where a name stands: above or below its server, or inwards at the sides of a panel."""
    if abs(x) > 0.6:
        return {"xanchor": "right" if x > 0 else "left", "xshift": -16 if x > 0 else 16}
    return {"yshift": 22 if y > 0 else -22}


def _domain(panel: int, panels: int) -> Sequence[float]:
    return [0.0, 1.0] if panels == 1 else [(0.0, 0.49), (0.51, 1.0)][panel]


def _put(trace: Any, points: np.ndarray, **look: Any) -> None:
    """Change one trace in a message of its own: from messages about several some lose their colours."""
    trace.update(x=points[:, 0], y=points[:, 1], **look)
