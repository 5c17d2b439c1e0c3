"""The fleet as a picture: which servers end fullest, and who shares work with whom."""

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure

from labkit.errors import InputError
from labkit.figures.layout import positions
from labkit.figures.style import FILL, INK, spread, styled
from labkit.fleet.model import ABSENT, Fleet

DRAWN_AT_MOST = 2_000
NEIGHBOURHOOD = 300
NAMED = 5
# Width of a letter of a name and of the panel that the names stand in, in inches.
LETTER, PANEL = 0.075, 6.6


@styled
def choice_graph(fleet: Fleet, utilisation: Any, *, title: str = "") -> Figure:
    """Draw the choice graph, servers coloured by utilisation.

    Areas of the dots are proportional to capacity, widths of the lines to demand; the fullest servers are
    named. Of a fleet with more than 2,000 servers the 300 nearest to the fullest one are drawn.

    Parameters
    ----------
    fleet : Fleet
        A fleet whose choices are listed.
    utilisation : array or pandas.Series, shape (servers,)
        Load ÷ capacity in table order; a Series with server names as its index may be in any order.
    title : str
        Written above the picture.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When the choices are not listed, or utilisation does not fit the fleet.
    """
    if not isinstance(fleet, Fleet) or fleet.implicit is not None:
        raise InputError(f"fleet is {fleet!r}; give a fleet whose choices are listed, to draw them.")
    values = _checked(fleet, utilisation)
    pairs, demand = _pairs(fleet)
    capacity = np.ones(fleet.size) if fleet.capacity is None else np.asarray(fleet.capacity)
    names = np.asarray(fleet.names, dtype=object)
    low, high, mean = values.min(), values.max(), float(values @ capacity / capacity.sum())
    kept = np.arange(fleet.size)
    if fleet.size > DRAWN_AT_MOST:
        kept = _nearest_to(int(values.argmax()), fleet.size, pairs)
        place_of = np.full(fleet.size, -1)
        place_of[kept] = np.arange(len(kept))
        inside = (place_of[pairs] >= 0).all(axis=1)
        pairs, demand = place_of[pairs[inside]], demand[inside]
        values, capacity, names = values[kept], capacity[kept], names[kept]
    figure = Figure(figsize=(8.4, 6.4), layout="constrained")
    axes = figure.subplots()
    places = positions(len(kept), pairs)
    _choices(axes, places, pairs, demand)
    area = min(260.0, 4_000 / len(kept)) * capacity / capacity.mean()
    dots = axes.scatter(
        places[:, 0],
        places[:, 1],
        s=area,
        c=values,
        cmap=FILL,
        vmin=low,
        vmax=max(high, low + 1e-12),
        edgecolors=INK,
        linewidths=0.6,
        zorder=3,
    )
    _names(axes, places, values, names)
    bar = figure.colorbar(dots, ax=axes, shrink=0.7, pad=0.02)
    bar.set_label("utilisation (load ÷ capacity)")
    bar.ax.axhline(mean, color="white", linewidth=3)
    bar.ax.axhline(mean, color=INK, linewidth=1.2)
    bar.ax.annotate("mean ", (0, mean), xycoords=("axes fraction", "data"), ha="right", va="center")
    axes.set_aspect("equal")
    axes.set_axis_off()
    axes.set_title(title)
    words = "area: capacity · line width: demand"
    if len(kept) < fleet.size:
        words += f" · the {len(kept)} servers nearest to the fullest of {fleet.size:,}"
    figure.supxlabel(words, fontsize=9)
    return figure


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


def _nearest_to(centre: int, size: int, pairs: np.ndarray) -> np.ndarray:
    ends = np.vstack([pairs, pairs[:, ::-1]])
    ends = ends[np.argsort(ends[:, 0], kind="stable")]
    first = np.searchsorted(ends[:, 0], np.arange(size + 1))
    reached, queue = {centre}, [centre]
    for server in queue:
        for neighbour in ends[first[server] : first[server + 1], 1].tolist():
            if neighbour not in reached and len(reached) < NEIGHBOURHOOD:
                reached.add(neighbour)
                queue.append(neighbour)
    return np.sort(np.array(queue))


def _choices(axes: Axes, places: np.ndarray, pairs: np.ndarray, demand: np.ndarray) -> None:
    if not len(pairs):
        return
    widest = min(6.0, 450 / len(places)) if np.ptp(demand) > 0 else min(1.5, 300 / len(places))
    widths = np.maximum(0.4, widest * demand / max(demand.max(), 1e-300))
    axes.add_collection(LineCollection(list(places[pairs]), linewidths=widths, colors="#A6A6A6", zorder=1))


def _names(axes: Axes, places: np.ndarray, values: np.ndarray, names: np.ndarray) -> None:
    """Name the fullest servers beside the picture, each with a thin line to its dot, and make room."""
    fullest = np.argsort(-values, kind="stable")[:NAMED]
    words = {int(at): f"{_short(str(names[at]))}: {values[at]:.4g}" for at in fullest}
    low, high = places.min(axis=0), places.max(axis=0)
    reach = max(*(high - low), 1e-12)
    right = places[fullest, 0] >= (low[0] + high[0]) / 2
    limits = [low[0] - 0.04 * reach, high[0] + 0.04 * reach]
    for side, sign in ((right, 1), (~right, -1)):
        edge = (high if sign > 0 else low)[0] + sign * 0.07 * reach
        for at, y in zip(fullest[side], spread(places[fullest[side], 1], 0.045 * reach), strict=True):
            axes.annotate(
                words[int(at)],
                places[at],
                xytext=(edge, y),
                ha="left" if sign > 0 else "right",
                va="center",
                arrowprops={
                    "arrowstyle": "-",
                    "color": INK,
                    "linewidth": 0.7,
                    "shrinkB": 4,
                    "relpos": (0.0 if sign > 0 else 1.0, 0.5),
                },
                zorder=4,
            )
            # inches of the text over inches of the panel, had it a label on either side
            share = min(LETTER * len(words[int(at)]) / PANEL, 0.4)
            room = reach * (share + 0.07) / (1 - 2 * share)
            end = edge + sign * (room - 0.07 * reach)
            limits[sign > 0] = max(limits[1], end) if sign > 0 else min(limits[0], end)
    axes.set_xlim(*limits)
    axes.set_ylim(low[1] - 0.05 * reach, high[1] + 0.05 * reach)


def _short(name: str) -> str:
    return name if len(name) <= 22 else f"{name[:21]}…"
