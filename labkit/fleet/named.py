"""Fleets of a family by name and size, so that a study can go through both."""

import math
from collections.abc import Callable
from typing import Any

from labkit.checks import check_member, check_whole
from labkit.errors import InputError
from labkit.fleet.families import complete, ladder, random_regular, ring, ring_with_chords, torus
from labkit.fleet.model import Fleet

# Choices a server of a random regular fleet, and servers a chord of a ring with chords.
_DEGREE, _SERVERS_A_CHORD = 4, 4


def _ladder(servers: int, rng: Any) -> Fleet:
    if servers % 2:
        raise InputError(f"servers is {servers}; a ladder has an even number: give {servers + 1}.")
    return ladder(servers // 2)


def _torus(servers: int, rng: Any) -> Fleet:
    side = math.isqrt(servers)
    if side * side != servers or side < 3:
        near = max(3, round(math.sqrt(servers)))
        raise InputError(
            f"servers is {servers}; a torus has a square number of at least 9: give {near * near}."
        )
    return torus(side, side)


_FAMILIES: dict[str, Callable[[int, Any], Fleet]] = {
    "ring": lambda servers, rng: ring(servers),
    "ladder": _ladder,
    "torus": _torus,
    "random-regular": lambda servers, rng: random_regular(servers, _DEGREE, rng=rng),
    "ring-with-chords": lambda servers, rng: ring_with_chords(servers, servers // _SERVERS_A_CHORD, rng=rng),
    "complete": lambda servers, rng: complete(servers),
}
FAMILIES = tuple(_FAMILIES)
_LEAST = {"ring": 3, "ring-with-chords": 3, "random-regular": _DEGREE + 1}


def fleet_of_family(family: str, servers: int, *, rng: Any) -> Fleet:
    """Return a fleet of a family, with unit servers and unit demands.

    Parameters
    ----------
    family : str
        "ring"; "ladder" (two paths with rungs, open ends); "torus" (a square grid, closed); "random-regular"
        (4 choices a server, drawn at random); "ring-with-chords" (one random chord for every 4 servers);
        "complete" (every two servers share a choice).
    servers : int
        Even for a ladder, a square for a torus.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Draws the choices of the two random families.

    Raises
    ------
    InputError
        When the family is unknown or has no fleet of that size.

    Examples
    --------
    >>> from labkit.fleet.named import fleet_of_family
    >>> fleet_of_family("torus", 16, rng=1)
    Fleet(16 servers, 32 choices of 2 options, capacity 1 each, demand 1 each)
    """
    check_member("family", family, FAMILIES)
    return _FAMILIES[family](check_whole("servers", servers, least=_LEAST.get(family, 2)), rng)
