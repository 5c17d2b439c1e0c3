"""A check finds each fault in a rule that has just that one, and none in a rule that has none."""

import re
import sys
import types

import numba
import numpy as np
import pytest

import labkit as lk
from labkit.trials.stages import cases_of, stages

calls: list[int] = []
memory = np.zeros(1, np.int64)
settings = types.ModuleType("settings")
LEAST = 1


def step():
    calls.append(1)
    return len(calls)


def remember():
    memory[0] += 1
    return memory[0]


@numba.njit
def toss():
    return np.random.random()  # noqa: NPY002


# Sound rules: the laws of the built-in ones. Pairwise averaging moves placed work and is no placement rule.
SHARES = np.array([0.3, 0.8, 0.5, 0.6, 0.2])
TILT = np.array([0.5, -0.5, 0.25, -0.25, 0.0])


@numba.njit
def lowest(options, loads, capacity, coin):
    ties = 1
    best = 0
    for position in range(1, len(options)):
        mine = loads[options[position]] * capacity[options[best]]
        other = loads[options[best]] * capacity[options[position]]
        ties = ties + 1 if mine == other else 1 if mine < other else ties
        best = position if mine < other else best
    wanted = int(coin * ties)
    for position in range(len(options)):
        if (
            loads[options[position]] * capacity[options[best]]
            == loads[options[best]] * capacity[options[position]]
        ):
            if wanted == 0:
                return position
            wanted -= 1
    return best


def like_one_choice(options, loads, capacity, coin):
    total = 0.0
    for option in options:
        total += capacity[option]
    left = coin * total
    for position in range(len(options) - 1):
        left -= capacity[options[position]]
        if left < 0:
            return position
    return len(options) - 1


def like_least_loaded(options, loads, capacity, coin):
    return lowest(options, loads, capacity, coin)


def like_ties_first(options, loads, capacity, coin):
    best = 0
    for position in range(1, len(options)):
        if loads[options[position]] * capacity[options[best]] < (
            loads[options[best]] * capacity[options[position]]
        ):
            best = position
    return best


def like_mixed(options, loads, capacity, coin):
    if coin < 0.5:
        return lowest(options, loads, capacity, 2 * coin)
    return int((2 * coin - 1) * len(options))


def like_static_split(options, loads, capacity, coin):
    return 0 if coin < SHARES[options[0] % 5] else 1


def like_smooth_feedback(options, loads, capacity, coin):
    best = 0
    for position in range(1, len(options)):
        mine = loads[options[position]] / capacity[options[position]] + TILT[options[position] % 5]
        if mine < loads[options[best]] / capacity[options[best]] + TILT[options[best] % 5]:
            best = position
    return best


def like_tree_flow(options, loads, capacity, coin):
    half = len(loads) // 2
    difference = loads[:half].sum() - loads[half:].sum()
    fuller = difference > 0
    for position in range(len(options)):
        if (options[position] < half) != fuller:
            return position
    return int(coin * len(options))


SOUND = [
    like_one_choice,
    like_least_loaded,
    like_ties_first,
    like_mixed,
    like_static_split,
    like_smooth_feedback,
    like_tree_flow,
]


@pytest.mark.parametrize("function", SOUND, ids=lambda each: each.__name__)
def test_the_laws_of_the_built_in_rules_are_sound(function):
    found = lk.check_policy(lk.policy(function))
    assert found.sound, found
    assert sum(tasks for _, tasks in found.tried) == 2_100
    assert ("beyond the options of a task: whoever" in found.notes[0]) == (function is like_tree_flow)
    assert any("inside lowest" in each for each in found.unseen) == ("lowest" in function.__code__.co_names)


def beyond(options, loads, capacity, coin):
    return 2 if loads[options[0]] > 20 else 0


def below(options, loads, capacity, coin):
    return -1 if len(options) == 3 else 0


def a_server(options, loads, capacity, coin):
    return options[0] if loads[options[0]] < loads[options[1]] else options[1]


def third_option(options, loads, capacity, coin):
    return 1 if loads[options[2]] < loads[options[0]] else 0


def stops(options, loads, capacity, coin):
    if loads[options[0]] > 10**8:
        raise ValueError("too full")
    return 0


def tosses(options, loads, capacity, coin):
    return 1 if toss() < 0.02 else 0


def alternates(options, loads, capacity, coin):
    with numba.objmode(turn="int64"):
        turn = step()
    return turn % 2


def remembers(options, loads, capacity, coin):
    with numba.objmode(turn="int64"):
        turn = remember()
    return 1 if turn % 50 == 0 else 0


def by_address(options, loads, capacity, coin):
    return (loads.ctypes.data // 8) % 2


def unset(options, loads, capacity, coin):
    if coin > 0.01:
        picked = 1
    return picked


def unsigned(options, loads, capacity, coin):
    return 1 if options[0] - options[1] > 0 else 0  # never below 0


def endless(options, loads, capacity, coin):
    while loads[options[0]] == 13:
        pass
    return 0


def writes(options, loads, capacity, coin):
    memory[0] += 1
    return memory[0] % 2


def fraction(options, loads, capacity, coin):
    return coin


OTHERWISE = "picks otherwise for the same task"
FAULTS = [
    (beyond, ["picks outside the options"], r"no position within options; the first time 2, for options"),
    (below, ["picks outside the options"], "the first time -1, for options"),
    (a_server, ["picks outside the options"], "not a server; a task may have"),
    (third_option, ["looks beyond an array"], "third-option looked beyond the end of an array: index is out"),
    (stops, ["stops with an error"], "stops failed with ValueError: too full; the first time for options"),
    (tosses, [OTHERWISE], r"picked otherwise for \d+ of 2,100 tasks right afterwards and for \d+"),
    (alternates, ["keeps something between tasks", OTHERWISE], r"this changed outside it: step\.calls\."),
    (remembers, ["keeps something between tasks", OTHERWISE], r"outside it: remember\.memory\."),
    (by_address, ["depends on where its arrays lie in memory"], "at another place in memory it picked"),
    (unset, ["means something else compiled"], "the first time UnboundLocalError instead of"),
    (unsigned, ["means something else compiled"], "As plain Python it picked otherwise"),
    (endless, ["does not come to an end"], "for more than 100,000 lines"),
    (
        writes,
        ["cannot be compiled"],
        r"writes into memory, an array from outside \(line 2: memory\[0\] \+= 1\)",
    ),
    (fraction, ["cannot be compiled"], r"It returns a number with a fraction \(float64\)\."),
]


@pytest.mark.parametrize(
    ("function", "faults", "words"), FAULTS, ids=lambda each: getattr(each, "__name__", "")
)
def test_each_fault_is_found_alone(function, faults, words):
    found = lk.check_policy(lk.policy(function))
    assert not found.sound
    assert [finding.fault for finding in found.findings] == faults
    told = " ".join(f"{finding.seen} {finding.remedy}" for finding in found.findings)
    assert re.search(words, told), told


class TestOutside:
    """What is fixed when a rule is compiled, and changes afterwards."""

    def test_a_number_that_changed_after_the_first_use(self, monkeypatch):
        @lk.policy
        def patient(options, loads, capacity, coin):
            return 1 if loads[options[1]] + LEAST <= loads[options[0]] else 0

        assert lk.check_policy(patient).sound
        monkeypatch.setitem(globals(), "LEAST", 3)
        found = lk.check_policy(patient)
        assert [finding.fault for finding in found.findings] == ["reads what has changed since"]
        assert "hold other values now: LEAST." in found.findings[0].seen
        assert lk.check_policy(lk.policy(patient.function)).sound

    def test_an_array_that_changed_after_the_first_use(self):
        table = np.arange(20)

        @lk.policy
        def by_table(options, loads, capacity, coin):
            return table[options[0]] % 2

        assert "Taken from outside, with the values at its first use: table." in str(
            lk.check_policy(by_table)
        )
        table[3] = 8
        assert "hold other values now: table." in lk.check_policy(by_table).findings[0].seen

    def test_what_a_module_holds_under_another_name_is_seen_by_compiling_again(self):
        settings.LIMIT = 2

        @lk.policy
        def limited(options, loads, capacity, coin):
            held = settings
            return 1 if loads[options[0]] > held.LIMIT else 0

        assert lk.check_policy(limited).sound
        settings.LIMIT = 30
        assert [each.fault for each in lk.check_policy(limited).findings] == [
            "depends on when it was compiled"
        ]


def test_a_fault_that_only_the_users_fleet_shows_needs_the_fleet():
    @lk.policy
    def of_four(options, loads, capacity, coin):
        return 9 if len(options) == 5 else 0

    without = lk.check_policy(of_four)
    assert without.sound
    assert any("lk.check_policy(rule, fleet)" in each for each in without.unseen)
    found = lk.check_policy(of_four, lk.complete(9, options=5))
    assert found.tried[-1] == ("the given fleet of 9 servers", 300)
    assert [finding.fault for finding in found.findings] == ["picks outside the options"]
    assert not any("lk.check_policy(rule, fleet)" in each for each in found.unseen)
    large = lk.check_policy(lk.policy(like_ties_first), lk.ring(200_000))
    assert large.sound
    assert large.tried[-1][1] < 40


def test_the_report_reads_as_text_and_as_a_page_and_a_debugger_keeps_its_trace():
    def trace(frame, event, argument):
        return None

    rule = lk.policy(beyond)
    before = sys.gettrace()
    sys.settrace(trace)
    try:
        found = lk.check_policy(rule)
        kept = sys.gettrace()
    finally:
        sys.settrace(before)
    assert kept is trace
    text = repr(found)
    assert text == repr(lk.check_policy(rule))
    assert text.startswith("Rule beyond: 1 fault found.\n\n  picks outside the options\n")
    assert "    To do: Return a position from 0 to len(options) - 1" in text
    assert "8,400 were compared" in text
    assert max(map(len, text.splitlines())) <= 100
    page = found._repr_html_()
    assert "<strong>Rule beyond: 1 fault found.</strong>" in page
    assert page.count("<tr>") == 2


@pytest.mark.parametrize(
    ("rule", "sentence"),
    [
        ("beyond", "rule is 'beyond'; give a rule of your own"),
        (beyond, "rule is <function beyond"),
        (lk.LeastLoaded(), "rule is the built-in policy least-loaded; give a rule of your own"),
    ],
)
def test_what_is_no_own_rule_is_refused(rule, sentence):
    with pytest.raises(lk.InputError, match=sentence):
        lk.check_policy(rule)


def test_a_fleet_that_is_none_is_refused():
    with pytest.raises(lk.InputError, match="fleet is str; give a labkit Fleet"):
        lk.check_policy(lk.policy(below), "demo")


def test_stages_cover_what_they_say():
    rng = np.random.default_rng(1)
    made = {stage.words: list(cases_of(stage, lambda case: 0, rng)) for stage in stages()}
    counts = {words: {len(case.options) for case in cases} for words, cases in made.items()}
    assert counts["two and three options mixed, 6 servers"] == {2, 3}
    assert counts["any three of 7 servers"] == {3}
    everything = [case for cases in made.values() for case in cases]
    coins = [case.coin for case in everything]
    assert min(coins) == 0
    assert max(coins) == 1 - 2.0**-53
    assert {case.loads.dtype.kind for case in everything} == {"i", "f"}
    assert all(not array.flags.writeable for case in everything for array in case[:3])
    late = made["loads up to 20 tasks old, ring of 8"]
    assert [int(case.loads.sum()) for case in late[:60]] == [0] * 20 + [20] * 20 + [40] * 20
