"""Random streams: one seed sequence in, one independent stream for every replicate and purpose out.

Replicate ``r`` of a run draws from ``SeedSequence(entropy, spawn_key=(*key, r, stream))``. Arrivals, the
coins of a policy, task sizes, which dispatcher gets a task, and starts are separate streams, so that every
policy meets the same arrivals.
"""

from typing import Any

import numpy as np

from labkit.checks import check_whole
from labkit.errors import InputError

ARRIVALS, COINS, SIZES, TURNS, STARTS = 0, 1, 2, 3, 4
TIMES, REQUIREMENTS, FAILURES, MOVES = 5, 6, 7, 8
# A larger number would take two words of a spawn key and could meet a key of another depth.
MOST_REPLICATES = 2**32
BIT_GENERATOR = "SFC64"
DRAWS = (
    "one raw 64-bit word an arrival, multiplied by the number of choices to 128 bits: the high half is the "
    "choice, the low half the coin; unequal demands by an alias table with 32-bit thresholds on the low "
    "half, whose place above or below the threshold is then the coin, to 32 bits; fleets without a table of "
    "choices take one word an option"
)


def seed_sequence(rng: Any) -> np.random.SeedSequence:
    """Normalise `rng` to a seed sequence.

    Parameters
    ----------
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        An int or a SeedSequence gives the same streams at every call. A Generator is advanced, so that two
        calls with the same Generator differ.

    Raises
    ------
    InputError
        When `rng` is none of these.
    """
    if isinstance(rng, np.random.SeedSequence):
        return rng
    if isinstance(rng, np.random.Generator):
        return np.random.SeedSequence([int(word) for word in rng.integers(0, 2**32, size=4)])
    if isinstance(rng, int | np.integer) and not isinstance(rng, bool) and rng >= 0:
        return np.random.SeedSequence(int(rng))
    raise InputError(f"rng is {rng!r}; give a whole number of at least 0, a SeedSequence or a Generator.")


def child(seed: np.random.SeedSequence, replicate: int, stream: int) -> np.random.SeedSequence:
    """Return the seed sequence of one stream of one replicate."""
    return np.random.SeedSequence(seed.entropy, spawn_key=(*seed.spawn_key, replicate, stream))


def kernel_state(seed: np.random.SeedSequence, replicate: int, stream: int) -> np.ndarray:
    """Return the SFC64 state, uint64 of shape (4,), for a compiled loop; the loop changes it in place."""
    return np.random.SFC64(child(seed, replicate, stream)).state["state"]["state"].copy()


def generator(seed: np.random.SeedSequence, replicate: int, stream: int) -> np.random.Generator:
    """Return a NumPy generator on one stream of one replicate."""
    return np.random.Generator(np.random.SFC64(child(seed, replicate, stream)))


def check_replicates(first: Any, count: Any) -> tuple[int, int]:
    """Return the number of the first replicate and the count, when all have streams of their own."""
    count = check_whole("replicates", count)
    first = check_whole("first_replicate", first, least=0)
    if first + count > MOST_REPLICATES:
        raise InputError(
            f"first_replicate is {first} and replicates is {count}; replicates are numbered from 0 to "
            f"{MOST_REPLICATES - 1}, so give smaller numbers."
        )
    return first, count
