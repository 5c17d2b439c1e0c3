"""When tasks arrive: a Poisson process with a constant rate, or one that changes by the time of day."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from labkit.compiled import CONFIG, kept
from labkit.engine.arrivals import arrivals_of, draw_from_all, draw_from_table
from labkit.engine.service import Batch
from labkit.engine.service_laws import ServiceLaw
from labkit.fleet.model import Fleet
from labkit.randomness import ARRIVALS, REQUIREMENTS, TIMES, generator, kernel_state

# Tasks in a batch: its arrays stay within the cache next to a core.
BATCH = 4_096


@dataclass(frozen=True)
class Rates:
    """Arrival rates of all choices together, piecewise constant and repeating.

    Attributes
    ----------
    rate : float64 array, shape (pieces,)
        Tasks a unit of time; at least one is above 0.
    length : float
        Duration of each piece, in time units; infinite for a constant rate.
    """

    rate: np.ndarray
    length: float

    @property
    def mean(self) -> float:
        """Tasks a unit of time, on average."""
        return float(self.rate.mean())


def spend(gaps, rate, length, horizon, state):
    """Turn gaps of a Poisson process of rate one into times of arrival, in place; infinite after the horizon.

    Parameters
    ----------
    gaps : float64 array, shape (tasks,), changed in place
    rate : float64 array, shape (pieces,)
    length, horizon : float
    state : float64 array, shape (3,), changed in place
        Time, number of the piece, and when the piece ends.
    """
    now, piece, end = state[0], np.int64(state[1]), state[2]
    pace = 1.0 / rate[piece]
    for index in range(gaps.size):
        step = gaps[index] * pace
        if not now + step < end:
            # Also where nothing arrives: pace is infinite, and step then infinite or not a number.
            left = gaps[index]
            while now < horizon and not now + left / rate[piece] < end:
                left -= (end - now) * rate[piece]
                now = end
                piece = (piece + 1) % rate.size
                end += length
            pace = 1.0 / rate[piece]
            step = left * pace
        # Where nobody looks, no parts of the day need be gone through.
        now = now + step if now < horizon else np.inf
        gaps[index] = now
    state[0], state[1], state[2] = now, float(piece), end


def poisson_batches(
    fleet: Fleet,
    rates: Rates,
    law: ServiceLaw,
    horizon: float,
    seed: np.random.SeedSequence,
    replicate: int,
) -> Iterator[Batch]:
    """Yield the tasks of one replicate in batches, without end; those after the horizon never arrive.

    The same replicate has the same gaps (in tasks), choices, coins and requirements whatever the rates.
    """
    arrivals = arrivals_of(fleet)
    width = arrivals.options.shape[1]
    times, needs = generator(seed, replicate, TIMES), generator(seed, replicate, REQUIREMENTS)
    words = kernel_state(seed, replicate, ARRIVALS)
    clock = np.array([0.0, 0.0, rates.length])
    nothing, ones = np.zeros(fleet.size), np.ones(BATCH)
    coins, rows = np.empty(BATCH, np.uint64), np.zeros(BATCH, np.uint64)
    # One line more is room for the open options of a task.
    options = np.empty((BATCH + 1, width), np.uint32)
    while True:
        gaps = times.standard_exponential(BATCH)
        kept(spend)(gaps, rates.rate, rates.length, horizon, clock)
        # Without the compiler unsigned words are NumPy scalars, which warn when they wrap around.
        with np.errstate(over="ignore" if CONFIG.DISABLE_JIT else "warn"):
            if arrivals.servers == 0:
                draw_from_table(
                    arrivals.options, arrivals.threshold, arrivals.alias, words, nothing, options, coins,
                    rows, BATCH,
                )  # fmt: skip
            else:
                draw_from_all(arrivals.servers, arrivals.distinct, words, nothing, options, coins, BATCH)
        yield Batch(gaps, options, coins, rows, law.draw(needs, BATCH), ones)
