"""Smooth feedback: least-loaded, tilted by a smoothed picture of the whole fleet."""

from typing import Any

import numpy as np

from labkit.checks import check_positive, check_whole
from labkit.compiled import borrowed, inlined
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.policies.base import Policy
from labkit.survey.fair import fair_profile
from labkit.survey.modes import slow_modes

GAIN, MOST_GAIN = 0.2, 100.0
# Default refresh: this many tasks a server. Slow patterns take far longer to form.
ROUNDS = 8
# A mode for so many servers, and the most there are: faster ones are the local rule's business.
SERVERS_A_MODE, MOST_MODES = 8, 256
MOST_NUMBERS = 10**8  # in the table of patterns, which is kept twice


@inlined
def tilted(seen, inverse, tilt, server):
    """Return the utilisation of a server plus its tilt."""
    return seen[server] * inverse[server] + tilt[server]


def choose(state, seen, weights, options, row, count, choice, coin, own):  # noqa: D103
    tilt = borrowed(state[0])
    inverse = borrowed(state[1])
    lowest = tilted(seen, inverse, tilt, np.uint64(options[row, np.uint64(0)]))
    if count == 2:
        level = tilted(seen, inverse, tilt, np.uint64(options[row, np.uint64(1)]))
        return np.uint64(level < lowest) | (np.uint64(level == lowest) & (coin >> np.uint64(63)))
    picked = np.uint64(0)
    for position in range(1, count):
        level = tilted(seen, inverse, tilt, np.uint64(options[row, np.uint64(position)]))
        # Equal sums are rare, but for an empty fleet; each later one has a bit of the coin for itself.
        bit = (coin >> np.uint64(64 - position)) & np.uint64(1)
        below = np.uint64(level < lowest) | (np.uint64(level == lowest) & bit)
        picked = np.uint64(position) if below else picked
        lowest = min(level, lowest)
    return picked


def renew(state, seen):
    """Work out the tilt of every server from the loads seen."""
    tilt, inverse, fair, root, pattern, turned, strength, amount = state
    work = 0.0
    for server in range(seen.size):
        work += seen[server]
    amount[:] = 0.0
    for server in range(seen.size):
        beyond = (seen[server] * inverse[server] - fair[server] * work) * root[server]
        for mode in range(amount.size):
            amount[mode] += pattern[server, mode] * beyond
    tilt[:] = 0.0
    for mode in range(amount.size):
        pull = amount[mode] * strength[mode]
        for server in range(tilt.size):
            tilt[server] += turned[mode, server] * pull
    for server in range(tilt.size):
        tilt[server] /= root[server]


class SmoothFeedback(Policy):
    """Place on the option with the lowest utilisation plus tilt; tilts come from the whole fleet.

    The tilt of a server is a smoothed copy of how far it and its surroundings are above their fair level:
    gain × L^(-1/2) (load − fair load), L the demand-weighted Laplacian. Under least-loaded alone, differences
    between far parts of a sparse fleet level out slowly, and the gap grows like the square root of its size
    on a ring; with the tilt it grows like the logarithm.

    Parameters
    ----------
    gain : float
        Strength of the tilt, above 0. The gap hardly depends on it between 0.1 and 0.4.
    every : int, optional
        Tilts are worked out anew just before the tasks 1, every + 1, ...; default 8 tasks a server.
    modes : int, optional
        How many of the slowest patterns are steered, or all where there are fewer; default one for 8
        servers, at most 256.

    Notes
    -----
    A dispatcher needs the present loads of the two options and a table of one number a server. L^(-1/2) is
    half-way between the local rule (gradient of the loads) and full rebalancing (gradient of L^(-1) applied
    to them); it solves the linear-quadratic control problem dx = B'Qb dt + noise, minimising E[x'x + r b'Qb].
    The control enters as an offset of the comparison, so that none of the local rule's authority is lost.
    """

    choose = staticmethod(choose)
    renew = staticmethod(renew)

    def __init__(self, gain: float = GAIN, every: int | None = None, modes: int | None = None) -> None:
        self.gain = check_positive("gain", gain)
        if self.gain > MOST_GAIN:
            raise InputError(f"gain is {gain!r}; give a number of at most {MOST_GAIN:g}.")
        self.every = None if every is None else check_whole("every", _whole(every))
        self.modes = None if modes is None else check_whole("modes", _whole(modes))

    @property
    def name(self) -> str:
        """The policy in words, with the parameters that are not at their defaults."""
        given = {"gain": self.gain if self.gain != GAIN else None, "every": self.every, "modes": self.modes}
        inside = ", ".join(f"{name}={value!r}" for name, value in given.items() if value is not None)
        return f"smooth-feedback({inside})" if inside else "smooth-feedback"

    def renewal(self, fleet: Fleet) -> int:
        """Return after how many tasks the tilts are worked out anew."""
        return ROUNDS * fleet.size if self.every is None else self.every

    def prepare(self, fleet: Fleet) -> tuple[Any, ...]:
        """Return tilts, 1 ÷ capacity, fair shares, and the modes in both memory orders."""
        if fleet.implicit is not None:
            raise InputError(
                "policy smooth-feedback needs a table of choices; on a complete fleet there is nothing far "
                "apart to steer, so use least-loaded."
            )
        count = max(1, min(fleet.size // SERVERS_A_MODE, MOST_MODES)) if self.modes is None else self.modes
        if count * fleet.size > MOST_NUMBERS:
            most = MOST_NUMBERS // fleet.size
            raise InputError(f"modes is {count:,}; with {fleet.size:,} servers give at most {most:,}.")
        modes = slow_modes(fleet, count)
        capacity = np.ones(fleet.size) if fleet.capacity is None else fleet.capacity
        mean = fleet.total_capacity / fleet.size
        return (
            np.zeros(fleet.size),
            1.0 / capacity,
            fair_profile(fleet).of_unit_work,
            np.sqrt(capacity / mean),
            modes.pattern,
            np.ascontiguousarray(modes.pattern.T),
            self.gain / np.sqrt(modes.rate),
            np.empty(modes.rate.size),
        )

    def own_state(self, state: tuple[Any, ...]) -> tuple[Any, ...]:
        """Return the state with arrays of its own where `renew` writes."""
        return (state[0].copy(), *state[1:-1], state[-1].copy())


def _whole(value: Any) -> Any:
    """Return a whole number that was written as text, and so read as a float, as an int."""
    return int(value) if isinstance(value, float) and value.is_integer() else value
