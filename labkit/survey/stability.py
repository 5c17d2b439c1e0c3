"""How much arriving work a fleet can serve at all: above the stability limit queues grow without end."""

import numpy as np

from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet, check_fleet
from labkit.survey.fair import fair_profile


def stability_limit(fleet: Fleet) -> float:
    """Return the load factor that no rule can reach, where work queues.

    The load factor is arriving work a unit of time ÷ total capacity. Each set of servers must serve the work
    that can go nowhere else, so that the limit is 1 ÷ (optimum utilisation when the work of one unit of time
    and of total capacity arrives): 1 on balanceable fleets, less where a bottleneck is.

    Parameters
    ----------
    fleet : Fleet

    Returns
    -------
    float
        Above 0, at most 1.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.stability_limit(lk.ring(12))
    1.0
    """
    check_fleet(fleet)
    highest = float(fair_profile(fleet).of_unit_work.max() * fleet.total_capacity)
    return min(1.0, 1.0 / highest)


def even_split_limit(fleet: Fleet, availability: float = 1.0, *, requeued: bool = False) -> tuple[float, int]:
    """Return the load factor from which on one-choice overloads a server, and the server's position.

    Parameters
    ----------
    fleet : Fleet
    availability : float
        Share of the time that a server is up, each on its own. While a server is up it also gets what would
        have gone to options that are down. That is exact for choices of two; of more options each counts as
        always up, which is too high a limit.
    requeued : bool
        Tasks of a server that is down go to other options; else they wait for its return. The limit is then
        one that must not be reached, but may be too high, since requeued tasks start anew.
    """
    if fleet.implicit is not None:
        return availability, 0
    present = fleet.options != ABSENT
    capacity = np.ones(fleet.size) if fleet.capacity is None else fleet.capacity
    share = np.where(present, capacity[np.where(present, fleet.options, 0)], 0.0)
    share /= share.sum(axis=1, keepdims=True)
    up, down = availability, 1.0 - availability
    pairs = present.sum(axis=1, keepdims=True) == 2
    more = up * share + down if requeued else (up**2 * share + up * down + down**2 * share) / up
    share = np.where(pairs & present, more, share)
    demand = np.ones(len(share)) if fleet.demand is None else fleet.demand
    received = np.zeros(fleet.size)
    np.add.at(received, fleet.options[present], (share * demand[:, None])[present])
    received /= capacity
    fullest = int(np.argmax(received))
    limit = demand.sum() / (float(received[fullest]) * fleet.total_capacity)
    return min(availability, limit), fullest


def bottleneck_words(fleet: Fleet, most: int = 4) -> str:
    """Return the servers of the bottleneck in words, the first few by name."""
    names = fleet.names.take(fair_profile(fleet).bottleneck).tolist()
    if len(names) == len(fleet):
        return "all servers"
    shown = ", ".join(repr(name) for name in names[:most])
    return shown + (f" and {len(names) - most} more" if len(names) > most else "")


def highest_load_factor(
    fleet: Fleet, *, even_split: bool, availability: float = 1.0, requeued: bool = False
) -> float:
    """Return the load factor that a rule cannot reach: one-choice's own, or that of every rule."""
    limit = stability_limit(fleet) * availability
    return min(limit, even_split_limit(fleet, availability, requeued=requeued)[0]) if even_split else limit


def refuse_unstable(
    fleet: Fleet, load_factor: float, *, even_split: bool, availability: float = 1.0, requeued: bool = False
) -> None:
    """Refuse a load factor at which queues would grow without end.

    Parameters
    ----------
    fleet : Fleet
    load_factor : float
    even_split : bool
        The rule splits each choice's demand in proportion to capacity, whatever the loads.
    availability : float
        Mean share of the time that a server is up, where no work of a server that is down is lost.
    requeued : bool
        Tasks of a server that is down go to other options.

    Raises
    ------
    InputError
        The sentence names the limit and the servers that set it.
    """
    limit = stability_limit(fleet) * availability
    up = "" if availability == 1.0 else f" with servers up {100 * availability:.4g} % of the time"
    if load_factor >= limit:
        optimum = "1 ÷ the optimum utilisation" if limit < availability else "its whole capacity"
        raise InputError(
            f"load_factor is {load_factor:g}; the fleet's stability limit{up} is {limit:.6g}, {optimum}, "
            f"set by {bottleneck_words(fleet)}; give less, add capacity there, or give a limit of places."
        )
    if even_split:
        own, fullest = even_split_limit(fleet, availability, requeued=requeued)
        if load_factor >= own:
            raise InputError(
                f"load_factor is {load_factor:g}; one-choice overloads server "
                f"{fleet.names.take([fullest]).tolist()[0]!r} from {own:.6g} on{up} (other rules: "
                f"{limit:.6g}); give less or another rule."
            )
