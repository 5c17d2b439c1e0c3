"""Which of a fleet's choices the options of a task are."""

import numpy as np

from labkit.fleet.model import Fleet
from labkit.fleet.names import ABSENT


class ChoiceNumbers:
    """Finds choices by their servers, whatever the order.

    Parameters
    ----------
    fleet : Fleet
        With a table of choices. Of several choices of the same servers the first is found.
    """

    def __init__(self, fleet: Fleet) -> None:
        self.width = fleet.options.shape[1]
        self.tables: list[np.ndarray] = []
        code = self._codes(np.sort(fleet.options, axis=1), learn=True)
        self.codes, self.rows = np.unique(code, return_index=True)

    def find(self, options: np.ndarray) -> np.ndarray:
        """Return the number of each row's choice, −1 where it is none.

        Parameters
        ----------
        options : uint32 array, shape (rows, options)
            Positions of servers; absent ones are `labkit.fleet.names.ABSENT`.

        Returns
        -------
        int64 array, shape (rows,)
        """
        ordered = np.sort(options, axis=1)
        width = options.shape[1]
        if width < self.width:
            filler = np.full((len(ordered), self.width - width), ABSENT)
            ordered = np.concatenate([ordered, filler], axis=1)
        wider = (ordered[:, self.width :] != ABSENT).any(axis=1)
        code = self._codes(ordered[:, : self.width], learn=False)
        at = np.minimum(np.searchsorted(self.codes, code), len(self.codes) - 1)
        return np.where((self.codes[at] == code) & (code >= 0) & ~wider, self.rows[at], -1)

    def _codes(self, ordered: np.ndarray, *, learn: bool) -> np.ndarray:
        """Return a number for each row: servers are taken up one by one, each with what came before it."""
        code = ordered[:, 0].astype(np.int64)
        for column in range(1, ordered.shape[1]):
            pair = np.where(code < 0, -1, (code << 32) | ordered[:, column].astype(np.int64))
            if learn:
                self.tables.append(np.unique(pair))
            table = self.tables[column - 1]
            at = np.minimum(np.searchsorted(table, pair), len(table) - 1)
            code = np.where(table[at] == pair, at, -1)
        return code
