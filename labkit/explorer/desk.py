"""The widget around the drawing: what can be reached with keys as well, and the facts beneath."""

import re
from collections.abc import Callable
from typing import Any

import ipywidgets as widgets

from labkit.errors import InputError
from labkit.explorer.board import Board
from labkit.explorer.state import HIGHEST, MEAN, State, server_called
from labkit.explorer.words import facts_in_html, heading, key_in_words, safe
from labkit.text import printable

# Names offered while typing, and neighbours with a button of their own.
OFFERED, BUTTONS = 2_000, 10


class Desk:
    """The drawing with its controls, kept in step with a state."""

    def __init__(self, state: State) -> None:
        self.state = state
        self._quiet = False
        self.board = Board(state, self._to)
        names = [state.name(at) for at in range(state.fleet.size)] if state.fleet.size <= OFFERED else []
        self.name = widgets.Combobox(
            options=names, placeholder="type or pick a name", description="Server", continuous_update=False,
            layout={"width": "270px"}, style={"description_width": "48px"},
        )  # fmt: skip
        self.name.observe(self._typed, "value")
        self.bottleneck = _button("Bottleneck", "Select the bottleneck of the survey", self._to_bottleneck)
        self.bottleneck.layout.width = "100px"
        self.bottleneck.add_class("bottleneck-button")
        if not len(state.bottleneck):
            self.bottleneck.disabled = True
            self.bottleneck.tooltip = "None: some split fills all servers alike"
        self.message = widgets.HTML(layout={"display": "none"})
        self.key, self.facts = widgets.HTML(), widgets.HTML()
        self.ways = widgets.HBox(layout={"flex_flow": "row wrap"})
        self.box = widgets.VBox(
            [
                widgets.HBox([self.name, self.bottleneck, *self._zooms()]),
                self.message,
                *([self._sides()] if len(state.shown) > 1 else []),
                self.board.figure,
                self.key,
                self.ways,
                self.facts,
            ],
            layout={"max_width": "860px"},
        )
        self.box.add_class("choice-explorer")
        self._tell()

    def _zooms(self) -> list[Any]:
        zooms = [
            _button("+", "Zoom in on the selected server", lambda: self.board.zoom(0.5)),
            _button("−", "Zoom out", lambda: self.board.zoom(2.0)),
            _button("All", "Show the whole drawing", lambda: self.board.zoom(None)),
        ]
        if len(self.state.part.servers) < self.state.fleet.size:
            around = _button("Around it", "Draw the servers nearest to the selected one", self._around)
            around.layout.width = "90px"
            zooms.append(around)
        return zooms

    def _sides(self) -> Any:
        options = [(printable(side.name), side.name) for side in self.state.sides.values()]
        wide, narrow = {"width": "300px"}, {"description_width": "48px"}
        left, right = (
            widgets.Dropdown(options=options, value=name, description=words, layout=wide, style=narrow)
            for name, words in zip(self.state.shown, ("Left", "Right"), strict=True)
        )
        most = max(side.replicates for side in self.state.sides.values())
        measure = widgets.Dropdown(
            options=[(f"mean of {most:,} replicates", MEAN), (f"highest of {most:,} replicates", HIGHEST)],
            description="Colour", layout={"width": "250px"}, style=narrow,
        )  # fmt: skip

        def change(_: Any) -> None:
            self.state.show(left.value, right.value)
            self.state.measure = measure.value
            self.board.recolour()
            self._tell()

        for each in (left, right, measure):
            each.observe(change, "value")
        return widgets.HBox([left, right, measure])

    def refresh(self, moved: bool) -> None:
        """Show another selection."""
        (self.board.redraw if moved else self.board.reselect)()
        self._tell()

    def _to(self, server: int) -> None:
        self.refresh(self.state.select(server))

    def _to_bottleneck(self) -> None:
        self.refresh(self.state.select_bottleneck())

    def _around(self) -> None:
        state = self.state
        if state.selected is None:
            self._say("Select a server first.")
            return
        state.draw_around([state.selected])
        self.refresh(True)

    def _typed(self, change: dict[str, Any]) -> None:
        words = change["new"]
        if self._quiet or not words:
            return
        try:
            self._to(find(self.state, words))
        except InputError as refusal:
            self._say(safe(str(refusal), 160))

    def _say(self, words: str) -> None:
        self.message.layout.display = "flex"
        self.message.value = f'<span role="alert" style="color:var(--jp-error-color1,#B03000)">{words}</span>'

    def _tell(self) -> None:
        state = self.state
        self._quiet = True  # the name follows the selection, without selecting once more
        self.name.value = "" if state.selected is None else state.name(state.selected)
        self._quiet = False
        self.message.value, self.message.layout.display = "", "none"
        self.key.value = f'<span style="font-size:12px">{key_in_words(state)}.</span>'
        self.facts.value = facts_in_html(state)
        self.ways.children = self._neighbours()

    def _neighbours(self) -> list[Any]:
        state = self.state
        if state.selected is None:
            return []
        near = list(state.surroundings.neighbours(state.selected))[:BUTTONS]
        buttons = []
        for server in near:
            words = printable(state.name(server))
            button = _button(words, f"Select {words}", _later(self._to, server))
            button.layout.width = "auto"
            button.add_class("neighbour-button")
            buttons.append(button)
        lead = widgets.HTML(f'<span style="font-size:13px">Neighbours of {heading(state)}:</span>')
        return [lead, *buttons] if near else []


def find(state: State, words: str) -> int:
    """Return the server of a typed name; a fleet with whole numbers for names takes their digits."""
    whole = state.fleet.names.dtype.kind in "iu" and re.fullmatch(r"-?\d{1,19}", words.strip())
    given: Any = int(words) if whole else words
    return server_called(state.fleet, given)


def _button(words: str, tooltip: str, act: Callable[[], None]) -> Any:
    button = widgets.Button(description=words, tooltip=tooltip, layout={"width": "44px"})
    button.on_click(lambda _: act())
    return button


def _later(act: Callable[[int], None], server: int) -> Callable[[], None]:
    return lambda: act(server)
