"""Task sizes: a given array, or a sampler that is asked for blocks of tasks."""

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np

from labkit.errors import InputError
from labkit.randomness import SIZES, generator

# Tasks a sampler is asked for at a time; part of the law of the bits, so it never changes with a setting.
BLOCK = 1 << 16


class Sizes:
    """Checked sizes of all tasks of a call."""

    def __init__(self, given: np.ndarray | Callable, tasks: int) -> None:
        self.given, self.tasks = given, tasks

    def blocks(self, seed: np.random.SeedSequence, replicate: int) -> Iterator[tuple[int, int, np.ndarray]]:
        """Yield (first, last, sizes of the tasks first + 1 .. last) of one replicate."""
        if isinstance(self.given, np.ndarray):
            yield 0, self.tasks, self.given if self.given.ndim == 1 else self.given[replicate]
            return
        draws = generator(seed, replicate, SIZES)
        for first in range(0, self.tasks, BLOCK):
            last = min(first + BLOCK, self.tasks)
            drawn = np.ascontiguousarray(self.given(draws, last - first), dtype=np.float64)
            if drawn.shape != (last - first,):
                raise InputError(
                    f"sizes(generator, {last - first}) returned shape {drawn.shape}; return one size a task."
                )
            _refuse_bad(drawn)
            yield first, last, drawn


def sizes_of(sizes: Any, tasks: int, replicates: int) -> Sizes | None:
    """Check `sizes` as `place` takes them; None stands for unit tasks."""
    if sizes is None:
        return None
    if callable(sizes):
        return Sizes(sizes, tasks)
    given = np.asarray(sizes)
    if given.shape not in ((tasks,), (replicates, tasks)) or given.dtype.kind not in "iuf":
        raise InputError(
            f"sizes has shape {given.shape} and type {given.dtype}; give {tasks} numbers, one for each task "
            "(or one row of them for each replicate), or a function sizes(generator, count)."
        )
    given = np.ascontiguousarray(given, dtype=np.float64)
    _refuse_bad(given)
    return Sizes(given, tasks)


def _refuse_bad(sizes: np.ndarray) -> None:
    bad = ~(np.isfinite(sizes) & (sizes >= 0))
    if bad.any():
        place = np.argwhere(bad)[0]
        raise InputError(
            f"sizes holds {sizes[tuple(place)]} for task {place[-1] + 1}; sizes are finite and at least 0."
        )
