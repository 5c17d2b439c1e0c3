"""Headroom against the binomial law, SciPy, and the meaning of its limits."""

import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import binom, binomtest, quantile_test

from labkit.analysis.headroom import headroom, replicates_needed
from labkit.errors import InputError, TooFewReplicates


def table(values, policy="least-loaded", tasks=10):
    return pd.DataFrame(
        {"policy": policy, "replicate": np.arange(len(values)), "tasks": tasks, "gap": values}
    )


def only(measures, **options):
    rows = headroom(measures, **options)
    assert len(rows) == 1
    return rows.iloc[0]


@pytest.mark.parametrize(
    ("risk", "confidence", "needed"),
    [
        (0.01, 0.95, 368),  # 0.99^368 = 0.02477 <= 0.025 < 0.99^367
        (0.05, 0.95, 72),
        (0.5, 0.95, 6),  # 0.5^6 = 0.0156
        (0.5, 0.5, 2),  # 0.5^2 = 0.25 exactly
        (0.99, 0.95, 368),  # the lower limit asks for as many at the other end
        (0.001, 0.99, 5296),
    ],
)
def test_replicates_needed_is_the_first_power_below_the_tail(risk, confidence, needed):
    assert replicates_needed(risk, confidence) == needed
    slowest = max(risk, 1 - risk)
    assert slowest**needed <= (1 - confidence) / 2 * (1 + 1e-9)
    assert slowest ** (needed - 1) > (1 - confidence) / 2


def test_one_replicate_fewer_is_refused_and_says_how_many():
    values = np.arange(368.0)
    assert only(table(values), risk=0.01)["upper"] == 367
    with pytest.raises(
        TooFewReplicates, match=r"367 replicates for policy 'least-loaded', tasks 10; .*at least 368"
    ):
        headroom(table(values[:-1]), risk=0.01)


@pytest.mark.parametrize("risk", [0.01, 0.05, 0.1, 0.25, 0.5, 0.8])
@pytest.mark.parametrize("replicates", [400, 517, 2000])
def test_limits_equal_those_of_scipy_quantile_test(risk, replicates):
    values = np.random.default_rng(5).gumbel(size=replicates)
    row = only(table(values), risk=risk)
    expected = quantile_test(values, q=0, p=1 - risk).confidence_interval(0.95)
    assert (row["lower"], row["upper"]) == (expected.low, expected.high)
    assert row["headroom"] == np.quantile(values, 1 - risk, method="inverted_cdf")


@settings(max_examples=200, deadline=None)
@given(
    replicates=st.integers(1, 3000),
    risk=st.sampled_from([0.001, 0.01, 0.07, 0.1, 0.3, 0.5, 0.9]),
    confidence=st.sampled_from([0.5, 0.8, 0.9, 0.95, 0.99]),
)
def test_ranks_cover_enough_and_no_closer_pair_does(replicates, risk, confidence):
    values = np.arange(1.0, replicates + 1)
    if replicates < replicates_needed(risk, confidence):
        with pytest.raises(TooFewReplicates):
            headroom(table(values), risk=risk, confidence=confidence)
        return
    row = only(table(values), risk=risk, confidence=confidence)
    law, tail = binom(replicates, 1 - risk), (1 - confidence) / 2
    lower, upper = int(row["lower"]), int(row["upper"])
    assert law.cdf(lower - 1) <= tail * (1 + 1e-9) < law.cdf(lower) * (1 + 2e-9)
    assert law.sf(upper - 1) <= tail * (1 + 1e-9) < law.sf(upper - 2) * (1 + 2e-9)
    assert lower <= row["headroom"] <= upper
    at_or_below = row["headroom"] / replicates
    assert at_or_below >= 1 - risk - 1e-9
    assert at_or_below - 1 / replicates < 1 - risk + 1e-9


@pytest.mark.parametrize("law", ["exponential", "poisson"])
def test_limits_cover_the_true_quantile_at_least_as_often_as_they_say(law):
    """False-alarm rate 1e-6: fails when coverage below 95 % is certain at that level (fixed stream)."""
    rng = np.random.default_rng(20)
    repeats, replicates, risk = 2000, 150, 0.05
    if law == "exponential":
        draws, truth = rng.exponential(size=(repeats, replicates)), -math.log(risk)
    else:
        draws, truth = (
            rng.poisson(4.0, size=(repeats, replicates)).astype(float),
            8.0,
        )  # P(X <= 8) = 0.9786 > 0.95 > P(X <= 7)
    measures = pd.DataFrame(
        {
            "policy": np.repeat([f"{k:04d}" for k in range(repeats)], replicates),
            "replicate": np.tile(np.arange(replicates), repeats),
            "tasks": 1,
            "gap": draws.ravel(),
        }
    )
    rows = headroom(measures, risk=risk)
    covered = int(((rows["lower"] <= truth) & (truth <= rows["upper"])).sum())
    assert binomtest(covered, repeats, 0.95, alternative="less").pvalue > 1e-6
    if law == "exponential":  # the exact coverage of these two ranks, from the binomial law
        values = only(table(np.arange(1.0, replicates + 1)), risk=risk)
        exact = binom.cdf(values["upper"] - 1, replicates, 0.95) - binom.cdf(
            values["lower"] - 1, replicates, 0.95
        )
        assert exact >= 0.95
        assert binomtest(covered, repeats, exact).pvalue > 1e-6


numbers = st.lists(st.floats(-1e6, 1e6), min_size=80, max_size=120)


@settings(max_examples=50, deadline=None)
@given(values=numbers, small=st.floats(0.05, 0.4), step=st.floats(0.01, 0.4))
def test_more_accepted_risk_never_needs_more_headroom(values, small, step):
    strict, loose = only(table(values), risk=small), only(table(values), risk=small + step)
    for column in ("headroom", "lower", "upper"):
        assert strict[column] >= loose[column]


@settings(max_examples=50, deadline=None)
@given(values=st.lists(st.integers(-1000, 1000), min_size=80, max_size=120), shift=st.integers(-99, 99))
def test_headroom_follows_scale_and_shift(values, shift):
    plain = only(table(np.array(values, float)), risk=0.05)
    moved = only(table(np.array(values, float) * 4 + shift), risk=0.05)
    for column in ("headroom", "lower", "upper"):
        assert moved[column] == plain[column] * 4 + shift


@settings(max_examples=20, deadline=None)
@given(order=st.permutations(range(160)))
def test_the_order_of_rows_does_not_matter(order):
    values = np.random.default_rng(3).gumbel(size=80)
    measures = pd.concat([table(values), table(values + 1, policy="one-choice")], ignore_index=True)
    pd.testing.assert_frame_equal(headroom(measures.iloc[order], risk=0.05), headroom(measures, risk=0.05))


def test_labels_in_columns_or_in_the_index_give_the_same_rows(draws):
    by_column = headroom(draws, risk=0.05)
    tables = {name: rows.drop(columns="policy") for name, rows in draws.groupby("policy")}
    pd.testing.assert_frame_equal(headroom(pd.concat(tables, names=["policy"]), risk=0.05), by_column)
    both = {name: rows for name, rows in draws.groupby("policy")}
    pd.testing.assert_frame_equal(headroom(pd.concat(both, names=["policy"]), risk=0.05), by_column)
    assert list(by_column.columns) == [
        *("policy", "tasks", "replicates", "mean_load", "mean_utilisation"),
        *("headroom", "lower", "upper", "risk", "confidence"),
    ]
    assert by_column["mean_utilisation"].to_numpy() == pytest.approx([0.1, 0.8, 0.1, 0.8])
    assert by_column["replicates"].eq(400).all()


def test_every_text_column_separates_groups_but_provenance_does_not(draws):
    fresh, late = draws.assign(information="fresh"), draws.assign(information="snapshot(every=9)")
    north = pd.concat([fresh, late]).assign(fleet="north", git_hash="a1")
    south = pd.concat([fresh, late]).assign(fleet="south", git_hash="b2")
    rows = headroom(pd.concat([north, south]), risk=0.05)
    assert list(rows.columns[:4]) == ["policy", "information", "fleet", "tasks"]
    assert len(rows) == 2 * 2 * 2 * 2


def test_another_measure_can_be_asked_for(draws):
    gap, excess = headroom(draws, risk=0.05), headroom(draws, risk=0.05, of="excess")
    assert (gap["headroom"] - excess["headroom"]).to_numpy() == pytest.approx(0.04 * gap["mean_utilisation"])


def test_the_group_with_too_few_replicates_is_named(draws):
    short = draws[(draws["policy"] == "one-choice") | (draws["replicate"] < 30)]
    with pytest.raises(TooFewReplicates, match=r"30 replicates for policy 'least-loaded', tasks 100"):
        headroom(short, risk=0.05)


def test_the_same_replicate_twice_is_refused(draws):
    with pytest.raises(InputError, match=r"replicate 0 of policy 'least-loaded', tasks 100 more than once"):
        headroom(pd.concat([draws, draws]), risk=0.05)


@pytest.mark.parametrize("bad", [0, 1, -0.1, 1.5, math.nan, math.inf, "0.01", None, True])
@pytest.mark.parametrize("name", ["risk", "confidence"])
def test_a_risk_or_confidence_outside_the_open_interval_is_refused(draws, name, bad):
    with pytest.raises(InputError, match=rf"^{name} is "):
        headroom(draws, **{"risk": 0.05, name: bad})
    with pytest.raises(InputError, match=rf"^{name} is "):
        replicates_needed(**{"risk": 0.05, name: bad})


@pytest.mark.parametrize(
    ("change", "options", "message"),
    [
        (lambda t: t.drop(columns="gap"), {}, "no column 'gap'"),
        (lambda t: t.drop(columns="replicate"), {}, "no column 'replicate'"),
        (lambda t: t.drop(columns="tasks"), {}, "no column 'tasks'"),
        (lambda t: t, {"of": "gaps"}, "no column 'gaps'; did you mean 'gap'"),
        (lambda t: t, {"of": "policy"}, "of is 'policy'; name a column of measured numbers"),
        (lambda t: t, {"of": "tasks"}, "of is 'tasks'; name a column of measured numbers"),
        (lambda t: t, {"of": 3}, "of is 3"),
        (lambda t: t.iloc[:0], {}, "no rows"),
        (lambda t: t.to_dict(), {}, "measures is dict"),
        (lambda t: t.assign(gap=t["gap"].mask(t["replicate"] == 7)), {}, "measures row 14 has gap nan"),
        (
            lambda t: t.assign(gap=t["gap"].mask(t["replicate"] == 7, np.inf)),
            {},
            "measures row 14 has gap inf",
        ),
        (
            lambda t: t.assign(policy=t["policy"].mask(t["replicate"] == 7)),
            {},
            "measures row 14 has no policy",
        ),
        (
            lambda t: t.assign(replicate=t["replicate"].mask(t["tasks"] == 800)),
            {},
            "measures row 1 has no replicate",
        ),
    ],
)
def test_a_wrong_table_is_refused_in_one_sentence(draws, change, options, message):
    with pytest.raises(InputError, match=message) as refusal:
        headroom(change(draws), risk=0.05, **options)
    assert str(refusal.value).count("\n") == 0
    assert str(refusal.value).endswith((".", *draws.columns))


def test_the_table_given_is_left_as_it_was(draws):
    before = draws.copy()
    headroom(draws, risk=0.05)
    pd.testing.assert_frame_equal(draws, before)
