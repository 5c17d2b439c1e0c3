"""Words beside lines: each at its own line, apart from the others and within the figure."""

import textwrap
from collections.abc import Iterable, Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.font_manager import FontProperties
from matplotlib.lines import Line2D
from matplotlib.text import Annotation
from matplotlib.textpath import TextPath

from labkit.figures.style import WIDTH, WORDS, Drawing, for_words
from labkit.policies.naming import shown_name

# Characters of a line of a label; points from line to line.
LONGEST, LINE = 26, 1.35 * WORDS
_MOST_LINES, _MOST_BESIDE = 3, 7
# What a place costs where a name cannot stand.
NO_PLACE = 1e9


def spread(
    heights: Iterable[float],
    sizes: float | Sequence[float],
    between: tuple[float, float] = (-np.inf, np.inf),
) -> np.ndarray:
    """Move labels apart so that none overlaps another.

    Parameters
    ----------
    heights : iterable of float
        Where the middle of each label is wished to be.
    sizes : float or sequence of float
        Height of all labels, or of each, in the same units.
    between : pair of float
        Where all must lie, as far as there is room for so many.

    Returns
    -------
    numpy.ndarray
        Middles in the same order: groups too close together are laid out side by side about their own middle.
    """
    wished = np.array(list(heights), dtype=np.float64)
    each = np.broadcast_to(np.asarray(sizes, dtype=np.float64), wished.shape)
    groups: list[list[int]] = []
    for at in np.argsort(wished, kind="stable"):
        groups.append([int(at)])
        while len(groups) > 1:
            below, above = (_row(wished[group], each[group], between) for group in groups[-2:])
            if above[0] - below[-1] >= (each[groups[-1][0]] + each[groups[-2][-1]]) / 2:
                break
            last = groups.pop()
            groups[-1] += last
    placed = np.empty_like(wished)
    for group in groups:
        placed[group] = _row(wished[group], each[group], between)
    return placed


def _row(wished: np.ndarray, sizes: np.ndarray, between: tuple[float, float]) -> np.ndarray:
    steps = (sizes[1:] + sizes[:-1]) / 2
    places = np.concatenate([[0.0], np.cumsum(steps)])
    places += wished.mean() - places.mean()
    too_high = max(0.0, places[-1] + sizes[-1] / 2 - between[1])
    too_low = max(0.0, between[0] - places[0] + sizes[0] / 2)
    return places - too_high if too_high else places + too_low


def label_ends(axes: Axes, x: float, ends: dict[str, float], looks_of: dict[str, dict]) -> None:
    """Write each name beside the end of its line, in its colour, without overlaps.

    Parameters
    ----------
    axes : matplotlib.axes.Axes
        Drawn once, so that its scales are known.
    x : float
        Where the lines end.
    ends : dict of str to float
        Name → height of its end.
    looks_of : dict of str to dict
        Name → look, of which the colour is taken.
    """
    if not ends:
        return
    dots = axes.figure.dpi / 72
    names = [in_lines(shown_name(name)) for name in ends]
    sizes = [LINE * dots * (name.count("\n") + 1) for name in names]
    _make_room(axes, sum(sizes))
    low, high = axes.get_ylim()
    heights = [axes.transData.transform((x, min(max(y, low), high)))[1] for y in ends.values()]
    pixels = spread(heights, sizes, (axes.bbox.y0, axes.bbox.y1))
    for name, words, y, height, pixel in zip(ends, names, ends.values(), heights, pixels, strict=True):
        axes.annotate(
            words,
            (x, min(max(y, low), high)),
            xytext=(10, (pixel - height) / dots),
            textcoords="offset points",
            va="center",
            color=for_words(looks_of[name]["color"]),
            annotation_clip=False,
        )


def _make_room(axes: Axes, needed: float) -> None:
    """Make a figure higher when so many pixels of labels do not fit beside its axes."""
    missing = needed - axes.bbox.height
    if missing > 0:
        figure, place = axes.get_figure(root=True), axes.get_subplotspec()
        assert figure is not None
        rows = 1 if place is None else place.get_gridspec().nrows
        figure.set_figheight(figure.get_figheight() + rows * missing / figure.dpi)
        figure.draw_without_rendering()


def label_lines(axes: Axes, lines: dict[str, np.ndarray], looks_of: dict[str, dict]) -> None:
    """Write each name beside its line, where it covers least of all lines and no other name.

    Where there is no such place for all of them, or they are many, there is a legend at the side instead.

    Parameters
    ----------
    axes : matplotlib.axes.Axes
        Drawn once, so that its scales are known.
    lines : dict of str to array, shape (points, 2)
        Name → what its line goes through.
    looks_of : dict of str to dict
        Name → look, of which the colour is taken.
    """
    if len(lines) > _MOST_BESIDE:
        _legend(axes, list(lines), looks_of)
        return
    dots = axes.figure.dpi / 72
    paths = {name: _along(axes.transData.transform(line)) for name, line in lines.items()}
    placed: list[np.ndarray] = []
    written: list[Annotation] = []
    for name, path in paths.items():
        words = in_lines(shown_name(name))
        size = np.array([width_of(words) * 72 + 3, LINE * (words.count("\n") + 1) + 3]) * dots
        boxes = [
            _box(point, size, side, dots) for point in path[:: max(1, len(path) // 60)] for side in (1, -1)
        ]
        others = [other for each, other in paths.items() if each != name]
        inked = np.vstack([*others, np.zeros((0, 2))])
        costs = [_cost(box, axes, path, inked, placed) for box in boxes]
        if min(costs) >= NO_PLACE:
            for label in written:
                label.remove()
            _legend(axes, list(paths), looks_of)
            return
        box = boxes[int(np.argmin(costs))]
        placed.append(box)
        at = axes.transData.inverted().transform((box[0], box[1] + size[1] / 2))
        colour = for_words(looks_of[name]["color"])
        written.append(axes.annotate(words, tuple(at), va="center", color=colour, annotation_clip=False))


def _legend(axes: Axes, names: list[str], looks_of: dict[str, dict]) -> None:
    figure = axes.get_figure(root=True)
    assert figure is not None
    samples = [Line2D([], [], **looks_of[name]) for name in names]
    figure.legend(samples, [in_lines(shown_name(name)) for name in names], loc="outside right upper")


def _along(points: np.ndarray) -> np.ndarray:
    """Return points at small equal steps along a line, in pixels."""
    lengths = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(points, axis=0).T))])
    wanted = np.linspace(0.0, lengths[-1], 2 + int(lengths[-1] / 3))
    return np.column_stack([np.interp(wanted, lengths, column) for column in points.T])


def _box(point: np.ndarray, size: np.ndarray, side: int, dots: float) -> np.ndarray:
    """Return left, bottom, right and top of a label above right of a point, or below left of it."""
    left, bottom = (point + 5 * dots) if side > 0 else (point - 5 * dots - size)
    return np.array([left, bottom, left + size[0], bottom + size[1]])


def _cost(
    box: np.ndarray, axes: Axes, own: np.ndarray, others: np.ndarray, placed: list[np.ndarray]
) -> float:
    inside = axes.bbox.x0 <= box[0] and box[2] <= axes.bbox.x1
    inside = inside and axes.bbox.y0 + 3 <= box[1] and box[3] <= axes.bbox.y1
    over = any(
        box[0] < other[2] and other[0] < box[2] and box[1] < other[3] and other[1] < box[3]
        for other in placed
    )
    if not inside or over:
        return NO_PLACE
    covered = np.count_nonzero(_away(box, own) == 0.0)
    distance = _away(box, others)
    covered += np.count_nonzero(distance == 0.0)
    # Covered points count most; then the nearest other line, which the name might be taken to belong to.
    return float(1000.0 * covered + max(0.0, 60.0 - distance.min(initial=60.0)))


def _away(box: np.ndarray, points: np.ndarray) -> np.ndarray:
    return np.hypot(*np.maximum(np.maximum(box[:2] - points, points - box[2:]), 0.0).T)


def width_of(words: str, size: float = WORDS, weight: str = "normal") -> float:
    """Return the width of the longest line of some words in inches."""
    font = FontProperties(family="DejaVu Sans", size=size, weight=weight)
    widths = [
        float(TextPath((0, 0), line, prop=font).get_extents().x1)
        for line in words.split("\n")
        if line.strip()
    ]
    return max(widths, default=0.0) / 72 * 1.04


def wrapped(words: str, room: float, size: float = WORDS, weight: str = "normal") -> str:
    """Break words into lines that fit a width in inches."""
    lines = [""]
    for word in words.replace(" ·", "\u00a0·").split(" "):
        longer = f"{lines[-1]} {word}".strip()
        if width_of(longer, size, weight) <= room:
            lines[-1] = longer
        else:
            lines.append(word)
    return "\n".join(line for line in lines if line)


def in_lines(name: str, longest: int = LONGEST) -> str:
    """Return a name in as few lines as fit, broken at blanks and before parameters; cut when very long."""
    if "\n" in name or len(name) <= longest:
        return name
    words = name.replace("(", "\u200b (").replace(" \u200b (", " (")
    lines = textwrap.wrap(words, longest, max_lines=_MOST_LINES, placeholder="…")
    return "\n".join(line.replace("\u200b ", "").replace("\u200b", "") for line in lines)


def short(name: str, longest: int = 22) -> str:
    """Return a name, cut when it is long."""
    return name if len(name) <= longest else f"{name[: longest - 1]}…"


def note(figure: Drawing, words: str) -> None:
    """Write above a figure how it is to be read."""
    figure.suptitle(wrapped(words, WIDTH - 0.2), fontsize=WORDS, x=0.011, ha="left", fontweight="normal")


def listed(names: Iterable[str], most: int = 6) -> str:
    """Return names in one phrase; of many the first few and how many more there are."""
    words = list(names)
    if len(words) > most:
        return f"{', '.join(words[:most])} and {len(words) - most} more"
    return " and ".join(filter(None, [", ".join(words[:-1]), words[-1]])) if words else "nothing"
