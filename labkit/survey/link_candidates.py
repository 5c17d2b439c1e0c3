"""Which pairs of servers may become links: the candidates given, or all pairs near each other."""

from collections.abc import Iterable
from typing import Any

import numpy as np
import pandas as pd

from labkit.compiled import kept
from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet
from labkit.survey.link_tables import named, positions
from labkit.survey.link_walks import pairs_near
from labkit.survey.split import split_of

# Default pairs that are still worked through: on a balanced fleet each is worked out on its own.
MOST_PAIRS, MOST_BALANCED_PAIRS = 5_000_000, 200_000


def read_candidates(fleet: Fleet, candidates: Any) -> tuple[np.ndarray, np.ndarray]:
    """Return the positions of the first and second servers of the candidate pairs, int32, in table order."""
    first, second = positions(fleet, _pair_table(candidates), "candidates")
    low, high = np.minimum(first, second), np.maximum(first, second)
    key = low * fleet.size + high
    _, order, count = np.unique(key, return_index=True, return_counts=True)
    if (count > 1).any():
        row = int(np.flatnonzero(~np.isin(np.arange(len(key)), order))[0])
        earlier = int(np.flatnonzero(key == key[row])[0])
        raise InputError(
            f"candidates row {row + 1}: {named(fleet, first[row], second[row])} stood before, in row "
            f"{earlier + 1}; give each pair once."
        )
    two = np.flatnonzero((fleet.options[:, 2:] == ABSENT).all(axis=1))
    ends = np.sort(fleet.options[two, :2].astype(np.int64), axis=1)
    there = np.flatnonzero(np.isin(key, ends[:, 0] * fleet.size + ends[:, 1]))
    if len(there):
        row = int(there[0])
        choice = two[np.flatnonzero((ends[:, 0] == low[row]) & (ends[:, 1] == high[row]))[0]]
        raise InputError(
            f"candidates row {row + 1}: {named(fleet, first[row], second[row])} is a choice already, choices "
            f"row {choice + 1}; give pairs that are not yet a choice."
        )
    return first.astype(np.int32), second.astype(np.int32)


def _pair_table(candidates: Any) -> pd.DataFrame:
    rule = "give pairs of server names, or a table with the columns option_1 and option_2"
    if isinstance(candidates, pd.DataFrame):
        for column in ("option_1", "option_2"):
            if column not in candidates:
                raise InputError(f"candidates has no column {column!r}; {rule}.")
        table = candidates[["option_1", "option_2"]]
    else:
        if isinstance(candidates, str) or not isinstance(candidates, Iterable):
            raise InputError(f"candidates is {candidates!r}; {rule}.")
        pairs = list(candidates)
        for row, pair in enumerate(pairs):
            if not isinstance(pair, tuple | list | np.ndarray) or len(pair) != 2:
                raise InputError(f"candidates row {row + 1} is {pair!r}; {rule}.")
        table = pd.DataFrame(
            {
                "option_1": pd.Series([pair[0] for pair in pairs], dtype=object),
                "option_2": pd.Series([pair[1] for pair in pairs], dtype=object),
            }
        )
    if len(table) == 0:
        raise InputError(f"candidates is empty; {rule}, or leave it out for all pairs nearby.")
    return table


class Pool:
    """The pairs that may still become links.

    Parameters
    ----------
    fleet : Fleet
        The fleet that default pairs are near in.
    given : tuple of int32 arrays, or None
        Positions of the servers of the candidates.
    distance : int
        Most choices between the servers of a default pair.
    """

    def __init__(self, fleet: Fleet, given: tuple[np.ndarray, np.ndarray] | None, distance: int) -> None:
        self.fleet, self.distance, self.given = fleet, distance, given
        self.gone: set[tuple[int, int]] = set()

    def drop(self, one: int, other: int) -> None:
        """Take a pair out."""
        self.gone.add((min(one, other), max(one, other)))

    def across(self, inside: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return the pairs with one end inside, that end first."""
        if self.given is None:
            starts = np.flatnonzero(inside).astype(np.int32)
            return self._without_gone(*self._near(starts, inside, MOST_PAIRS))
        first, second = self._without_gone(*self.given)
        one_in = inside[first] != inside[second]
        first, second = first[one_in], second[one_in]
        return np.where(inside[first], first, second), np.where(inside[first], second, first)

    def all(self) -> tuple[np.ndarray, np.ndarray]:
        """Return all pairs."""
        if self.given is None:
            everyone = np.arange(self.fleet.size, dtype=np.int32)
            none = np.zeros(self.fleet.size, bool)
            return self._without_gone(*self._near(everyone, none, MOST_BALANCED_PAIRS))
        return self._without_gone(*self.given)

    def _near(self, starts: np.ndarray, inside: np.ndarray, most: int) -> tuple[np.ndarray, np.ndarray]:
        split = split_of(self.fleet)

        def listed(first: np.ndarray, second: np.ndarray) -> int:
            table = split.servers, split.head, split.following
            return int(kept(pairs_near)(starts, self.distance, inside.copy(), most, *table, first, second))

        pairs = listed(np.empty(0, np.int32), np.empty(0, np.int32))
        if pairs > most:
            raise InputError(
                f"candidates are not given, and more than {most:,} pairs of servers are at most "
                f"{self.distance} choices apart; give the links that could be built as candidates."
            )
        first, second = np.empty(pairs, np.int32), np.empty(pairs, np.int32)
        listed(first, second)
        order = np.lexsort((second, first))
        return first[order], second[order]

    def _without_gone(self, first: np.ndarray, second: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        if not self.gone:
            return first, second
        gone = np.array([one * self.fleet.size + other for one, other in self.gone])
        key = np.minimum(first, second).astype(np.int64) * self.fleet.size + np.maximum(first, second)
        stays = ~np.isin(key, gone)
        return first[stays], second[stays]
