"""Which colour, marker and dashes a rule or a network has: the same in every figure."""

import hashlib
from collections.abc import Iterable, Mapping
from typing import Any

from labkit.engine.trace_runs import AS_PLACED
from labkit.figures.style import (
    BLACK,
    BLUE,
    COLOURS,
    GREEN,
    INDIGO,
    PURPLE,
    ROSE,
    VERMILLION,
    WINE,
)
from labkit.text import name_part

MARKERS = ("o", "s", "^", "D", "v", "P", "X", "*")
DASHES: tuple = (
    "-",
    (0, (5, 1.5)),
    (0, (1.5, 1)),
    (0, (6, 1.5, 1.5, 1.5)),
    (0, (3, 1)),
    (0, (8, 2)),
    (0, (1, 2)),
    (0, (4, 1, 1, 1, 1, 1)),
)

# Purple is left for rules of the user's own; black is for marks to compare with, not rules to choose.
RULES = {
    "least-loaded": (BLUE, 0),
    "one-choice": (VERMILLION, 1),
    "static-split": (GREEN, 2),
    "mixed": (ROSE, 3),
    "smooth-feedback": (WINE, 4),
    "tree-flow": (INDIGO, 5),
    "pairwise-averaging": (BLACK, 6),
    AS_PLACED: (BLACK, 7),
}
NETWORKS = {
    "ring": (BLUE, 0),
    "ladder": (VERMILLION, 1),
    "torus": (GREEN, 2),
    "random-regular": (ROSE, 3),
    "ring-with-chords": (WINE, 4),
    "complete": (INDIGO, 5),
    "hypercube": (PURPLE, 6),
    "your fleet": (BLACK, 7),
    "a ring": (BLUE, 0),
    "a complete network": (INDIGO, 5),
}


def looks(names: Iterable[str]) -> dict[str, dict[str, Any]]:
    """Return colour, marker and linestyle for each rule.

    Built-in rules always have the same ones. A rule with parameters has the colour of its kind, with a marker
    and dashes of its own. The first rule of the user's own is always purple; more of them take the
    colours of built-in rules that this figure lacks.

    Parameters
    ----------
    names : iterable of str
        Rules by name, as tables have them.
    """
    return _looks(names, RULES)


def looks_of_networks(names: Iterable[str]) -> dict[str, dict[str, Any]]:
    """Return colour, marker and linestyle for each network, as `looks` does for rules."""
    return _looks(names, NETWORKS)


def _looks(names: Iterable[str], known: Mapping[str, tuple[str, int]]) -> dict[str, dict[str, Any]]:
    wanted = sorted(set(names), key=lambda name: (name not in known, name))
    kinds = {name: known.get(name) or known.get(name_part(name) or "") for name in wanted}
    taken = {kind[0] for kind in kinds.values() if kind}
    free = [PURPLE, *(colour for colour in COLOURS if colour not in {*taken, PURPLE})]
    unknown = [name for name in wanted if kinds[name] is None]
    colours = {name: free[at % len(free)] for at, name in enumerate(unknown)}
    used: set[tuple[str, int]] = set()
    found = {}
    for name in wanted:
        kind = kinds[name]
        colour = kind[0] if kind else colours[name]
        shape = kind[1] if kind and name in known else _first_free(name, colour, used)
        used.add((colour, shape))
        found[name] = {
            "color": colour,
            "marker": MARKERS[shape],
            "linestyle": DASHES[shape],
        }
    return {name: found[name] for name in sorted(found)}


def _first_free(name: str, colour: str, used: set[tuple[str, int]]) -> int:
    """Return a shape that depends on the name alone, unless another name of the figure has it.

    Where all shapes are taken, one that no other name of this colour has.
    """
    first = hashlib.sha256(name.encode("utf-8", "replace")).digest()[0]
    places = [(first + step) % len(MARKERS) for step in range(len(MARKERS))]
    taken, alike = {shape for _, shape in used}, {shape for each, shape in used if each == colour}
    free = [place for place in places if place not in taken]
    return next(iter([*free, *(place for place in places if place not in alike), places[0]]))
