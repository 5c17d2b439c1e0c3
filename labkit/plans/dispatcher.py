"""Reference dispatcher for the plan in a folder: standard-library Python only, to be read and ported.

`python dispatcher.py PLAN_FOLDER` checks the plan's own test vectors. Floats have 64 bits, and their sums are
taken term by term, in order (unlike Python's sum()): so any language makes the same decisions to the bit.
"""

import csv
import hashlib
import json
import sys
from itertools import accumulate
from pathlib import Path


class Dispatcher:
    """Picks servers, by their numbers, as the plan in a folder says; `loads` are the loads it knows of."""

    def __init__(self, folder):
        self.folder = Path(folder)
        self.header = json.loads((self.folder / "plan.json").read_bytes())
        if self.header["schema_version"] != 1:
            raise ValueError(f"its schema version is {self.header['schema_version']}, not 1")
        self.rule, self.settings = self.header["policy"]["rule"], self.header["policy"]["parameters"]
        self.tables = {name: self.table(name) for name in self.header["files"]}
        servers, choices = self.tables["servers.csv"], self.tables["choices.csv"]
        self.names, self.weight = [name.removeprefix("'") for name in servers["name"]], servers["weight"]
        options, bounds = ([choices[c] for c in choices if kind in c] for kind in ("option_", "bound_"))
        self.options = [[one for one in row if one is not None] for row in zip(*options, strict=True)]
        self.bounds = [[one for one in row if one is not None] for row in zip(*bounds, strict=True)]
        self.paths, self.pairs = [[] for _ in self.names], [{} for _ in self.options]
        for server, *step in zip(*self.tables.get("paths.csv", {}).values(), strict=True):
            self.paths[server].append(step)
        for choice, first, second, *push in zip(*self.tables.get("pushes.csv", {}).values(), strict=True):
            self.pairs[choice].setdefault((first, second), []).append(push)
        self.refresh([0] * len(self.names))

    def table(self, name):
        """Return one of the plan's tables, column by column: numbers, None where blank, and texts."""
        content = (self.folder / name).read_bytes()
        if hashlib.sha256(content).hexdigest() != self.header["files"][name]["sha256"]:
            raise ValueError(f"{name} is not as it was written")
        rows = csv.reader(content.decode("utf-8", "surrogatepass").splitlines(keepends=True))
        table = {column: texts for column, *texts in zip(*rows, strict=True)}
        for column in table.keys() - {"name", "kind", "own"}:
            table[column] = json.loads(f"[{','.join(text or 'null' for text in table[column])}]")
        return table

    def refresh(self, loads=None):
        """Work out anew, from the loads known or those given, what the rule keeps of the whole fleet."""
        self.loads = self.loads if loads is None else list(loads)
        if self.rule == "smooth-feedback":
            self._smooth(self.tables["servers.csv"], self.tables["vertices.csv"], self.tables["shares.csv"])
        if self.rule == "tree-flow":
            self.difference = [0.0] * len(self.tables["sets.csv"]["slope"])
            for server, number, step in zip(*self.tables["paths.csv"].values(), strict=True):
                self.difference[number] += step * self.loads[server]

    def add(self, server, size=1, fresh=True):
        """Count a task placed on a server; `fresh` unless other dispatchers place tasks of their own."""
        self.loads[server] += size
        for number, step in self.paths[server] if fresh and self.settings.get("keeps_up") else ():
            self.difference[number] += step * size

    def pick(self, choice, coin, own=None):
        """Return a task's server; the iterator `own` gives words of the rule's own stream."""
        options, bounds = self.options[choice], list(self.bounds[choice]) if self.bounds else None
        looks = _unit(next(own)) < self.settings["beta"] if self.rule == "mixed" else self.settings["looks"]
        word = next(own) >> 32 if self.rule == "tree-flow" and looks else 0
        for (first, second), sets in self.pairs[choice].items():
            push = sum(int(most * self._pull(number)) for number, most in sets)
            if looks and word < abs(push):
                return options[second if push > 0 else first]
            word -= abs(push)
            for place in range(first, second) if bounds else ():
                bounds[place] -= (push >> 1) / 2**32
        if looks:
            return self._tilted(options, coin) if self.settings.get("width") else self._least(options, coin)
        if bounds is None:
            return options[coin * len(options) >> 64]
        return options[sum(bound <= _unit(coin) * bounds[-1] for bound in bounds[:-1])]

    def _smooth(self, servers, vertices, shares):
        *_, work = accumulate(self.loads, initial=0.0)
        field = [load - due * work for load, due in zip(self.loads, servers["due"], strict=True)]
        beyond, total = [0.0] * len(field), [0.0] * (len(field) + 1)
        for server, part in enumerate(servers["part"]):
            beyond[part] += field[server]
        known = zip(field, *(servers[c] for c in ("room", "part", "part_room")), strict=True)
        field = [x - room * (beyond[part] / whole) if whole else 0.0 for x, room, part, whole in known]
        for number, strength in enumerate(self.tables["shifts.csv"]["strength"], 1):
            x, pivots = [*field, 0.0], vertices[f"pivot_{number}"]
            joined = [*zip(shares["vertex"], shares["far"], shares[f"share_{number}"], strict=True)]
            for vertex, far, share in joined:
                x[far] += share * x[vertex]
            x = [value / by if by else 0.0 for value, by in zip(x, pivots, strict=True)]
            for vertex, far, share in reversed(joined):
                x[vertex] += share * x[far]
            total = [value + strength * (more - x[-1]) for value, more in zip(total, x, strict=True)]
        self.tilt = [value * scale for value, scale in zip(total, servers["scale"], strict=False)]

    def _pull(self, number):
        apart, slope = self.difference[number], self.tables["sets.csv"]["slope"][number]
        return (apart > 0.0) - (apart < 0.0) if slope is None else max(-1.0, min(1.0, apart * slope))

    def _apart(self, amount, one, other):
        return amount[one] * self.weight[other] - amount[other] * self.weight[one]

    def _least(self, options, coin, amount=None):
        amount, best = amount or self.loads, options[0]
        for server in options[1:]:
            best = server if self._apart(amount, server, best) < 0.0 else best
        level = [server for server in options if self._apart(amount, server, best) == 0.0]
        ties = len(level) - level.index(best)  # rounding may have let earlier ones into `level`
        return best if coin is None or self.settings.get("ties") == "first" else level[coin * ties >> 64]

    def _tilted(self, options, coin):
        tilt, weight, width = self.tilt, self.weight, self.settings["width"]
        tilted = {server: self.loads[server] + tilt[server] for server in options}
        if len(options) == 2:
            tilted[options[0]] += (_unit(coin) - 0.5) * width * (self._apart(self.loads, *options) == 0.0)
            return self._least(options, coin, tilted)
        best, bids = self._least(options, None, tilted), {}
        for server in options:
            coin = (coin * 6364136223846793005 + 1442695040888963407) % 2**64
            bids[server] = tilt[server] / weight[server] + (_unit(coin) - 0.5) * width / weight[best]
        return min((s for s in options if self._apart(self.loads, s, best) == 0.0), key=bids.__getitem__)


def _unit(word):
    return (word >> 11) * 2.0**-53


def check(folder):
    """Return how many decisions the plan's test vectors hold, once all were made as the plan says."""
    served = Dispatcher(folder)
    for row, report, choice, coin, own, server in zip(*served.tables["vectors.csv"].values(), strict=True):
        if report:
            served.refresh(served.tables["vectors_loads.csv"][f"report_{report}"])
        picked = served.pick(choice, coin, map(int, own.split()))
        if picked != server:
            raise ValueError(f"decision {row} picks server {picked}, the plan says {server}")
        served.add(picked)
    return row


if __name__ == "__main__":
    try:
        print(f"{sys.argv[1]}: all {check(sys.argv[1])} decisions are made as the plan says")
    except (OSError, IndexError, KeyError, ValueError) as error:
        sys.exit(f"{' '.join(sys.argv[1:]) or 'usage: python dispatcher.py PLAN_FOLDER'}: {error}")
