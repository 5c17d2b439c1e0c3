"""The placement loop against the slow one, compiled and as plain Python; and the draws against NumPy's."""

import os
import subprocess
import sys
from pathlib import Path

import numba
import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk
from labkit.compiled import next_raw
from labkit.engine.arrivals import arrivals_of
from labkit.randomness import child, kernel_state, seed_sequence
from tests.engine.comparing import RULES, assert_same_path, mixed_fleet

ROOT = Path(__file__).parents[2]


@pytest.mark.parametrize("rule", RULES)
@pytest.mark.parametrize(
    ("fleet", "ahead", "every", "sized"),
    [
        (lk.ring(5), False, 0, False),
        (lk.ring(5), True, 3, False),
        (mixed_fleet(), False, 7, True),
        (mixed_fleet(), True, 0, True),
        (lk.complete(6, options=3), True, 0, False),
        (lk.complete(4, options=3, distinct=False), True, 2, False),
    ],
    ids=["ring", "ring drawn ahead", "mixed", "mixed drawn ahead", "complete", "with replacement"],
)
def test_compiled_loop_takes_the_slow_loops_path(rule, fleet, ahead, every, sized):
    sizes = np.arange(60) % 5 / 4 if sized else None
    for entropy in range(5):
        assert_same_path(fleet, rule, ahead=ahead, entropy=entropy, every=every, sizes=sizes)


@pytest.mark.parametrize(
    ("fleet", "rule"),
    [
        (lk.ring(5), "least-loaded"),
        (lk.complete(6, options=3), "least-loaded"),
        (mixed_fleet(), "mixed(beta=0.3)"),
    ],
    ids=repr,
)
def test_each_dispatcher_sees_its_own_placements_at_once(fleet, rule):
    for entropy in range(4):
        for count in (1, 2, 5):
            assert_same_path(fleet, rule, ahead=False, entropy=entropy, every=7, dispatchers=count)


def test_plain_python_loop_takes_the_slow_loops_path_on_any_fleet():
    done = subprocess.run(
        [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider", "tests/engine/any_fleet.py"],
        cwd=ROOT,
        env={**os.environ, "NUMBA_DISABLE_JIT": "1"},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert f"{2 * len(RULES)} passed" in done.stdout


@given(
    st.lists(st.just(0.0) | st.floats(1e-150, 1e6), min_size=1, max_size=60).filter(lambda d: sum(d) > 1e-3)
)
def test_alias_table_holds_the_demands(demand):
    demand = np.array(demand)
    choices = pd.DataFrame({"option_1": 0, "option_2": 1, "demand": demand})
    fleet = lk.Fleet(pd.DataFrame({"server": [0, 1]}), choices)
    law = arrivals_of(fleet)
    if law.threshold is None:
        assert np.ptp(demand) == 0
        return
    kept = np.where(law.alias == np.arange(demand.size), 1.0, law.threshold / 2**32)
    share = kept.copy()
    np.add.at(share, law.alias, 1 - kept)
    assert share / demand.size == pytest.approx(demand / demand.sum(), abs=2**-31)
    assert (share[demand == 0] == 0).all()


@numba.njit
def fill(state, out):
    """Fill an array with raw words."""
    for index in range(out.size):
        out[index] = next_raw(state)


def test_raw_words_are_numpys_own():
    seed = seed_sequence(12345)
    state = kernel_state(seed, 7, 1)
    ours = np.empty(100_000, np.uint64)
    fill(state, ours)
    theirs = np.random.SFC64(child(seed, 7, 1))
    assert np.array_equal(ours, theirs.random_raw(100_000))
    assert np.array_equal(state, theirs.state["state"]["state"])
