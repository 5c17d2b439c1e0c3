"""The fleet as a picture: which servers end fullest, and who shares work with whom."""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.patches import PathPatch
from matplotlib.path import Path as MplPath
from scipy.spatial import KDTree

from labkit.analysis.wording import writer
from labkit.errors import InputError
from labkit.figures.labels import listed, short, spread, width_of, wrapped
from labkit.figures.layout import CIRCLE_AT_MOST, is_ring_in_order, positions
from labkit.figures.style import (
    FAINT,
    FILL,
    INK,
    PAPER,
    TITLE,
    VERMILLION,
    WIDTH,
    WORDS,
    Drawing,
    describe,
    plain,
    styled,
)
from labkit.fleet.model import ABSENT, Fleet, positions_of

DRAWN_AT_MOST = 2_000
NEIGHBOURHOOD = 300
NAMED = 5
MARK = VERMILLION
# Inches: the margin, the largest drawing, the least height, room for a dot at the edge, from the drawing to
# the names, from line to line, before the colour bar ("mean") and from its left edge to the figure's.
MARGIN, LARGEST, LEAST, DOT, AWAY, LINE, MEAN, BAR = 0.12, 5.4, 1.6, 0.2, 0.4, 0.2, 0.7, 0.95


@styled
def choice_graph(
    fleet: Fleet,
    utilisation: Any,
    *,
    title: str = "",
    measure: str = "utilisation (load ÷ capacity)",
    ringed: Iterable[Any] = (),
    links: Iterable[tuple[Any, Any]] = (),
) -> Drawing:
    """Draw the choice graph, servers coloured by utilisation.

    Areas of the dots are proportional to capacity, widths of the lines to demand; the fullest servers, or
    the ends of the first links, are named. Of a fleet with more than 2,000 servers 300 are drawn: ends of
    links, ringed ones, and the nearest to them and to the fullest.

    Parameters
    ----------
    fleet : Fleet
        A fleet whose choices are listed.
    utilisation : array or pandas.Series, shape (servers,)
        Load ÷ capacity in table order; a Series with server names as its index may be in any order.
    title : str
        Written above the picture.
    measure : str
        What the colours mean, written at their bar.
    ringed : iterable of server names
        Servers drawn with a ring, such as the bottleneck.
    links : iterable of pairs of server names
        Drawn as dashed lines, such as advised links.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When the choices are not listed, utilisation does not fit the fleet, or a name is not a server's.
    """
    if not isinstance(fleet, Fleet) or fleet.implicit is not None:
        raise InputError(f"fleet is {fleet!r}; give a fleet whose choices are listed, to draw them.")
    values = _checked(fleet, utilisation)
    pairs, demand = _pairs(fleet)
    capacity = np.ones(fleet.size) if fleet.capacity is None else np.asarray(fleet.capacity)
    names = np.asarray(fleet.names, dtype=object)
    around = positions_of(fleet, list(ringed), "ringed")
    in_all = len(around)
    dashed = positions_of(fleet, [end for link in links for end in link], "links").reshape(-1, 2)
    low, high, mean = values.min(), values.max(), float(values @ capacity / capacity.sum())
    if high - low <= 1e-6 * abs(high):  # all equally full: a middle shade
        low, high = low - 0.1 * (abs(low) or 1.0), high + 0.1 * (abs(high) or 1.0)
    kept = np.arange(fleet.size)
    if fleet.size > DRAWN_AT_MOST:
        third = NEIGHBOURHOOD // 3
        first = [*dashed.ravel()[:third], *around[:third], np.argmax(values)]
        kept = _nearest_to([int(each) for each in first], fleet.size, pairs)
        place_of = np.full(fleet.size, -1)
        place_of[kept] = np.arange(len(kept))
        inside = (place_of[pairs] >= 0).all(axis=1)
        pairs, demand = place_of[pairs[inside]], demand[inside]
        around = place_of[around][place_of[around] >= 0]
        dashed = place_of[dashed][(place_of[dashed] >= 0).all(axis=1)]
        values, capacity, names = values[kept], capacity[kept], names[kept]
    places = positions(len(kept), pairs)
    words = "area: capacity · line width: demand"
    some = f" ({len(around):,} of its {in_all:,} servers)" if len(around) < in_all else ""
    words += f" · ringed: bottleneck{some}" if len(around) else ""
    words += " · dashed: advised links" if len(dashed) else ""
    if len(kept) < fleet.size:
        words += f" · the {len(kept)} servers nearest to the fullest of {fleet.size:,}"
    if len(kept) > CIRCLE_AT_MOST and is_ring_in_order(len(kept), pairs):
        words += " · the ring is drawn as a wave to make room"
    named = np.argsort(-values, kind="stable")[:NAMED] if not len(dashed) else _first(dashed.ravel())
    room = WIDTH - 2 * MARGIN
    title, words = wrapped(title, room, TITLE, "bold"), wrapped(words, room)
    lines = words.count("\n") + title.count("\n")
    widest = max(width_of(title, TITLE, "bold"), width_of(words))
    sheet = _sheet(places, values, names, named, widest, lines)
    figure = Drawing(figsize=sheet.size)
    width, height = sheet.size
    low_x, high_x, low_y, high_y = sheet.panel
    foot = MARGIN + 0.35 + LINE * words.count("\n")
    axes = figure.add_axes(
        (MARGIN / width, foot / height, (high_x - low_x) / width, (high_y - low_y) / height),
        xlim=(low_x, high_x),
        ylim=(low_y, high_y),
    )
    axes.set_axis_off()
    diameter = _diameter(sheet.places)
    _choices(axes, sheet.places, pairs, demand, diameter)
    dots = axes.scatter(
        sheet.places[:, 0],
        sheet.places[:, 1],
        s=diameter**2 * capacity / capacity.mean(),
        c=values,
        cmap=FILL,
        vmin=low,
        vmax=high,
        edgecolors=INK,
        linewidths=min(0.6, diameter / 10),
        zorder=3,
    )
    _rings(axes, sheet.places[around], diameter**2 * (capacity / capacity.mean())[around])
    _links(axes, sheet.places, dashed, diameter)
    for label in sheet.labels:
        label.draw(axes, sheet.places)
    tall = min(high_y - low_y, 3.4)
    middle = foot + (high_y - low_y) / 2
    bar = figure.colorbar(
        dots,
        cax=figure.add_axes(
            ((width - BAR) / width, (middle - tall / 2) / height, 0.16 / width, tall / height)
        ),
    )
    bar.ax.yaxis.set_major_formatter(plain)
    bar.set_label(measure)
    bar.ax.axhline(mean, color=PAPER, linewidth=3)
    bar.ax.axhline(mean, color=INK, linewidth=1.2)
    bar.ax.annotate("mean ", (0, mean), xycoords=("axes fraction", "data"), ha="right", va="center")
    figure.suptitle(
        title, x=MARGIN / width, y=1 - MARGIN / height, ha="left", va="top", fontsize=TITLE, fontweight="bold"
    )
    figure.supxlabel(words, x=MARGIN / width, y=MARGIN / height, ha="left", va="bottom", fontsize=WORDS)
    write = writer(high)
    fullest = [
        f"{short(str(names[at]))} {write(values[at])}" for at in np.argsort(-values, kind="stable")[:3]
    ]
    marks = f"; {in_all:,} ringed as the bottleneck" if in_all else ""
    marks += f"; {len(dashed):,} advised links dashed" if len(dashed) else ""
    begin = f"{title}: choice" if title else "Choice"
    return describe(
        figure,
        f"{begin} graph of {fleet.size:,} servers coloured by {measure}, from "
        f"{write(float(values.min()))} to {write(float(values.max()))}, mean {write(mean)}; "
        f"fullest: {listed(fullest)}{marks}.",
    )


def _checked(fleet: Fleet, utilisation: Any) -> np.ndarray:
    if isinstance(utilisation, pd.Series) and not isinstance(utilisation.index, pd.RangeIndex):
        utilisation = utilisation.reindex(fleet.names)
    values = np.asarray(utilisation, dtype=np.float64)
    if values.shape != (fleet.size,):
        raise InputError(
            f"utilisation has shape {values.shape}; give one number for each of the {fleet.size} servers."
        )
    wrong = np.flatnonzero(~np.isfinite(values))
    if len(wrong):
        raise InputError(
            f"utilisation of server {fleet.names[wrong[0]]!r} is {values[wrong[0]]}; "
            "give a finite number for each server."
        )
    return values


def _links(axes: Axes, places: np.ndarray, links: np.ndarray, diameter: float) -> None:
    """Draw links as dashed arcs that bulge away from the middle, clear of the choices beside them."""
    middle = places.mean(axis=0)
    for one, other in places[links]:
        half = (one + other) / 2
        outward = half - middle
        outward = outward / np.hypot(*outward) if np.hypot(*outward) > 1e-9 else np.array([0.0, 1.0])
        bulge = max(0.3 * np.hypot(*(other - one)), 2.5 * diameter / 72)
        curve = [MplPath.MOVETO, MplPath.CURVE3, MplPath.CURVE3]
        arc = PathPatch(MplPath([one, half + 2 * bulge * outward, other], curve), clip_on=False, zorder=2)
        arc.set(facecolor="none", edgecolor=MARK, linewidth=2.0, linestyle=(0, (4, 2)))
        axes.add_patch(arc)


def _rings(axes: Axes, places: np.ndarray, areas: np.ndarray) -> None:
    if len(places):
        axes.scatter(
            places[:, 0], places[:, 1], s=(np.sqrt(areas) + 5) ** 2, facecolors="none", edgecolors=MARK,
            linewidths=1.6, zorder=3.5,
        )  # fmt: skip


def _pairs(fleet: Fleet) -> tuple[np.ndarray, np.ndarray]:
    """Return the pairs of servers that share choices and their demand; all pairs of a choice count."""
    options = np.asarray(fleet.options)
    demand = np.ones(len(options)) if fleet.demand is None else np.asarray(fleet.demand)
    found, weights = [], []
    for one in range(options.shape[1]):
        for other in range(one + 1, options.shape[1]):
            there = (options[:, one] != ABSENT) & (options[:, other] != ABSENT)
            found.append(np.sort(options[there][:, [one, other]].astype(np.int64), axis=1))
            weights.append(demand[there])
    pairs, at = np.unique(np.vstack(found), axis=0, return_inverse=True)
    return pairs, np.bincount(at.ravel(), weights=np.concatenate(weights), minlength=len(pairs))


def _nearest_to(centres: list[int], size: int, pairs: np.ndarray) -> np.ndarray:
    ends = np.vstack([pairs, pairs[:, ::-1]])
    ends = ends[np.argsort(ends[:, 0], kind="stable")]
    first = np.searchsorted(ends[:, 0], np.arange(size + 1))
    queue = list(dict.fromkeys(centres))
    reached = set(queue)
    for server in queue:
        for neighbour in ends[first[server] : first[server + 1], 1].tolist():
            if neighbour not in reached and len(reached) < NEIGHBOURHOOD:
                reached.add(neighbour)
                queue.append(neighbour)
    return np.sort(np.array(queue))


def _choices(axes: Axes, places: np.ndarray, pairs: np.ndarray, demand: np.ndarray, diameter: float) -> None:
    if not len(pairs):
        return
    widest = min(6.0, 0.85 * diameter) if np.ptp(demand) > 0 else min(1.5, 0.3 * diameter)
    widths = np.maximum(0.3, widest * demand / max(demand.max(), 1e-300))
    axes.add_collection(
        LineCollection(
            list(places[pairs]), linewidths=widths, colors=FAINT, alpha=0.6, zorder=1, capstyle="butt"
        ),
        autolim=False,
    )


def _diameter(places: np.ndarray) -> float:
    """Return the diameter in points of a dot of mean capacity, so that most dots leave room between them."""
    if len(places) < 2:
        return 16.0
    nearest, _ = KDTree(places).query(places, k=2)
    return float(np.clip(0.52 * 72 * np.median(nearest[:, 1]), 2.2, 16.0))


@dataclass(frozen=True)
class _Label:
    at: int
    words: str
    x: float
    y: float
    side: int

    def draw(self, axes: Axes, places: np.ndarray) -> None:
        axes.annotate(
            self.words,
            places[self.at],
            xytext=(self.x, self.y),
            ha="left" if self.side > 0 else "right",
            va="center",
            fontsize=WORDS,
            arrowprops={
                "arrowstyle": "-",
                "color": INK,
                "linewidth": 0.7,
                "shrinkB": 4,
                "relpos": (0.0 if self.side > 0 else 1.0, 0.5),
            },
            zorder=4,
        )


@dataclass(frozen=True)
class _Sheet:
    """Where everything goes, in inches: places of the servers, labels, the panel around both, the figure."""

    places: np.ndarray
    labels: list[_Label]
    panel: tuple[float, float, float, float]
    size: tuple[float, float]


def _first(servers: np.ndarray) -> np.ndarray:
    """Return the first few different servers, in order."""
    return np.array(list(dict.fromkeys(servers.tolist()))[: NAMED + 1], np.int64)


def _sheet(
    places: np.ndarray, values: np.ndarray, names: np.ndarray, named: np.ndarray, words: float, lines: int
) -> _Sheet:
    """Scale the drawing to its number of servers and make room for some of their names beside it."""
    places = places - places.min(axis=0)
    extent = places.max(axis=0)
    write = writer(values.max())
    named_as = {int(at): f"{short(str(names[at]))}: {write(values[at])}" for at in named}
    right = places[named, 0] >= extent[0] / 2
    beside = [
        max((width_of(named_as[int(at)]) for at in named[right == side]), default=DOT - AWAY)
        for side in (0, 1)
    ]
    longest = min(LARGEST, 1.4 + 0.45 * len(places) ** 0.5)
    room = WIDTH - MARGIN - MEAN - BAR - sum(beside) - 2 * AWAY
    scale = min(longest / max(extent.max(), 1e-12), room / max(extent[0], 1e-12))
    places = places * scale
    low, high = np.zeros(2), places.max(axis=0)
    labels = []
    for side in (1, -1):
        mine = named[right == (side > 0)]
        x = high[0] + AWAY if side > 0 else -AWAY
        for at, y in zip(mine, spread(places[mine, 1], LINE), strict=True):
            labels.append(_Label(int(at), named_as[int(at)], x, float(y), side))
    labels.sort(key=lambda label: named.tolist().index(label.at))
    ends = [label.x + label.side * width_of(label.words) for label in labels]
    heights = [label.y for label in labels]
    low_x, high_x = min(low[0] - DOT, *ends), max(high[0] + DOT, *ends)
    low_y = min(low[1] - DOT, min(heights) - LINE / 2)
    high_y = max(high[1] + DOT, max(heights) + LINE / 2)
    missing = max(0.0, LEAST - (high_y - low_y)) / 2
    low_y, high_y = low_y - missing, high_y + missing
    width = max(MARGIN + high_x - low_x + MEAN + BAR, words + 2 * MARGIN)
    height = 2 * MARGIN + 0.75 + LINE * lines + high_y - low_y
    return _Sheet(places, labels, (low_x, high_x, low_y, high_y), (width, height))
