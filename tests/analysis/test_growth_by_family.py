"""Growth of several networks and rules side by side: what is fitted, left out and said."""

import json
import re

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.analysis.growth_by_family import fit_families, growth_in_words, laws_table
from labkit.analysis.long_run_table import (
    long_run_table,
    settled_in_words,
    stopped_in_words,
    with_network,
)
from labkit.figures.growth_of_families import growth_of_families

SIZES = (16, 32, 64, 128, 256)


def invented(family="ring", policy="least-loaded", moment="stationary", *, grow, seed=1, replicates=60):
    """Return rows as of the long run whose excess is `grow(size)` with a relative spread of a tenth."""
    draws = np.random.default_rng(seed)
    rows = [
        pd.DataFrame(
            {
                "family": family,
                "policy": policy,
                "moment": moment,
                "servers": size,
                "replicate": np.arange(replicates),
                "tasks": 200 * size,
                "excess": grow(size) * (1 + 0.1 * draws.standard_normal(replicates)),
            }
        )
        for size in SIZES
    ]
    return pd.concat(rows, ignore_index=True)


@pytest.fixture(scope="module")
def measures():
    return pd.concat(
        [
            invented(grow=np.sqrt),
            invented("complete", grow=lambda n: 1 + np.log(np.log(n)), seed=2),
            invented(policy="one-choice", moment="after 200 tasks a server", grow=lambda n: 30, seed=3),
            invented(policy="pairwise-averaging", grow=lambda n: 0.6 * np.sqrt(n), seed=4),
        ]
    )


@pytest.fixture(scope="module")
def fitted(measures):
    return fit_families(measures, rng=1)


def test_each_network_and_rule_has_its_own_fit(fitted):
    fits, left_out = fitted
    assert [(each.family, each.policy) for each in fits] == [
        ("ring", "least-loaded"),
        ("complete", "least-loaded"),
        ("ring", "one-choice"),
        ("ring", "pairwise-averaging"),
    ]
    assert left_out == []


def test_a_fit_is_that_of_its_own_rows(measures, fitted):
    own = measures[(measures["family"] == "complete")]
    seed = np.random.SeedSequence(1, spawn_key=(1,))
    alone = lk.fit_growth(own, y="excess", rng=seed)
    pd.testing.assert_frame_equal(alone.table(), fitted[0][1].fit.table())


def test_the_table_foretells_four_times_the_size(fitted):
    rows = laws_table(fitted[0]).set_index(["family", "policy"])
    ring = rows.loc[("ring", "least-loaded")]
    assert (ring["ahead"], ring["largest"], ring["sizes"]) == (1024, 256, 5)
    assert ring["lower"] < 32 < ring["upper"]
    assert ring["exponent_lower"] < 0.5 < ring["exponent_upper"]
    assert ring["times"] == ring["estimate"] / ring["mean"]
    flat = rows.loc[("ring", "one-choice")]
    assert "constant" in flat["laws"]
    assert laws_table(fitted[0], ahead=2.0)["ahead"].tolist() == [512] * 4


def test_the_words_name_what_was_measured_and_never_a_reference(fitted):
    text = growth_in_words(laws_table(fitted[0]), ["Left out."])
    first, second = text.splitlines()[:2]
    only = r"On a ring of 1,024 servers only least-loaded was measured: the fullest server would be at 3[0-9]"
    assert re.match(only, first)
    assert second.startswith("On a complete graph of 1,024 servers only least-loaded")
    assert "pairwise-averaging (moves placed work), stationary" in text
    assert re.search(r"ring +256 .* power 0.[0-9]+.* n\^0.[45][0-9] ", text)
    assert re.search(r"complete +256 .* log log 0.[0-9]+", text)
    assert text.endswith("Left out.")
    assert "foretold +" not in text


def test_four_sizes_are_too_few_for_an_exponent(measures):
    fits, _ = fit_families(measures[measures["servers"] > 16], rng=1)
    assert "if a power of n" not in growth_in_words(laws_table(fits), [])


def test_rules_that_cannot_be_told_apart_are_named_and_others_ranked(measures):
    near = invented(policy="smooth-feedback", grow=lambda n: 1.02 * np.sqrt(n), seed=9)
    far = invented("complete", policy="smooth-feedback", grow=np.sqrt, seed=10)
    fits, _ = fit_families(pd.concat([measures, near, far]), rng=1)
    first, second = growth_in_words(laws_table(fits), []).splitlines()[:2]
    assert "under least-loaded, not told apart from smooth-feedback 3" in first
    assert second.startswith(
        "On a complete graph of 1,024 servers least-loaded would keep the fullest server"
    )


def test_no_gap_is_foretold_below_zero():
    rows = invented(grow=lambda n: 5.2 - 0.9 * np.log(n), replicates=10)
    fits, _ = fit_families(rows.assign(moment="after 200 tasks a server"), rng=1)
    assert fits[0].fit.predict([4096])["lower"].iloc[0] < 0
    assert laws_table(fits, ahead=16)["lower"].tolist() == [0.0]


@pytest.mark.parametrize("ahead", [0.5, 17, "4", np.nan])
def test_how_far_ahead_has_limits(fitted, ahead):
    with pytest.raises(lk.InputError, match="ahead is"):
        laws_table(fitted[0], ahead=ahead)


def test_how_runs_stopped_is_told(measures):
    assert stopped_in_words(measures) == ""
    told = measures.assign(stopping="mean excess within 5 % at 95 %: reached with 60 replicates: 4 %")
    assert stopped_in_words(told) == "All 20 means reached the precision asked for."
    told.loc[told["servers"] == 256, "stopping"] = (
        "mean excess within 5 %: not reached with the most, 60: 9 %"
    )
    assert stopped_in_words(told).startswith("4 of 20 means stopped at the most replicates")


def test_sizes_that_are_not_stationary_are_left_out():
    rows = invented(grow=np.sqrt)
    late = (rows["servers"] == 256) & (rows["replicate"] % 2 == 1)
    rows.loc[late, "excess"] *= 1.3
    table = long_run_table(rows)
    assert table["settled"].tolist() == [True] * 4 + [False]
    assert table["apart"].iloc[-1] > 4
    fits, left_out = fit_families(rows, rng=1)
    assert fits[0].fit.sizes["x"].max() == 128
    assert left_out == [
        "least-loaded on a ring: not shown stationary at 256 servers, which are left out of its laws."
    ]
    words = settled_in_words(table)
    assert words.startswith("4 of 5 means are shown stationary")
    assert words.endswith("Not shown: least-loaded on ring of 256.")


def test_one_kind_of_start_shows_nothing():
    rows = invented(grow=np.sqrt)
    table = long_run_table(rows[rows["replicate"] % 2 == 0])
    assert not table["settled"].any()


def test_means_at_a_horizon_are_not_judged(measures):
    table = long_run_table(measures)
    late = table[table["moment"] != "stationary"]
    assert not late["settled"].any()
    assert late["apart"].isna().all()
    assert settled_in_words(late) == (
        "None of the 5 means is of a stationary state; all are taken at a horizon."
    )
    assert "The other 5 means are taken at a horizon" in settled_in_words(table)


def test_too_few_sizes_are_told(measures):
    few = measures[(measures["family"] == "ring") | measures["servers"].isin([16, 32])]
    fits, left_out = fit_families(few, rng=1)
    assert len(fits) == 3
    assert left_out == ["least-loaded on a complete graph, stationary: 2 sizes, too few for a law of growth."]
    with pytest.raises(lk.InputError, match="too few for a law of growth"):
        fit_families(measures[measures["servers"] < 64], rng=1)


def test_a_large_difference_is_not_settled_however_noisy():
    """Starts at 18 and 48 with spreads that make that only 3.5 standard errors."""
    draws = np.random.default_rng(4)
    rows = invented(grow=np.sqrt, replicates=20)
    odd = rows["replicate"] % 2 == 1
    rows["excess"] = np.where(odd, 48.0, 18.0) + 19 * draws.standard_normal(len(rows))
    table = long_run_table(rows)
    assert not table["settled"].any()


def test_few_replicates_raise_no_false_alarm():
    """500 pairs of 5 + 5 of one law, at a level of 6e-5: an alarm in one of thirty such tests."""
    alarms = 0
    for seed in range(100):
        rows = invented(grow=lambda n: 30, seed=seed, replicates=10)
        table = long_run_table(rows.assign(excess=30 + 0.2 * (rows["excess"] - 30)))
        alarms += int((~table["settled"]).sum())
    assert alarms == 0


def test_a_network_that_cannot_be_fitted_is_left_out_by_name(measures):
    flat = invented("torus", grow=lambda n: 1.0).assign(excess=1.0)
    fits, left_out = fit_families(pd.concat([measures, flat]), rng=1)
    assert len(fits) == 4
    assert left_out[0].startswith("least-loaded on a torus, stationary: measures has the same excess")


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        (lambda rows: rows.assign(excess=np.nan), "has excess nan; every excess must be a finite number"),
        (lambda rows: rows.assign(excess="3"), "must hold numbers"),
        (lambda rows: rows.iloc[:0], "has no rows"),
        (lambda rows: rows.drop(columns="excess").assign(gap=1.0), "no column 'excess'; allowed: gap"),
        (lambda rows: 3, "has no rows"),
    ],
)
def test_what_is_no_number_is_not_called_unsettled(measures, change, sentence):
    with pytest.raises(lk.InputError, match=sentence):
        fit_families(change(measures), rng=1)


def test_other_measures_have_other_words(fitted):
    laws = laws_table(fitted[0])
    assert " above the mean." in growth_in_words(laws, [], measure="gap").splitlines()[0]
    first = growth_in_words(laws, [], measure="load_variance").splitlines()[0]
    assert re.search(r"only least-loaded was measured: the mean load_variance would be at [0-9.]+ [(]", first)
    assert "above" not in first


def test_a_missing_column_is_named(measures):
    with pytest.raises(lk.InputError, match="no column 'moment'"):
        long_run_table(measures.drop(columns="moment"))


def test_the_network_comes_from_the_parameters_where_all_runs_have_one():
    rows = invented(grow=np.sqrt).drop(columns="family")
    rows["parameters"] = [json.dumps({"family": "torus", "servers": int(n)}) for n in rows["servers"]]
    assert with_network(rows)["family"].unique().tolist() == ["torus"]
    bare = rows.drop(columns="servers")
    assert with_network(bare)["servers"].tolist() == rows["servers"].tolist()
    rows["parameters"] = "{}"
    with pytest.raises(lk.InputError, match="without a parameter 'family'"):
        with_network(rows)


class TestFigure:
    """One panel a rule, one colour a network, all numbers from the table."""

    def test_panels_and_labels(self, fitted):
        figure = growth_of_families(fitted[0])
        panels = [axes for axes in figure.axes if axes.get_visible()]
        assert [axes.get_title(loc="left") for axes in panels] == [
            "least-loaded",
            "one-choice",
            "pairwise-averaging (moves placed work)",
        ]
        named = {text.get_text() for text in panels[0].texts}
        assert named == {"ring", "complete"}
        assert "open markers: after 200 tasks a server" in figure.get_suptitle().replace("\n", " ")
        colours = [{text.get_text(): text.get_color() for text in axes.texts} for axes in panels]
        assert colours[0]["ring"] == colours[1]["ring"] == colours[2]["ring"]

    def test_lines_go_through_what_is_foretold(self, fitted):
        figure = growth_of_families(fitted[0], reach=2.0)
        axes = figure.axes[0]
        said = fitted[0][0].fit.predict([512.0])["estimate"].iloc[0]
        ends = [line.get_ydata()[-1] for line in axes.get_lines() if line.get_xdata()[-1] == 512.0]
        assert said in ends

    def test_small_values_stay_in_view(self):
        rows = invented(grow=lambda n: 0.001 * np.sqrt(n))
        fits, _ = fit_families(rows, rng=1)
        axes = growth_of_families(fits).axes[0]
        low, high = axes.get_ylim()
        assert low < 0.004 < 0.016 < high < 1

    def test_bad_input(self, fitted):
        with pytest.raises(lk.InputError, match="reach is 17"):
            growth_of_families(fitted[0], reach=17)
        with pytest.raises(lk.InputError, match="fits is empty"):
            growth_of_families([])
