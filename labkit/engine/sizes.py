"""Task sizes: a given array, or a sampler that is asked for blocks of tasks."""

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np

from labkit.errors import InputError
from labkit.randomness import SIZES, generator

# Larger sizes or loads could not be squared.
LARGEST_SIZE = 1e150

# Tasks a sampler is asked for at a time; part of the law of the bits, so it never changes with a setting.
BLOCK = 1 << 16


class Sizes:
    """Checked sizes of all tasks of a call."""

    def __init__(self, given: np.ndarray | Callable, tasks: int) -> None:
        self.given, self.tasks = given, tasks

    def blocks(
        self, seed: np.random.SeedSequence, replicate: int, row: int
    ) -> Iterator[tuple[int, int, np.ndarray]]:
        """Yield (first, last, sizes of the tasks first + 1 .. last) of a replicate, the call's row-th."""
        if isinstance(self.given, np.ndarray):
            yield 0, self.tasks, self.given if self.given.ndim == 1 else self.given[row]
            return
        draws = generator(seed, replicate, SIZES)
        for first in range(0, self.tasks, BLOCK):
            last = min(first + BLOCK, self.tasks)
            drawn = as_numbers(self._sample(draws, last - first))
            if drawn is None or drawn.shape != (last - first,):
                found = "no numbers" if drawn is None else f"shape {drawn.shape}"
                raise InputError(
                    f"sizes(generator, {last - first}) returned {found}; return one size a task."
                )
            _refuse_bad(drawn)
            yield first, last, np.array(drawn, np.float64)

    def _sample(self, draws: np.random.Generator, count: int) -> Any:
        assert callable(self.given)
        try:
            return self.given(draws, count)
        except InputError:
            raise
        except Exception as error:
            raise InputError(
                f"sizes(generator, {count}) failed with {type(error).__name__}: {error}; give a function of "
                "a NumPy Generator and a number of tasks that returns that many sizes."
            ) from error


def sizes_of(sizes: Any, tasks: int, replicates: int) -> Sizes | None:
    """Check `sizes` as `place` takes them; None stands for unit tasks."""
    if sizes is None:
        return None
    if callable(sizes):
        return Sizes(sizes, tasks)
    given = numbers_for("sizes", sizes, tasks, replicates, "tasks", ", or a function sizes(generator, count)")
    _refuse_bad(given)
    return Sizes(np.array(given, np.float64), tasks)


def numbers_for(
    name: str, given: Any, count: int, replicates: int, items: str, otherwise: str = ""
) -> np.ndarray:
    """Return `given` as an array of one number an item, or one row of them a replicate; else refuse it."""
    array = as_numbers(given)
    if array is None or array.shape not in ((count,), (replicates, count)):
        found = type(given).__name__ if array is None else f"numbers of shape {array.shape}"
        raise InputError(
            f"{name} is {found}; give one number for each of the {count} {items} (or one row of them "
            f"for each replicate){otherwise}."
        )
    return array


def as_numbers(given: Any) -> np.ndarray | None:
    """Return an array of real numbers, or None when that is not what was given."""
    try:
        array = np.asarray(given)
    except (TypeError, ValueError):
        return None
    return array if array.dtype.kind in "iuf" else None


def _refuse_bad(sizes: np.ndarray) -> None:
    bad = ~((sizes >= 0) & (sizes <= LARGEST_SIZE))
    if bad.any():
        place = np.argwhere(bad)[0]
        found = f"sizes holds {sizes[tuple(place)]} for task {place[-1] + 1}"
        raise InputError(f"{found}; sizes are from 0 to {LARGEST_SIZE:g}.")
