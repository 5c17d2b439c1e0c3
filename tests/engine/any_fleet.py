"""Any small fleet against the slow loop, path by path on the same random words.

Compiling every combination of branches would take minutes, so `test_against_reference` runs this file with
the loop left as plain Python, and itself compares one compiled fleet of each kind.
"""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import labkit as lk
from tests.engine.comparing import RULES, assert_same_path


@st.composite
def fleets(draw):
    """Draw a small fleet: two to four options a choice, equal or unequal capacities and demands."""
    size = draw(st.integers(2, 7))
    width = draw(st.integers(2, min(size, 4)))
    if draw(st.integers(0, 4)) == 0:
        return lk.complete(size, options=width, distinct=draw(st.booleans()))
    count = draw(st.integers(1, 9))
    rows = [
        draw(st.lists(st.integers(0, size - 1), min_size=2, max_size=width, unique=True))
        for _ in range(count)
    ]
    choices = pd.DataFrame([row + [None] * (width - len(row)) for row in rows], dtype="Int64")
    choices.columns = [f"option_{position + 1}" for position in range(width)]
    servers = pd.DataFrame({"server": range(size)})
    if draw(st.booleans()):
        servers["capacity"] = draw(st.lists(st.integers(1, 4), min_size=size, max_size=size))
    if draw(st.booleans()):
        demand = draw(st.lists(st.sampled_from([0.0, 0.5, 1.0, 3.7]), min_size=count, max_size=count))
        choices["demand"] = demand if sum(demand) > 0 else 1.0
    return lk.Fleet(servers, choices)


@pytest.mark.parametrize("ahead", [False, True], ids=["as drawn", "drawn ahead"])
@pytest.mark.parametrize("rule", RULES)
@settings(max_examples=40)
@given(
    fleet=fleets(),
    entropy=st.integers(0, 2**40),
    every=st.sampled_from([0, 1, 3, 7]),
    dispatchers=st.sampled_from([0, 0, 3]),
    sized=st.booleans(),
    started=st.booleans(),
)
def test_every_task_goes_where_the_slow_loop_puts_it(
    rule, ahead, fleet, entropy, every, dispatchers, sized, started
):
    dispatchers = dispatchers if every else 0
    sizes = np.arange(60) % 5 / 4 if sized else None
    start = np.arange(fleet.size) % 3 if started else None
    assert_same_path(
        fleet,
        rule,
        ahead=ahead,
        entropy=entropy,
        every=every,
        sizes=sizes,
        start=start,
        dispatchers=dispatchers,
    )
