"""How much arriving work a fleet can serve at all: above the stability limit queues grow without end."""

import numpy as np

from labkit.compiled import kept
from labkit.errors import InputError
from labkit.fleet.model import Fleet, check_fleet
from labkit.survey.demand import split_evenly, total_demand
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


def even_split_limit(fleet: Fleet) -> tuple[float, int]:
    """Return the load factor at which one-choice overloads a server, and the server's position."""
    if fleet.implicit is not None:
        return 1.0, 0
    capacity, demand = (np.empty(0) if given is None else given for given in (fleet.capacity, fleet.demand))
    received = np.zeros(fleet.size)
    kept(split_evenly)(fleet.options, demand, capacity, received)
    total = total_demand(fleet) if fleet.demand is not None else float(len(fleet.options))
    fullest = int(np.argmax(received))
    return min(1.0, total / (float(received[fullest]) * fleet.total_capacity)), fullest


def bottleneck_words(fleet: Fleet, most: int = 4) -> str:
    """Return the servers of the bottleneck in words, the first few by name."""
    names = fleet.names.take(fair_profile(fleet).bottleneck).tolist()
    if len(names) == len(fleet):
        return "all servers"
    shown = ", ".join(repr(name) for name in names[:most])
    return shown + (f" and {len(names) - most} more" if len(names) > most else "")


def highest_load_factor(fleet: Fleet, *, even_split: bool) -> float:
    """Return the load factor that a rule cannot reach: one-choice's own, or that of every rule."""
    limit = stability_limit(fleet)
    return min(limit, even_split_limit(fleet)[0]) if even_split else limit


def refuse_unstable(fleet: Fleet, load_factor: float, *, even_split: bool, availability: float = 1.0) -> None:
    """Refuse a load factor at which queues would grow without end.

    Parameters
    ----------
    fleet : Fleet
    load_factor : float
    even_split : bool
        The rule splits each choice's demand in proportion to capacity, whatever the loads.
    availability : float
        Mean share of the time that a server is up, where no work of a server that is down is lost.

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
        # While a server is down, its tasks go to others that are up: its own availability cancels.
        own, fullest = even_split_limit(fleet)
        if load_factor >= own:
            raise InputError(
                f"load_factor is {load_factor:g}; one-choice overloads server "
                f"{fleet.names.take([fullest]).tolist()[0]!r} from {own:.6g} on (other rules: "
                f"{limit:.6g}{up}); give less or another rule."
            )
