"""The optimum, as the engine needs it: for any amount of work."""

import math
import weakref

from labkit.fleet.model import Fleet
from labkit.survey.demand import total_demand
from labkit.survey.fair import top_of_profile

# The two proofs of the optimum, a split and a set of servers, may differ by this share.
AGREEMENT = 1e-9
_KNOWN: weakref.WeakKeyDictionary[Fleet, float] = weakref.WeakKeyDictionary()


def optimum_of_unit_work(fleet: Fleet) -> float:
    """Return the optimum utilisation for one unit of total demand.

    Returns
    -------
    float
        NaN when demands and capacities are so far apart that double precision cannot prove it to 1e-9.
    """
    if fleet.implicit is not None:
        return 1.0 / fleet.total_capacity
    if fleet not in _KNOWN:
        top = top_of_profile(fleet)
        proved = abs(top.agreement()) <= AGREEMENT
        _KNOWN[fleet] = top.optimum / total_demand(fleet) if proved else math.nan
    return _KNOWN[fleet]
