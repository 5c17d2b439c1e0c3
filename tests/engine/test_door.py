"""Arguments that `place` refuses, each in one sentence."""

import re

import numpy as np
import pytest

import labkit as lk

RING = lk.ring(4)


@pytest.mark.parametrize(
    ("changed", "sentence"),
    [
        ({"fleet": "ring"}, "fleet is str; give a labkit Fleet"),
        ({"policy": "least-loded"}, "policy is 'least-loded'; did you mean 'least-loaded'"),
        ({"policy": "mixed"}, "it needs beta"),
        ({"policy": "mixed(beta=2)"}, "beta is 2; give a number from 0 to 1"),
        ({"policy": "mixed(gamma=0.5)"}, "with 'gamma=0.5'"),
        ({"policy": "one-choice(beta=1)"}, "it takes no parameters"),
        ({"policy": "least-loaded(ties=last)"}, "ties is 'last'"),
        ({"policy": 7}, "policy is 7; give a policy or its name"),
        ({"tasks": 0}, "tasks is 0; give a whole number of at least 1"),
        ({"tasks": 10.5}, "tasks is 10.5; give a whole number"),
        ({"tasks": True}, "tasks is True; give a whole number"),
        ({"replicates": -1}, "replicates is -1"),
        ({"workers": "two"}, "workers is 'two'"),
        ({"rng": None}, "rng is None; give a whole number"),
        ({"rng": -3}, "rng is -3"),
        ({"checkpoints": [3, 2]}, "checkpoints is [3, 2]; give increasing whole numbers"),
        ({"checkpoints": [1, 11]}, "from 1 to the number of tasks, 10"),
        ({"checkpoints": [0.5]}, "checkpoints is [0.5]"),
        ({"checkpoints": []}, "checkpoints is []"),
        ({"sizes": np.ones(9)}, "sizes is numbers of shape (9,); give one number for each of the 10 tasks"),
        ({"sizes": [1.0] * 9 + [-1.0]}, "sizes holds -1.0 for task 10"),
        ({"sizes": [np.nan] * 10}, "sizes holds nan for task 1"),
        ({"sizes": [np.inf] * 10}, "sizes holds inf for task 1"),
        ({"sizes": lambda generator, count: np.ones(3)}, "returned shape (3,)"),
        ({"sizes": [[1, 2], [3]]}, "sizes is list; give one number for each of the 10 tasks"),
        ({"sizes": lambda generator, count: ["a"] * count}, "returned no numbers; return one size a task"),
        ({"sizes": lambda generator, count: 1j * np.ones(count)}, "returned no numbers"),
        ({"sizes": lambda count: np.ones(count)}, "failed with TypeError"),
        ({"checkpoints": 5}, "checkpoints is 5; give increasing whole numbers"),
        ({"tasks": 2**63}, "tasks is 9.223e+18; give a whole number of at most"),
        ({"policy": "mixed(beta=0.5, beta=0.7)"}, "give beta once"),
        ({"start": [[1, 2], [3]]}, "start is list; give one number for each"),
        (
            {"start": [2**63 - 1] * 4},
            "start holds the load 9223372036854775807; give finite loads of at most",
        ),
        ({"start": [1e300] * 4, "sizes": np.ones(10)}, "start holds the load 1e+300"),
        ({"start": [np.nan] * 4}, "start holds the load nan"),
        ({"information": "fresh"}, "information is 'fresh'; give lk.Fresh()"),
        ({"start": [1, 2, 3]}, "start is numbers of shape (3,); give one number for each of the 4 servers"),
        ({"start": [0.5, 0, 0, 0]}, "start holds loads that are not whole"),
        ({"start": [-1, 0, 0, 0]}, "start holds the load -1"),
    ],
)
def test_bad_arguments_get_one_sentence(changed, sentence):
    arguments = {"fleet": RING, "policy": "least-loaded", "tasks": 10, "rng": 1} | changed
    with pytest.raises(lk.InputError, match=re.escape(sentence)) as refusal:
        lk.place(arguments.pop("fleet"), arguments.pop("policy"), **arguments)
    assert "\n" not in str(refusal.value)


def test_a_snapshot_needs_a_period_and_a_whole_one_where_work_stays():
    with pytest.raises(lk.InputError, match="every is 0; give a number above 0"):
        lk.Snapshot(every=0)
    with pytest.raises(lk.InputError, match=r"every is 0\.5; give a whole number"):
        lk.place(RING, "least-loaded", tasks=10, rng=1, information=lk.Snapshot(every=0.5))


def test_a_misspelt_argument_is_an_error():
    with pytest.raises(TypeError, match="task"):
        lk.place(RING, "least-loaded", task=10, rng=1)


def test_a_generator_is_advanced_and_an_int_is_not():
    generator = np.random.default_rng(1)
    first, second = (lk.place(RING, "one-choice", tasks=400, rng=generator).loads for _ in range(2))
    assert (first != second).any()
    again = lk.place(RING, "one-choice", tasks=400, rng=np.random.default_rng(1)).loads
    assert (first == again).all()


@pytest.mark.parametrize(
    ("count", "every", "refusal"),
    [
        (0, 5, "count is 0; give a whole number of at least 1"),
        (2, 0, "every is 0; give a number above 0"),
        (2.5, 5, "count is 2.5; give a whole number"),
        (5_000, 5, "count is 5000; give at most 4,096 dispatchers"),
    ],
)
def test_dispatchers_that_cannot_be(count, every, refusal):
    with pytest.raises(lk.InputError, match=refusal):
        lk.Dispatchers(count=count, every=every)
