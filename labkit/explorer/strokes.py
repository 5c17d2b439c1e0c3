"""The marks of a drawing, whatever draws it: sizes of dots, widths of lines, lines as points."""

from collections.abc import Iterable

import numpy as np
from matplotlib.colors import to_hex
from scipy.spatial import KDTree

from labkit.explorer.state import State
from labkit.figures.style import COLOURS, FAINT, FILL, INK

MARK = COLOURS[1]
# Widths of lines: a few steps, for a line each would be slow.
WIDTHS = (0.8, 1.6, 2.8, 4.2)
STEPS = [[at / 16, to_hex(FILL(at / 16))] for at in range(17)]
LINES = "#A6A6A6"


def chains(state: State) -> list[np.ndarray]:
    """Return the lines of each width, as points with a gap (NaN) after each line."""
    strokes = state.part.strokes()
    most = max((demand for _, _, demand, _ in strokes), default=1.0)
    by_width: list[list[tuple[np.ndarray, np.ndarray]]] = [[] for _ in WIDTHS]
    for one, other, demand, _ in strokes:
        step = int(np.ceil(len(WIDTHS) * demand / most)) if most > 0 else 1
        by_width[max(0, min(len(WIDTHS), step) - 1)].append((one, other))
    even = len({demand for _, _, demand, _ in strokes}) == 1
    if even:  # all alike: the middle width
        by_width = [[], [line for lines in by_width for line in lines], [], []]
    return [chain(lines) for lines in by_width]


def chain(lines: Iterable[tuple[np.ndarray, np.ndarray]]) -> np.ndarray:
    """Return lines as one chain of points with gaps, shape (points, 2)."""
    points = [point for one, other in lines for point in (one, other, (np.nan, np.nan))]
    return np.array(points, dtype=np.float64).reshape(-1, 2)


def focus(state: State) -> np.ndarray:
    """Return the lines of the choices of the selected server."""
    at = place_in_part(state)
    if at is None:
        return chain([])
    return chain([(one, other) for one, other, _, members in state.part.strokes() if at in members])


def place_in_part(state: State) -> int | None:
    """Return the number of the selected server within the part that is drawn."""
    if state.selected is None:
        return None
    return int(np.searchsorted(state.part.servers, state.selected))


def sizes(state: State, side: float) -> np.ndarray:
    """Return the diameters of the dots, in the unit of `side`, the length of the square they are drawn in."""
    places = state.part.places
    middle = 18.0
    if len(places) > 1:
        nearest, _ = KDTree(places).query(places, k=2)
        middle = float(np.clip(0.6 * side / 2.3 * np.median(nearest[:, 1]), 6.0, 18.0))
    room = state.capacity[state.part.servers]
    return np.asarray(np.clip(middle * np.sqrt(room / room.mean()), 4.0, 2.5 * middle))


def rims(state: State) -> list[str]:
    """Return the colours of the rims: pale where choices lead out of the drawing."""
    return [FAINT if cut else INK for cut in state.part.cut]


def hubs(state: State) -> np.ndarray:
    """Return the middles of choices of three or more options, shape (groups, 2)."""
    return np.array([state.part.hub(group) for group in state.part.groups], dtype=np.float64).reshape(-1, 2)


def ringed(state: State) -> np.ndarray:
    """Return which drawn servers are of the bottleneck."""
    return np.flatnonzero(np.isin(state.part.servers, state.bottleneck))
