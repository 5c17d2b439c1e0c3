"""Fleets and plans that several tests use."""

import shutil

import pandas as pd

import labkit as lk

RULES = (
    "one-choice",
    "least-loaded",
    "least-loaded(ties=first)",
    "mixed(beta=0.3)",
    "static-split",
    "smooth-feedback(gain=1.5, every=7)",
    # Optimised strengths steer nothing on fleets as small as those of most tests.
    "tree-flow(strengths=equal)",
    "tree-flow(strengths=equal, leftover=coin, every=7)",
    "tree-flow(strengths=equal, response=linear)",
)


def odd_fleet():
    """Return a fleet with two to four options a choice, unequal amounts, and names a CSV must quote."""
    names = ["a,b", 'say "hi"', "two\nlines", "=cmd|' /C calc'!A0", "7", 7, "carriage\rreturn", "half \ud800"]
    servers = pd.DataFrame({"server": pd.Series(names, dtype=object), "capacity": [1, 2, 3, 2, 1, 0.5, 1, 2]})
    rows = [[0, 1, 2, 3], [1, 2], [3, 4, 5], [5, 6], [6, 7, 0], [7, 4], [2, 6], [0, 7]]
    columns = {
        f"option_{place + 1}": pd.Series(
            [names[row[place]] if place < len(row) else None for row in rows], dtype=object
        )
        for place in range(4)
    }
    demand = [1.0, 0.5, 2.0, 0.1, 1.5, 1.0, 0.0, 0.7]
    return lk.Fleet(servers, pd.DataFrame({**columns, "demand": demand}))


def two_rings():
    """Return a fleet in two connected parts, of which one gets more work a server."""
    rows = [(k, (k + 1) % 6) for k in range(6)] + [(6 + k, 6 + (k + 1) % 4) for k in range(4)]
    choices = pd.DataFrame(rows, columns=["option_1", "option_2"]).assign(demand=[1.0] * 6 + [2.0] * 4)
    return lk.Fleet(pd.DataFrame({"server": range(10)}), choices)


def copy_of(folder, place):
    """Return a copy of a written plan, to be spoilt."""
    return shutil.copytree(folder, place)
