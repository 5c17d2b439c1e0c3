"""Replicates keep their numbers and bits in whichever call they are placed."""

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.policies.naming import BUILT_IN

COUNTS = (3, 4)
TASKS = 90
FLEET = lk.ring(8)
POLICIES = [name if name != "mixed" else "mixed(beta=0.4)" for name in BUILT_IN]


@lk.policy
def stay_first(options, loads, capacity, coin):
    return 1 if loads[options[1]] + 2 <= loads[options[0]] else 0


def drawn(generator, count):
    return generator.exponential(size=count)


def assert_parts_make_the_whole(policy, *, cut=(), **settings):
    """Place seven replicates at once and as 3 + 4; arguments named in `cut` have a row a replicate."""
    asked = {"tasks": TASKS, "rng": 5, "checkpoints": [7, TASKS], **settings}
    once = lk.place(FLEET, policy, replicates=sum(COUNTS), **asked)
    first, parts = 0, []
    for count in COUNTS:
        own = {name: asked[name][first : first + count] for name in cut}
        parts.append(lk.place(FLEET, policy, replicates=count, first_replicate=first, **{**asked, **own}))
        assert parts[-1].replicates.tolist() == list(range(first, first + count))
        first += count
    assert np.concatenate([part.loads for part in parts]).tobytes() == once.loads.tobytes()
    for name in ("measures", "by_server"):
        joined = pd.concat([getattr(part, name) for part in parts], ignore_index=True)
        pd.testing.assert_frame_equal(joined, getattr(once, name), check_exact=True)
    assert once.measures["replicate"].unique().tolist() == list(range(sum(COUNTS)))
    assert np.ptp(once.loads, axis=0).any()


@pytest.mark.parametrize("policy", [*POLICIES, stay_first], ids=str)
def test_two_calls_are_one_longer_call_for_every_policy(policy):
    assert_parts_make_the_whole(policy)


@pytest.mark.parametrize(
    ("settings", "cut"),
    [
        ({"sizes": drawn}, ()),
        ({"sizes": np.arange(TASKS) % 5 / 4}, ()),
        ({"sizes": np.random.default_rng(1).random((7, TASKS))}, ("sizes",)),
        ({"information": lk.Snapshot(every=9)}, ()),
        ({"information": lk.Dispatchers(3, every=9)}, ()),
        ({"start": np.arange(8)}, ()),
        ({"start": np.arange(56).reshape(7, 8) % 11}, ("start",)),
        ({"start": "forecast"}, ()),
        ({"workers": 2}, ()),
    ],
    ids=[
        "sampler",
        "sizes",
        "sizes a replicate",
        "snapshot",
        "dispatchers",
        "start",
        "starts",
        "forecast",
        "workers",
    ],
)
def test_two_calls_are_one_longer_call_however_tasks_and_loads_are_given(settings, cut):
    assert_parts_make_the_whole("least-loaded", cut=cut, **settings)


@pytest.mark.parametrize(
    ("first", "sentence"),
    [
        (-1, "first_replicate is -1; give a whole number of at least 0"),
        (1.5, "first_replicate is 1.5; give a whole number of at least 0"),
        (
            2**32 - 1,
            "first_replicate is 4294967295 and replicates is 2; replicates are numbered from 0 to 4294",
        ),
    ],
)
def test_a_number_that_no_replicate_can_have_is_refused(first, sentence):
    with pytest.raises(lk.InputError) as caught:
        lk.place(lk.ring(4), "one-choice", tasks=1, replicates=2, rng=1, first_replicate=first)
    assert sentence in str(caught.value)
