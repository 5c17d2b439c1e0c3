"""Replicates are added until a mean is known well enough, and no bit depends on how they were batched."""

import itertools
import math

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.analysis.precision import relative_width
from labkit.analysis.stopping import stopping_rule

MOMENTS = (10, 40)
POLICIES = ("one-choice", "least-loaded")


def gaps(replicates, policy, spread=0.3):
    """Return what a policy measures in these replicates, each from its own stream."""
    return [
        1 + spread * np.random.default_rng((r, len(policy))).standard_normal(len(MOMENTS)) for r in replicates
    ]


def table(first, count, order=("policy", "replicate", "tasks"), spreads=(0.3, 0.1)):
    numbers = range(first, first + count)
    rows = [
        {"policy": policy, "replicate": number, "tasks": tasks, "gap": gap}
        for policy, spread in zip(POLICIES, spreads, strict=True)
        for number, both in zip(numbers, gaps(numbers, policy, spread), strict=True)
        for tasks, gap in zip(MOMENTS, both, strict=True)
    ]
    frame = pd.DataFrame(rows)
    rank = {
        name: frame[name].map({value: at for at, value in enumerate(frame[name].unique())}) for name in order
    }
    return frame.iloc[np.lexsort([rank[name] for name in reversed(order)])].reset_index(drop=True)


class Batches:
    """A batch function that remembers what it was asked for."""

    def __init__(self, make=table, **settings):
        self.make, self.settings, self.asked = make, settings, []

    def __call__(self, first, count):
        self.asked.append((first, count))
        return self.make(first, count, **self.settings)


def constant(first, count, value=2.0):
    return pd.DataFrame({"replicate": range(first, first + count), "tasks": 5, "gap": value})


def test_without_a_precision_it_is_one_batch_as_it_is():
    batches = Batches()
    found = lk.replicate_until(batches, precision=None, replicates=7, most_replicates=1)
    assert batches.asked == [(0, 7)]
    pd.testing.assert_frame_equal(found, table(0, 7), check_exact=True)


@pytest.mark.parametrize(
    "order",
    [
        ("policy", "replicate", "tasks"),
        ("policy", "tasks", "replicate"),
        ("replicate", "policy", "tasks"),
        ("tasks", "replicate", "policy"),
    ],
    ids=" ".join,
)
def test_rows_are_those_of_a_single_batch_to_the_bit(order):
    batches = Batches(order=order)
    found = lk.replicate_until(batches, precision=0.04, replicates=10, most_replicates=2000)
    assert len(batches.asked) > 2
    count = batches.asked[-1][0] + batches.asked[-1][1]
    pd.testing.assert_frame_equal(found.drop(columns="stopping"), table(0, count, order), check_exact=True)


def test_it_stops_at_the_first_look_at_which_every_group_is_precise_enough():
    batches = Batches()
    found = lk.replicate_until(batches, precision=0.05, replicates=10, most_replicates=5000)
    ends = [first + count for first, count in batches.asked]
    assert [first for first, _ in batches.asked] == [0, *ends[:-1]]
    for before, after in itertools.pairwise(ends):
        assert math.ceil(1.25 * before) <= after <= 3 * before
    for end in ends:
        rows = found[(found["replicate"] < end) & (found["tasks"] == MOMENTS[-1])]
        widths = [relative_width(group["gap"].to_numpy(), 0.95) for _, group in rows.groupby("policy")]
        assert (max(widths) <= 0.05) == (end == ends[-1])
    words = found.groupby("policy")["stopping"].unique()
    assert (words.map(len) == 1).all()
    expected = f"mean gap within 5 % at 95 %: reached with {ends[-1]} replicates: "
    assert all(text[0].startswith(expected) and text[0].endswith(" %") for text in words)
    assert words["one-choice"][0] != words["least-loaded"][0]


def test_it_ends_at_the_most_and_says_so():
    batches = Batches(spreads=(0.5, 1e-3))
    found = lk.replicate_until(batches, precision=0.01, replicates=20, most_replicates=33)
    assert sum(count for _, count in batches.asked) == 33
    words = found.groupby("policy")["stopping"].first()
    assert words["one-choice"].startswith("mean gap within 1 % at 95 %: not reached with the most, 33: ")
    assert words["least-loaded"].startswith("mean gap within 1 % at 95 %: reached with 33 replicates: ")


@pytest.mark.parametrize(
    ("value", "precision", "ending"),
    [
        (2.0, 0.5, "reached with 113 replicates: all equal"),
        (2.0, 0.01, "reached with 338 replicates: all equal"),
        (2.0, 0.001, "not reached with the most, 400: all equal"),
        (0.0, 0.5, "not reached with the most, 400: no farther from 0 than its error"),
    ],
)
def test_equal_values_are_believed_only_when_they_are_many(value, precision, ending):
    """One hundred, and three over the precision: looks here come after 10, 30, 90, 113 or 270, 338 or 400."""
    batches = Batches(constant, value=value)
    found = lk.replicate_until(batches, precision=precision, replicates=10, most_replicates=400)
    assert found["stopping"].unique().tolist() == [f"mean gap within {100 * precision:g} % at 95 %: {ending}"]


def test_a_mean_within_its_error_of_zero_is_never_precise():
    def around_zero(first, count):
        return constant(first, count).assign(gap=[(-1.0) ** number for number in range(first, first + count)])

    found = lk.replicate_until(around_zero, precision=0.9, replicates=10, most_replicates=101)
    assert len(found) == 101
    assert (
        found["stopping"].iloc[0].endswith("not reached with the most, 101: no farther from 0 than its error")
    )


def test_the_width_is_that_of_students_interval_and_a_little_more_for_skewness():
    values = np.array([1.0, 2.0, 3.0, 4.0])
    assert relative_width(values, 0.95) == pytest.approx(3.182446305 * 1.290994449 / 2 / 2.5, rel=1e-9)
    assert relative_width(values * 1e-150, 0.95) == pytest.approx(relative_width(values, 0.95), rel=1e-9)
    skewed = np.array([1.0, 1.0, 1.0, 5.0])
    plain = 3.182446305 * 2 / 2 / 2
    assert relative_width(skewed, 0.95) == pytest.approx(plain * (1 + 3 * (4 / 3) / 4), rel=1e-9)
    assert relative_width(np.full(4, 0.1), 0.95) == 0
    assert relative_width(np.zeros(4), 0.95) == math.inf


def normal(draws, count):
    return 1 + 0.3 * draws.standard_normal(count)


def gamma(draws, count):
    return draws.gamma(4, 0.25, count)


def rare(draws, count):
    return (2.0 + (draws.random(count) < 0.2)) / 2.2


@pytest.mark.parametrize("law", [normal, gamma, rare])
@pytest.mark.parametrize(("precision", "pilot"), [(0.05, 30), (0.1, 30), (0.1, 60)])
def test_intervals_cover_the_mean_as_often_as_they_say(law, precision, pilot):
    # 1,000 repetitions each of a coverage of at least 94 % fall below 91.5 % with a probability under 0.1 %
    draws = np.random.default_rng((1, pilot, round(1000 * precision)))
    rule = stopping_rule(precision, pilot, 20_000)
    covered = 0
    for _ in range(1000):
        values = law(draws, pilot)
        while True:
            width = relative_width(values, 0.95)
            count = rule.next_look(len(values), [width])
            if count is None:
                break
            values = np.concatenate([values, law(draws, count - len(values))])
        covered += abs(values.mean() - 1) <= precision * values.mean()
    assert covered >= 915


def test_analyses_take_no_stopping_for_a_label():
    def placed(first, count):
        tables = [
            lk.place(lk.ring(12), rule, tasks=240, replicates=count, first_replicate=first, rng=3).measures
            for rule in POLICIES
        ]
        return pd.concat(tables, ignore_index=True)

    measures = lk.replicate_until(placed, precision=0.05, replicates=20, most_replicates=1000)
    assert measures["stopping"].nunique() == 2
    plain = measures.drop(columns="stopping")
    pd.testing.assert_frame_equal(lk.headroom(measures, risk=0.1), lk.headroom(plain, risk=0.1))
    paired = [lk.compare(each, baseline="one-choice", rng=1) for each in (measures, plain)]
    pd.testing.assert_frame_equal(*paired)


def test_growth_is_fitted_to_sizes_that_stopped_at_different_numbers():
    draws = np.random.default_rng(5)
    parts = [
        pd.DataFrame(
            {
                "servers": size,
                "replicate": range(count),
                "gap": size**0.5 * (1 + 0.1 * draws.standard_normal(count)),
                "stopping": f"reached with {count}" if at % 2 else "not reached",
            }
        )
        for at, (size, count) in enumerate([(8, 20), (16, 30), (32, 25), (64, 40)])
    ]
    assert lk.fit_growth(pd.concat(parts), x="servers", y="gap", rng=1).table() is not None


def other_replicates(first, count):
    return table(0, count)


def one_less(first, count):
    return table(first, count - (first > 0))


def another_label(first, count):
    return table(first, count).replace("one-choice", "static-split" if first else "one-choice")


def another_column(first, count):
    return table(first, count).assign(**({"more": 1} if first else {}))


def shuffled(first, count):
    return table(first, count).sample(frac=1, random_state=1)


@pytest.mark.parametrize("make", [other_replicates, one_less, another_label, another_column, shuffled])
def test_a_batch_of_other_rows_is_refused(make):
    with pytest.raises(lk.InputError, match=r"batch\(\d+, \d+\) returned other rows than those of the rep"):
        lk.replicate_until(make, precision=0.01, replicates=10, most_replicates=2000)


@pytest.mark.parametrize(
    ("changed", "sentence"),
    [
        ({"precision": 0}, "precision is 0; give a number above 0 and below 1"),
        ({"precision": 1.0}, "precision is 1.0; give a number above 0 and below 1"),
        ({"precision": "5 %"}, "precision is '5 %'; give a finite number"),
        ({"confidence": 1}, "confidence is 1; give a number above 0 and below 1"),
        ({"replicates": 9}, "replicates is 9; with a precision the first look"),
        ({"most_replicates": 29}, "most_replicates is 29; give at least as many as replicates, 30"),
        ({"measure": "gp"}, "measures has no column 'gp'; did you mean 'gap'"),
        ({"measure": "policy"}, "of is 'policy'; name a column of measured numbers"),
        ({"batch": lambda first, count: None}, "measures is NoneType; give the DataFrame"),
        ({"batch": lambda first, count: constant(first, count, np.nan)}, "measures row 0 has gap nan"),
    ],
)
def test_what_cannot_be_is_refused(changed, sentence):
    asked = {"batch": table, "precision": 0.05, "replicates": 30, "most_replicates": 100, **changed}
    with pytest.raises(lk.InputError) as caught:
        lk.replicate_until(asked.pop("batch"), **asked)
    assert sentence in str(caught.value)
