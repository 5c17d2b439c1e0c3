"""Headroom, paired comparison and precision on tables of work that leaves, which have no column of tasks."""

import numpy as np
import pandas as pd
import pytest

import labkit as lk

LOADS = (0.3, 0.6)


def serve(policy, load, first=0, count=80, **given):
    return lk.serve(
        lk.complete(10), policy, load_factor=load, rng=2, first_replicate=first, replicates=count,
        **{"horizon": 60.0, "warmup": 20.0, "intervals": 1} | given,
    ).measures  # fmt: skip


@pytest.fixture(scope="module")
def measures():
    return pd.concat([serve(rule, load) for rule in ("one-choice", "least-loaded") for load in LOADS])


def test_comparison_within_a_load_factor(measures):
    paired = lk.compare(measures, baseline="one-choice", of="sojourn_mean", rng=1)
    assert paired[["policy", "information", "load_factor", "horizon", "replicates"]].values.tolist() == [
        ["least-loaded", "fresh", load, 60.0, 80] for load in LOADS
    ]
    assert "tasks" not in paired
    wide = measures.pivot(index="replicate", columns=["load_factor", "policy"], values="sojourn_mean")
    for row in paired.to_dict("records"):
        ours = wide[row["load_factor"]]
        assert row["difference"] == pytest.approx(
            (ours["least-loaded"] - ours["one-choice"]).mean(), rel=1e-12
        )
        assert row["lower"] < row["difference"] < row["upper"] < 0


def test_comparison_does_not_mind_where_the_warm_up_ends(measures):
    # each rule forgets its start in a time of its own
    moved = measures.assign(warmup=np.where(measures["policy"] == "one-choice", 25.0, 20.0))
    ours, theirs = (
        lk.compare(table, baseline="one-choice", of="sojourn_mean", rng=1) for table in (moved, measures)
    )
    pd.testing.assert_frame_equal(ours, theirs)


def test_comparison_as_any_table_with_the_same_columns(measures):
    """The numbers are those of the same table with loads told by tasks."""
    told = measures.assign(tasks=(measures["load_factor"] * 10).astype(int)).drop(columns=["load_factor"])
    one = lk.compare(measures, baseline="one-choice", of="max_utilisation", rng=1)
    other = lk.compare(told, baseline="one-choice", of="max_utilisation", rng=1)
    same = ["difference", "lower", "upper", "share_lower", "replicates"]
    pd.testing.assert_frame_equal(one[same], other[same], check_exact=True)
    assert other["tasks"].tolist() == [3, 6]


def test_headroom_of_each_load_factor(measures):
    needed = lk.headroom(measures, risk=0.05, of="max_utilisation")
    assert needed[["policy", "load_factor"]].values.tolist() == [
        [rule, load] for rule in ("least-loaded", "one-choice") for load in LOADS
    ]
    for row in needed.to_dict("records"):
        group = measures.query("policy == @row['policy'] and load_factor == @row['load_factor']")
        assert row["headroom"] == np.quantile(group["max_utilisation"], 0.95, method="inverted_cdf")
    # whole numbers are measured, not labels
    assert [name for name in needed if name in ("arrivals", "completed", "lost", "waited", "tasks")] == []


def test_a_load_factor_of_one_rule_only_is_refused(measures):
    short = measures[(measures["policy"] != "one-choice") | (measures["load_factor"] < 0.5)]
    with pytest.raises(
        lk.InputError,
        match=r"policy 'least-loaded' is measured at load_factor 0\.6, horizon 60\.0 but the baseline "
        r"'one-choice' is not; give both the same load_factor and horizon\.",
    ):
        lk.compare(short, baseline="one-choice", of="sojourn_mean", rng=1)
    with pytest.raises(lk.InputError, match=r"of is 'load_factor'; name a column of measured numbers"):
        lk.headroom(measures, risk=0.1, of="load_factor")
    twice = pd.concat([measures, measures.iloc[:1]])
    with pytest.raises(
        lk.InputError, match=r"replicate 0 of .*load_factor 0\.3, horizon 60\.0 more than once"
    ):
        lk.headroom(twice, risk=0.1, of="sojourn_mean")
    with pytest.raises(lk.InputError, match="measures has no column 'tasks'"):
        lk.headroom(measures.drop(columns=["load_factor", "horizon"]), risk=0.1, of="sojourn_mean")


def test_replicates_until_each_load_factor_is_known():
    def batch(first, count):
        return pd.concat([serve("least-loaded", load, first, count) for load in LOADS])

    found = lk.replicate_until(
        batch, precision=0.01, replicates=20, most_replicates=3_000, measure="sojourn_mean"
    )
    counts = found.groupby("load_factor")["replicate"].nunique()
    assert counts.nunique() == 1
    assert 20 < counts.iloc[0] < 3_000
    pd.testing.assert_frame_equal(
        found.drop(columns="stopping"), batch(0, counts.iloc[0]).reset_index(drop=True), check_exact=True
    )
    # each load factor has words of its own, and the same number of replicates
    assert found.groupby("load_factor")["stopping"].nunique().tolist() == [1, 1]
    assert found["stopping"].nunique() == 2
    for _, group in found.groupby("load_factor"):
        values = group["sojourn_mean"]
        assert 2.2 * values.std() / np.sqrt(len(values)) > 0.01 * values.mean() * 0.3
        assert 1.9 * values.std() / np.sqrt(len(values)) < 0.01 * values.mean()


def test_the_warm_up_found_does_not_depend_on_the_batch():
    given = {"policy": "least-loaded", "load": 0.6, "warmup": None, "horizon": 400.0}
    whole, last = serve(first=0, count=12, **given), serve(first=10, count=2, **given)
    pd.testing.assert_frame_equal(whole.iloc[10:].reset_index(drop=True), last, check_exact=True)
