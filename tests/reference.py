"""A slow, obvious placement loop in plain Python integers: the oracle for the compiled one.

It shares no code with the engine: raw words come from NumPy's own SFC64, products are Python integers.
"""

import itertools
from fractions import Fraction

import numpy as np

WORD = 1 << 64


def words(entropy: int, replicate: int, stream: int, key: tuple[int, ...] = ()):
    """Yield NumPy's raw outputs of one stream."""
    bits = np.random.SFC64(np.random.SeedSequence(entropy, spawn_key=(*key, replicate, stream)))
    while True:
        yield int(bits.random_raw())


def arrival(fleet, stream, table):
    """Return the options (server positions), the choice's row and the coin of the next arrival."""
    if fleet.implicit is not None:
        law, taken, coin = fleet.implicit, [], 0
        for _ in range(law.options):
            pool = [s for s in range(law.servers) if s not in taken] if law.distinct else range(law.servers)
            product = next(stream) * len(pool)
            taken.append(pool[product // WORD])
            coin = product % WORD
        return taken, None, coin
    product = next(stream) * len(fleet.options)
    row, coin = product // WORD, product % WORD
    if table is not None:
        threshold, alias = table
        bound = int(threshold[row])
        if coin >> 32 < bound:
            coin = coin // bound << 32
        else:
            coin = (coin - (bound << 32)) // ((1 << 32) - bound) << 32
            row = int(alias[row])
    return [int(s) for s in fleet.options[row] if s != 0xFFFFFFFF], row, coin


def pick(rule, fleet, options, row, seen, coin, own):
    """Return the position that a built-in rule picks."""
    capacity = [1.0] * fleet.size if fleet.capacity is None else fleet.capacity
    share = Fraction(coin >> 11, 1 << 53)
    if rule[0] == "mixed":
        looks = (next(own) >> 11) * 2.0**-53 < rule[1]
        rule = ("least-loaded", "random") if looks else ("one-choice",)
    if rule[0] == "static-split":
        if len(rule[1]):
            passed = list(itertools.accumulate(rule[1][row]))
            return sum(passed[position] <= float(share) * passed[-1] for position in range(len(options) - 1))
        rule = ("one-choice",)
    if rule[0] == "one-choice":
        if fleet.capacity is None:
            return coin * len(options) // WORD
        target = float(share) * sum(capacity[s] for s in options)
        passed = list(itertools.accumulate(capacity[server] for server in options[:-1]))
        return sum(target >= value for value in passed)
    level = [Fraction(float(seen[s])) / Fraction(float(capacity[s])) for s in options]
    tied = [position for position, value in enumerate(level) if value == min(level)]
    return tied[0] if rule[1] == "first" else tied[coin * len(tied) // WORD]


def level_out(fleet, loads, options):
    """Share the work of some servers in the ratio of their capacities."""
    capacity = [1.0 if fleet.capacity is None else fleet.capacity[server] for server in options]
    shared = sum(loads[server] for server in options) / sum(capacity)
    for server, room in zip(options, capacity, strict=True):
        loads[server] = shared * room


def place(
    fleet, rule, *, tasks, replicate, entropy, table=None, sizes=None, every=0, start=None, dispatchers=0
):
    """Return the loads after each task: list of arrays."""
    loads = np.zeros(fleet.size) if start is None else np.array(start, float)
    arrivals, own = words(entropy, replicate, 0), words(entropy, replicate, 1)
    history = []
    # What each dispatcher sees; without several of them all see the same.
    seen = [loads.copy() for _ in range(max(dispatchers, 1))]
    turns = words(entropy, replicate, 3)
    for task in range(tasks):
        if every == 0 or task % every == 0:
            seen = [loads.copy() for _ in seen]
        options, row, coin = arrival(fleet, arrivals, table)
        turn = next(turns) * dispatchers // WORD if dispatchers else 0
        amount = 1 if sizes is None else sizes[task]
        if rule[0] == "pairwise-averaging":
            loads[options[0]] += amount
            level_out(fleet, loads, options)
        else:
            picked = pick(rule, fleet, options, row, seen[turn], coin, own)
            loads[options[picked]] += amount
            if dispatchers:
                seen[turn][options[picked]] += amount
        history.append(loads.copy())
    return history


def measures(fleet, loads):
    """Return the measures of one moment that need no optimum."""
    capacity = np.ones(fleet.size) if fleet.capacity is None else np.asarray(fleet.capacity)
    answer = {
        "mean_load": loads.mean(),
        "max_load": loads.max(),
        "min_load": loads.min(),
        "max_utilisation": (loads / capacity).max(),
        "gap": (loads / capacity).max() - loads.sum() / capacity.sum(),
        "load_variance": loads.var(),
    }
    if fleet.implicit is not None:
        if fleet.implicit.options != 2:
            return answer | {"edge_difference": np.nan}
        difference = np.abs(loads[:, None] - loads[None, :])
        pairs = fleet.size * (fleet.size - 1 if fleet.implicit.distinct else fleet.size)
        return answer | {"edge_difference": difference.sum() / pairs}
    demand = np.ones(len(fleet.options)) if fleet.demand is None else fleet.demand
    rows = [
        (weight, abs(loads[row[0]] - loads[row[1]]))
        for weight, row in zip(demand, fleet.options, strict=True)
        if sum(s != 0xFFFFFFFF for s in row) == 2
    ]
    total = sum(weight for weight, _ in rows)
    return answer | {"edge_difference": sum(w * d for w, d in rows) / total if total > 0 else np.nan}
