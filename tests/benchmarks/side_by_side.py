"""Time two things in turn and give the ratio, so that a change of the machine's speed falls on both."""

import statistics
import time
from collections.abc import Callable


def seconds(work: Callable[[], object]) -> float:
    """Return the wall time of one call."""
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def ratio(one: Callable[[], object], other: Callable[[], object], *, rounds: int = 7) -> float:
    """Return the median over rounds of time(one) / time(other), after one warm call of each."""
    one(), other()
    return statistics.median(seconds(one) / seconds(other) for _ in range(rounds))
