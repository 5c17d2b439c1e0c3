"""Where the servers of a choice graph are drawn: always the same places for the same fleet."""

import networkx as nx
import numpy as np

# Stress minimisation compares all pairs; beyond this many servers springs take over.
STRESS_AT_MOST = 150
# A ring of more servers than this is drawn as a wave around a circle, lest its servers cover its choices.
CIRCLE_AT_MOST = 150
# Of the wave: its height in radii, and the distance of neighbouring servers in radii that it makes room for.
HEIGHT, STEP = 0.16, 0.036


def positions(size: int, pairs: np.ndarray) -> np.ndarray:
    """Return a place in the plane for each server.

    Parameters
    ----------
    size : int
        Number of servers.
    pairs : numpy.ndarray, shape (pairs, 2)
        Positions of servers that share a choice.

    Returns
    -------
    numpy.ndarray, shape (size, 2)
        A circle, or a wave around one, when the servers form a ring in table order; else each component on
        its own (stress minimisation, or springs when it is large), side by side, lone servers in rows below.
    """
    if is_ring_in_order(size, pairs):
        return _circle(size) if size <= CIRCLE_AT_MOST else _wave(size)
    graph = nx.Graph()
    graph.add_nodes_from(range(size))
    graph.add_edges_from(map(tuple, pairs.tolist()))
    parts = sorted(
        (sorted(part) for part in nx.connected_components(graph)), key=lambda part: (-len(part), part[0])
    )
    places = np.zeros((size, 2))
    left = 0.0
    joined = [part for part in parts if len(part) > 1]
    for part in joined:
        drawn = _component(graph.subgraph(part), part)
        radius = np.sqrt(len(part))
        drawn *= radius / max(np.abs(drawn).max(), 1e-12)
        places[part] = drawn + np.array([left + radius - drawn[:, 0].min() - radius, -drawn[:, 1].min()])
        left = np.max(places[part][:, 0]) + 1.5
    alone = [part[0] for part in parts if len(part) == 1]
    columns = max(int(np.ceil(np.sqrt(len(alone)))), int(left))
    for at, server in enumerate(alone):
        places[server] = (at % columns, -1.5 - at // columns)
    return places


def is_ring_in_order(size: int, pairs: np.ndarray) -> bool:
    """Tell whether each server shares a choice with the next in table order, and the last with the first."""
    if size < 3 or not len(pairs):
        return False
    low, high = pairs.min(axis=1), pairs.max(axis=1)
    steps = set(low[high - low == 1].tolist())
    return len(steps) == size - 1 and bool(((low == 0) & (high == size - 1)).any())


def _circle(size: int) -> np.ndarray:
    angle = np.pi / 2 - 2 * np.pi * np.arange(size) / size
    return np.column_stack([np.cos(angle), np.sin(angle)])


def _wave(size: int) -> np.ndarray:
    """Return places at equal steps along a closed wave, whose length grows with their number."""
    waves = max(8, round(size * STEP / (4 * HEIGHT)))
    turn = np.linspace(0, 2 * np.pi, 200 * waves + 1)
    radius = 1 + HEIGHT * np.cos(waves * turn)
    line = np.column_stack([radius * np.sin(turn), radius * np.cos(turn)])
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(line, axis=0).T))])
    wanted = along[-1] * np.arange(size) / size
    return np.column_stack([np.interp(wanted, along, line[:, 0]), np.interp(wanted, along, line[:, 1])])


def _component(graph: nx.Graph, part: list[int]) -> np.ndarray:
    start = dict(zip(part, _circle(len(part)), strict=True))
    if len(part) <= STRESS_AT_MOST:
        found = nx.kamada_kawai_layout(graph, pos=start)
    else:
        found = nx.spring_layout(graph, pos=start, iterations=100, seed=0)
    return _upright(np.array([found[server] for server in part]))


def _upright(places: np.ndarray) -> np.ndarray:
    """Turn a drawing that is much longer than wide so that it stands: names find room beside it."""
    centred = places - places.mean(axis=0)
    _, lengths, axes = np.linalg.svd(centred, full_matrices=False)
    if len(places) < 2 or lengths[0] < 2 * lengths[-1]:
        return centred
    longest = axes[0] * (1 if (centred @ axes[0])[0] >= 0 else -1)
    return np.column_stack([centred @ np.array([longest[1], -longest[0]]), centred @ longest])
