"""The fluid limit: how loads are spread when any servers may share a choice, as their number grows.

With d options drawn from all servers the share s_i of servers that hold at least i tasks obeys ds_i/dt =
s_{i-1}^d - s_i^d (Mitzenmacher, "Studying balanced allocations with differential equations", Combin. Probab.
Comput. 8, 1999). It ends as a wave that moves by one task a unit of time.
"""

import numpy as np

STEPS = 40  # of the solution, a round
PHASES = 20  # of a round


def wave(options: int, authority: float) -> np.ndarray:
    """Return the settled wave.

    Parameters
    ----------
    options : int
        Options of a choice.
    authority : float
        Share of the tasks that go to the least loaded; the others to any option.

    Returns
    -------
    float64 array, shape (PHASES, 2 half + 1)
        At PHASES moments of a round, the share of servers whose load is at least i - half above the whole
        part of the mean load; half is so large that nothing is beyond.
    """
    half, rounds = int(np.ceil(50.0 / authority)), int(np.ceil(60.0 / authority**2))
    share = np.zeros(2 * half + 1)
    share[: half + 1] = 1.0
    found = np.empty((PHASES, share.size))

    def change(at: np.ndarray) -> np.ndarray:
        rate = authority * at**options + (1.0 - authority) * at
        before = np.concatenate([[1.0], rate[:-1]])
        return before - rate

    # All servers are equal at first; a round later the window moves on by one task.
    step = 1.0 / STEPS
    for round_number in range(rounds + 1):
        for number in range(STEPS):
            if round_number == rounds and number % (STEPS // PHASES) == 0:
                found[number // (STEPS // PHASES)] = share
            one = change(share)
            two = change(share + 0.5 * step * one)
            three = change(share + 0.5 * step * two)
            four = change(share + step * three)
            share = np.clip(share + step / 6.0 * (one + 2.0 * two + 2.0 * three + four), 0.0, 1.0)
        share = np.concatenate([share[1:], [0.0]])
    return found


def law_of_gap(shares: np.ndarray, servers: int) -> tuple[np.ndarray, np.ndarray]:
    """Return values of the gap and their probabilities for a number of servers, over all phases of a round.

    Servers are taken as independent: P(highest < i) = (1 - s_i)^servers.
    """
    below = np.exp(servers * np.log1p(-np.minimum(shares, 1.0 - 1e-16)))
    # P(highest = i - 1) = P(highest < i) - P(highest < i - 1)
    mass = np.diff(below, axis=1)
    load = np.arange(shares.shape[1] - 1) - shares.shape[1] // 2
    mean = np.arange(PHASES)[:, None] / PHASES
    return (load[None, :] - mean).ravel(), (mass / mass.sum()).ravel()


def variance_of_load(shares: np.ndarray) -> float:
    """Return the variance of a server's load, over all phases of a round."""
    load = np.arange(shares.shape[1] - 1) - shares.shape[1] // 2
    mass = -np.diff(shares, axis=1)
    mean = mass @ load
    return float(np.mean(mass @ load**2 - mean**2))
