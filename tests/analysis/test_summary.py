"""The cited table: right means and errors, the same bits on any machine, one row a group."""

import itertools
import math
from fractions import Fraction

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk
from labkit.analysis.summary import labels_of, mean_and_error, measures_of, runs_behind, summarise

numbers = st.lists(st.floats(-1e6, 1e6), min_size=2, max_size=30)


def runs(replicates=4, **columns):
    """Two runs of two policies, measured at two moments; the gap differs from row to row."""
    rows = [
        {"run_id": run, "policy": policy, "replicate": replicate, "tasks": tasks, "share": share}
        for run, share in (("r1", 0.5), ("r2", 0.25))
        for policy, replicate, tasks in itertools.product(
            ["one-choice", "least-loaded"], range(replicates), [10, 20]
        )
    ]
    table = pd.DataFrame(rows)
    table["gap"] = np.random.default_rng(1).random(len(table))
    return table.assign(**columns)


@given(numbers)
def test_means_and_errors_are_those_of_exact_arithmetic(values):
    mean, error = mean_and_error(values)
    exact = [Fraction(value) for value in values]
    true = sum(exact) / len(exact)
    variance = sum((value - true) ** 2 for value in exact) / (len(exact) - 1)
    largest = max(map(abs, values))
    assert mean == pytest.approx(float(true), rel=1e-15, abs=1e-16 * largest)
    assert error == pytest.approx(math.sqrt(variance / len(exact)), rel=1e-12, abs=2e-16 * largest)


@given(numbers, st.randoms(use_true_random=False))
def test_the_order_of_the_replicates_changes_no_bit(values, order):
    shuffled = list(values)
    order.shuffle(shuffled)
    assert mean_and_error(shuffled) == mean_and_error(values)


def test_equal_numbers_have_no_error():
    assert mean_and_error([0.1] * 7) == (0.1, 0.0)


def test_a_row_for_each_point_policy_and_last_checkpoint():
    measured = runs()
    labels = labels_of(measured, ["share"])
    assert labels == ["policy", "share"]
    table = summarise(measured, labels=labels, measures=["gap"])
    assert list(table.columns) == ["policy", "share", "tasks", "replicates", "gap", "gap_error"]
    order = [(0.5, "one-choice"), (0.5, "least-loaded"), (0.25, "one-choice"), (0.25, "least-loaded")]
    assert list(zip(table["share"], table["policy"], strict=True)) == order
    assert set(table["tasks"]) == {20}
    assert set(table["replicates"]) == {4}
    rows = measured.query("tasks == 20 and share == 0.25 and policy == 'one-choice'")
    assert table.loc[2, "gap"] == pytest.approx(rows["gap"].mean(), rel=1e-14)
    assert table.loc[2, "gap_error"] == pytest.approx(rows["gap"].sem(), rel=1e-12)
    assert runs_behind(measured, labels) == [["r1"], ["r1"], ["r2"], ["r2"]]


def test_the_order_of_the_rows_inside_a_run_changes_no_number():
    measured = runs()
    shuffled = measured.sample(frac=1, random_state=1)
    one = summarise(measured, labels=["policy", "share"], measures=["gap"], risk=0.5, confidence=0.5)
    other = summarise(shuffled, labels=["policy", "share"], measures=["gap"], risk=0.5, confidence=0.5)
    keys = ["policy", "share"]
    pd.testing.assert_frame_equal(
        one.sort_values(keys, ignore_index=True), other.sort_values(keys, ignore_index=True), check_exact=True
    )


def test_the_headroom_is_that_of_the_whole_package():
    measured = runs(replicates=80).query("share == 0.5")
    table = summarise(measured, labels=["policy"], measures=["gap"], risk=0.1)
    last = measured[measured["tasks"] == 20].drop(columns=["share", "run_id"])
    expected = lk.headroom(last, risk=0.1).set_index("policy").loc[table["policy"]]
    for ours, theirs in (
        ("headroom", "headroom"),
        ("headroom_lower", "lower"),
        ("headroom_upper", "upper"),
    ):
        assert table[ours].tolist() == expected[theirs].tolist()


def test_labels_are_what_rows_differ_in():
    measured = runs(information="fresh", seen=True, servers=8)
    assert labels_of(measured, ["share"]) == ["policy", "share"]
    measured["information"] = measured["share"].map({0.5: "fresh", 0.25: "snapshot(every=4)"})
    measured["report_every"] = measured["share"].map({0.5: 0, 0.25: 4})
    assert labels_of(measured, ["report_every"]) == ["policy", "information"]
    measured = measured.drop(columns="report_every")
    measured["servers"] = measured["share"].map({0.5: 8, 0.25: 16})
    measured["servers_parameter"] = measured["servers"]
    assert labels_of(measured, ["servers_parameter"]) == ["policy", "information", "servers"]
    measured["stopping"] = measured["share"].map({0.5: "10 replicates", 0.25: "20 replicates"})
    assert labels_of(measured, ["servers_parameter"]) == ["policy", "information", "servers"]
    no_gap = measured.drop(columns="gap").assign(load=1.5)
    labels = ["policy", "information", "servers"]
    assert measures_of(no_gap, labels, ["servers_parameter", "share"]) == ["load"]


def test_a_whole_number_that_differs_between_replicates_is_measured():
    measured = runs(moves=range(32)).drop(columns="gap")
    labels = labels_of(measured, ["share"])
    assert labels == ["policy", "share"]
    assert measures_of(measured, labels, ["share"]) == ["moves"]
    table = summarise(measured, labels=labels, measures=["moves"])
    rows = measured.query("tasks == 20 and share == 0.5 and policy == 'one-choice'")
    assert table.loc[0, "moves"] == rows["moves"].mean()


def test_sizes_inside_one_run_are_labels_with_their_own_last_checkpoint():
    small, large = runs(servers=4), runs(servers=8)
    large["tasks"] *= 2
    both = pd.concat([small, large], ignore_index=True)
    assert labels_of(both, ["share"]) == ["policy", "servers", "share"]
    table = summarise(both, labels=["policy", "servers", "share"], measures=["gap"])
    assert set(zip(table["servers"], table["tasks"], strict=True)) == {(4, 20), (8, 40)}


def test_excess_counts_only_where_it_is_another_number():
    measured = runs()
    same = measured.assign(excess=measured["gap"] + 1e-15)
    assert measures_of(same, ["policy", "share"], ["share"]) == ["gap"]
    other = measured.assign(excess=measured["gap"] - 0.1)
    assert measures_of(other, ["policy", "share"], ["share"]) == ["gap", "excess"]
    assert measures_of(measured.assign(excess=np.nan), ["policy", "share"], ["share"]) == ["gap"]


@pytest.mark.parametrize(
    ("change", "measures", "words"),
    [
        (lambda table: table.drop(columns="replicate"), ["gap"], "no column 'replicate'"),
        (lambda table: table.assign(gap=np.nan), ["gap"], "gap is nan for policy 'one-choice'"),
        (lambda table: table[table["replicate"] == 0], ["gap"], "at least 2: raise replicates"),
        (lambda table: pd.concat([table, table]), ["gap"], "measured replicate 0 of policy 'one-choice'"),
        (lambda table: table, ["gip"], "measures names 'gip'; did you mean 'gap'"),
        (lambda table: table, ["gap", "gap"], "two columns 'gap'"),
        (lambda table: table, ["policy"], "measures names 'policy'"),
        (lambda table: table, [], "measures names none"),
    ],
)
def test_what_is_refused(change, measures, words):
    with pytest.raises(lk.InputError) as refusal:
        summarise(change(runs()), labels=["policy", "share"], measures=measures)
    assert words in str(refusal.value)


def test_too_few_replicates_for_the_risk_are_refused():
    with pytest.raises(lk.TooFewReplicates, match="needs at least"):
        summarise(runs(), labels=["policy", "share"], measures=["gap"], risk=0.01)
