"""Rules that a user writes."""

import pickle
import threading
import types

import numba
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.policies.own_rule import own_rules, recorded_source, rules_named


def test_a_users_least_loaded_equals_the_built_in_one():
    @lk.policy
    def my_least_loaded(options, loads, capacity, coin):
        """Pick the emptier of two."""
        one, other = loads[options[0]] / capacity[options[0]], loads[options[1]] / capacity[options[1]]
        if one == other:
            return 1 if coin >= 0.5 else 0
        return 1 if other < one else 0

    fleet = lk.torus(6, 6)
    ours = lk.place(fleet, my_least_loaded, tasks=2_000, replicates=2, rng=3)
    assert (ours.loads == lk.place(fleet, "least-loaded", tasks=2_000, replicates=2, rng=3).loads).all()
    assert ours.measures["policy"].unique().tolist() == ["my-least-loaded"]
    assert "Pick the emptier of two." in recorded_source("my-least-loaded")
    assert "Pick the emptier of two." in my_least_loaded.__doc__


def test_two_rules_of_one_name_do_not_share_machine_code():
    def make(last):
        @lk.policy
        def edited(options, loads, capacity, coin):
            return last

        return edited

    fleet = lk.Fleet(pd.DataFrame({"server": [0, 1]}), pd.DataFrame({"option_1": [0], "option_2": [1]}))
    assert lk.place(fleet, make(0), tasks=9, rng=1).loads.tolist() == [[9, 0]]
    assert lk.place(fleet, make(1), tasks=9, rng=1).loads.tolist() == [[0, 9]]


def test_a_pick_outside_the_choice_is_refused_before_anything_is_written_there():
    @lk.policy
    def beyond(options, loads, capacity, coin):
        if loads[options[0]] >= 1_000:
            return -1
        return 2 if loads[options[0]] > 3 else 0

    with pytest.raises(
        lk.InputError, match=r"policy beyond picked a position outside the options of task \d+"
    ):
        lk.place(lk.ring(5), beyond, tasks=10_000, rng=1)
    with pytest.raises(lk.InputError, match="outside the options of task 1;"):
        lk.place(lk.ring(5), beyond, tasks=5, rng=1, start=[1_000] * 5)


def test_three_options_and_capacities_reach_the_rule():
    @lk.policy
    def largest(options, loads, capacity, coin):
        best = 0
        for position in range(1, len(options)):
            if capacity[options[position]] > capacity[options[best]]:
                best = position
        return best

    servers = pd.DataFrame({"server": list("abcd"), "capacity": [1, 5, 2, 3]})
    choices = pd.DataFrame({"option_1": ["a", "c"], "option_2": ["b", "d"], "option_3": ["d", None]})
    outcome = lk.place(lk.Fleet(servers, choices), largest, tasks=100, rng=1)
    assert outcome.loads[0, [0, 2]].tolist() == [0, 0]
    assert outcome.loads.sum() == 100


def short(options, loads):
    return 0


def drawing(options, loads, capacity, coin):
    return int(np.random.random() < 0.5)  # noqa: NPY002


LOCK = threading.Lock()


def of_lock(options, loads, capacity, coin):
    return 1 if LOCK else 0


def nothing(options, loads, capacity, coin):
    return None


def sometimes(options, loads, capacity, coin):
    if coin > 0.5:
        return 1


def half(options, loads, capacity, coin):
    return 0.5


def word(options, loads, capacity, coin):
    return "first"


def unknown(options, loads, capacity, coin):
    return no_such_thing  # noqa: F821


def beyond_options(options, loads, capacity, coin):
    return loads[options[2]] > 0


def beyond_loads(options, loads, capacity, coin):
    return loads[1_000_000_000] > 0


def changes_loads(options, loads, capacity, coin):
    loads[0] = 0
    return 0


def changes_options(options, loads, capacity, coin):
    options[0] = 7
    return 0


def changes_capacity(options, loads, capacity, coin):
    capacity[0] = 7
    return 0


def gives_up(options, loads, capacity, coin):
    if loads[options[0]] > 2:
        raise ValueError("enough")
    return 0


@pytest.mark.parametrize(
    ("function", "sentence"),
    [
        (nothing, "policy nothing returns nothing; it must return a whole number on every path"),
        (
            sometimes,
            "policy sometimes returns nothing on one of its paths; it must return a whole number",
        ),
        (half, r"policy half returns a number with a fraction \(float64\); it must return a whole number"),
        (word, "policy word returns a text; it must return a whole number"),
        (unknown, "policy unknown cannot be compiled: name 'no_such_thing' is not defined"),
        (beyond_options, "policy beyond-options looked beyond the end of an array"),
        (beyond_loads, "policy beyond-loads looked beyond the end of an array"),
        (changes_loads, "policy changes-loads cannot be compiled: it changes one of its arguments"),
        (changes_options, "policy changes-options cannot be compiled: it changes one of its arguments"),
        (changes_capacity, "policy changes-capacity cannot be compiled: it changes one of its arguments"),
        (of_lock, "policy of-lock cannot be compiled: it reads LOCK, a Python lock"),
        (gives_up, "policy gives-up failed with ValueError: enough"),
    ],
    ids=lambda value: getattr(value, "__name__", ""),
)
def test_a_rule_that_goes_wrong_is_refused_in_one_sentence(function, sentence):
    with pytest.raises(lk.InputError, match=sentence) as refusal:
        lk.place(lk.ring(8), lk.policy(function), tasks=200, rng=1)
    assert "\n" not in str(refusal.value)


@lk.policy
def recurring(options, loads, capacity, coin):
    return recurring(options, loads, capacity, coin)


@lk.policy
def by_helper(options, loads, capacity, coin):
    return asking(options, loads, capacity, coin)


@numba.njit
def asking(options, loads, capacity, coin):
    return by_helper(options, loads, capacity, coin)


@pytest.mark.parametrize("rule", [recurring, by_helper])
def test_a_rule_that_calls_itself_is_refused_in_one_sentence(rule):
    with pytest.raises(
        lk.InputError, match=r"cannot be compiled: it calls itself .*; write a loop instead\."
    ):
        lk.place(lk.ring(8), rule, tasks=2, rng=1)
    with pytest.raises(lk.InputError, match="it calls itself; write a loop instead"):
        pickle.dumps(rule)


def test_a_rule_made_without_source_text_is_told_apart_by_its_code():
    made = []
    for last in (0, 1):
        scope = {}
        exec(f"def quick(options, loads, capacity, coin):\n    return {last}\n", scope)
        made.append(lk.policy(scope["quick"]))
    assert made[0].digest != made[1].digest
    assert "no source text" in made[0].source


def test_values_from_outside_are_recorded_with_the_source():
    def make(least):
        @lk.policy
        def patient(options, loads, capacity, coin):
            return 1 if loads[options[1]] + least <= loads[options[0]] else 0

        return patient

    one, other = make(1), make(30)
    assert "# least = 30" in other.source
    assert one.digest != other.digest
    assert one(np.array([0, 1]), np.array([5, 1]), np.ones(2), 0.0) == 1


@pytest.mark.parametrize(
    ("function", "sentence"),
    [
        (
            short,
            r"takes \(options, loads\); it must take \(options, loads, capacity, coin\)",
        ),
        (lambda options, loads, capacity, coin: 0, "give it a name that begins with a letter"),
        (drawing, "draws random numbers of its own; use its argument coin instead"),
        ("least-loaded", "decorate a plain function"),
        (np.argmin, "decorate a plain function"),
    ],
)
def test_what_cannot_be_a_rule_is_refused(function, sentence):
    with pytest.raises(lk.InputError, match=sentence):
        lk.policy(function)


def generating(options, loads, capacity, coin):
    yield 0


def by_name(options, *, loads, capacity, coin):
    return 0


@pytest.mark.parametrize(
    ("function", "sentence"),
    [
        (generating, "policy generating is a generator or a coroutine; use return"),
        (by_name, r"policy by_name takes \(options, \*, loads"),
    ],
)
def test_functions_that_no_rule_can_be_are_refused(function, sentence):
    with pytest.raises(lk.InputError, match=sentence):
        lk.policy(function)


TABLE = np.array([3, 1, 2])


@numba.njit
def doubled(number):
    return FACTOR * number


FACTOR = 2


def test_arrays_and_helpers_from_outside_are_recorded_too():
    @lk.policy
    def by_table(options, loads, capacity, coin):
        return 1 if doubled(TABLE[options[0] % 3]) > 3 else 0

    assert "# TABLE = [3, 1, 2]: array of int64, 3, SHA-256 " in by_table.source
    assert (
        "#     def doubled(number):\n#         return FACTOR * number\n#     # FACTOR = 2" in by_table.source
    )


settings = types.ModuleType("settings")
settings.LIMIT = 3
settings.inner = types.ModuleType("inner")
settings.inner.SHARE = 0.5


def helper_with(default):
    @numba.njit
    def beyond(number, limit=default):
        return number > limit

    return beyond


def test_settings_of_ones_own_and_defaults_are_recorded_and_watched(monkeypatch):
    beyond = helper_with(4)

    @lk.policy
    def by_settings(options, loads, capacity, coin):
        if beyond(loads[0]) and coin < settings.inner.SHARE and coin < np.pi:
            return 0
        return 1 if loads[options[0]] > settings.LIMIT else 0

    for line in ("#     # limit = 4\n", "\n# settings.LIMIT = 3\n", "\n# settings.inner.SHARE = 0.5\n"):
        assert line in by_settings.source
    assert "np.pi =" not in by_settings.source
    pickle.dumps(by_settings)  # its first use
    assert by_settings.changed_outside() == []
    monkeypatch.setattr(settings, "LIMIT", 7)
    assert by_settings.changed_outside() == ["settings.LIMIT"]
    beyond = helper_with(5)
    assert by_settings.changed_outside() == ["beyond.limit", "settings.LIMIT"]


def test_a_name_of_an_attribute_is_not_taken_for_one_from_outside():
    @lk.policy
    def plain(options, loads, capacity, coin):
        return 1 if loads.size > 3 else 0

    plain.function.__globals__["size"] = 5
    try:
        assert "size = 5" not in lk.policy(plain.function).source
    finally:
        del plain.function.__globals__["size"]


def test_rules_of_a_notebook_are_found_and_named():
    @lk.policy
    def first_one(options, loads, capacity, coin):
        return 0

    @lk.policy
    def second_one(options, loads, capacity, coin):
        return 1

    cells = {
        "tasks": 3,
        "second_one": second_one,
        "_12": first_one,
        "first_one": first_one,
        "same": second_one,
    }
    assert own_rules(cells) == [second_one, first_one]
    assert rules_named(["least-loaded", "first-one"], cells) == [lk.LeastLoaded(), first_one]
    with pytest.raises(lk.InputError, match="policy is 'frist-one'; did you mean 'first-one'"):
        rules_named(["frist-one"], cells)
    with pytest.raises(lk.InputError, match="policy is 'mixed'; it needs beta"):
        rules_named(["mixed"], cells)
    with pytest.raises(lk.InputError, match="policy first-one is defined twice; give one"):
        own_rules({**cells, "other": lk.policy(lambda_like("first_one"))})


def lambda_like(name):
    def made(options, loads, capacity, coin):
        return 1

    made.__name__ = name
    return made


def test_a_built_in_name_is_refused():
    def one_choice(options, loads, capacity, coin):
        return 0

    with pytest.raises(lk.InputError, match="has the name of a built-in policy"):
        lk.policy(one_choice)
