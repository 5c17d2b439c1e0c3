"""The answer table as arithmetic, the verdict, the guard, and the words."""

import numpy as np
import pandas as pd
import pytest

from labkit.analysis.answer import answer_table, check_max_headroom, judge
from labkit.analysis.headroom import headroom
from labkit.analysis.wording import (
    answer_text,
    decision,
    horizon,
    notes,
    page_table,
    quantity,
    reports,
    text_table,
)
from labkit.errors import HeadroomExceeded, InputError, TooFewReplicates
from tests.analysis.synthetic import measures

CAPACITY = 1000.0


@pytest.fixture
def several():
    """Three rules under two kinds of information."""
    fresh = measures({"least-loaded": 1.0, "mixed(beta=0.5)": 2.0, "one-choice": 4.0})
    late = measures({"least-loaded": 2.5, "mixed(beta=0.5)": 2.0, "one-choice": 4.0})
    return pd.concat(
        [fresh.assign(information="fresh"), late.assign(information="snapshot(every=200)")], ignore_index=True
    )


def answer(table, **options):
    return answer_table(
        table, **{"risk": 0.02, "baseline": "one-choice", "total_capacity": CAPACITY, **options}
    )


def test_columns_keep_their_arithmetic(several):
    table = answer(several)
    assert table["tasks"].eq(800).all()
    base = table[table["policy"] == "one-choice"].set_index("information").loc[table["information"]]
    mean, needed = table["mean_utilisation"].to_numpy(), table["headroom"].to_numpy()
    np.testing.assert_allclose(mean, 0.8)
    np.testing.assert_allclose(table["of_mean"], needed / mean)
    np.testing.assert_allclose(table["network"], 0.04 * 0.8)
    np.testing.assert_allclose(table["network"] + table["rule"], needed)
    np.testing.assert_allclose(table["capacity_needed"], (mean + needed) * CAPACITY)
    np.testing.assert_allclose(table["saved"], (base["headroom"].to_numpy() - needed) * CAPACITY)
    least = (base["lower"].to_numpy() - table["upper"].to_numpy()) * CAPACITY
    other = (table["policy"] != "one-choice").to_numpy()
    np.testing.assert_allclose(table["saved_at_least"][other], least[other])
    assert table["saved_at_least"][~other].isna().all()
    expected = headroom(several[several["tasks"] == 800], risk=0.02)
    keys = ["policy", "information"]
    both = table.merge(expected, on=keys, suffixes=("", "_alone"))
    for column in ("headroom", "lower", "upper"):
        assert both[column].equals(both[f"{column}_alone"])


def test_capacity_needed_keeps_overload_within_the_risk(several):
    """With capacities scaled to the capacity needed, at most 2 % of replicates overflow."""
    for row in answer(several).itertuples():
        scale = row.capacity_needed / CAPACITY
        mine = several[(several["policy"] == row.policy) & (several["information"] == row.information)]
        full = mine.loc[mine["tasks"] == 800, "max_utilisation"] / scale
        assert (full > 1 + 1e-12).mean() <= 0.02


def test_least_headroom_first_and_provenance_columns_do_not_matter(several):
    table = answer(several)
    assert table["policy"].tolist()[:3] == ["least-loaded", "mixed(beta=0.5)", "one-choice"]
    assert table["policy"].tolist()[3:] == ["mixed(beta=0.5)", "least-loaded", "one-choice"]
    noisy = several.assign(run_id=several["information"], started="now", report_every=3, fleet_name="x")
    pd.testing.assert_frame_equal(answer(noisy.sample(frac=1, random_state=3)), table)


def test_rows_without_information_are_fresh_and_unknown_excess_is_no_number(draws):
    table = answer(draws.assign(excess=np.nan))
    assert table["information"].eq("fresh").all()
    assert table[["network", "rule"]].isna().all(axis=None)
    assert "–" in text_table(table)


def test_the_best_rule_is_best_in_its_worst_information(several):
    verdict = judge(answer(several))
    assert verdict.policy == verdict.best == "mixed(beta=0.5)"
    assert not verdict.given
    named = judge(answer(several), "least-loaded")
    assert named.given
    assert named.worst["information"] == named.highest["information"] == "snapshot(every=200)"


def test_rules_with_overlapping_limits_are_called_close(draws):
    twin = draws[draws["policy"] == "least-loaded"].assign(policy="twin")
    table = answer(
        pd.concat(
            [draws, twin.assign(gap=twin["gap"] + 1e-6, max_utilisation=twin["max_utilisation"] + 1e-6)]
        )
    )
    verdict = judge(table)
    assert verdict.policy == "least-loaded"
    assert verdict.close == ("twin",)
    words = decision(table, verdict, baseline="one-choice", total_capacity=CAPACITY)
    assert "overlap with those of twin: 400 replicates cannot rank them" in words


def test_the_guard_compares_the_upper_limit(several):
    verdict = judge(answer(several))
    upper = verdict.highest["upper"]
    check_max_headroom(verdict, None)
    check_max_headroom(verdict, upper)
    with pytest.raises(
        HeadroomExceeded, match=r"'mixed\(beta=0.5\)'.* upper 95 % limit .* above max_headroom"
    ):
        check_max_headroom(verdict, (verdict.highest["headroom"] + upper) / 2)
    with pytest.raises(HeadroomExceeded, match="'one-choice'"):
        check_max_headroom(judge(answer(several), "one-choice"), upper)
    for bad in (-0.1, np.nan, "0.1"):
        with pytest.raises(InputError, match=r"^max_headroom is "):
            check_max_headroom(verdict, bad)


def test_the_decision_says_what_the_table_says(several):
    table = answer(several)
    words = decision(table, judge(table), baseline="one-choice", total_capacity=CAPACITY)
    row = judge(table).worst
    assert words.startswith(f"Use mixed(beta=0.5): it needs a headroom of {row['headroom']:.4f} above")
    assert f"95 % limits {row['lower']:.4f} to {row['upper']:.4f}) at a risk of 2 %" in words
    assert f"saves {quantity(row['saved'])} work units" in words
    assert f"at least {quantity(row['saved_at_least'])} with 95 % confidence" in words
    given = decision(table, judge(table, "one-choice"), baseline="one-choice", total_capacity=CAPACITY)
    assert given.startswith("one-choice, the rule in operation, needs")
    assert "Against one-choice mixed(beta=0.5) saves" in given
    worse = decision(table, judge(table, "one-choice"), baseline="least-loaded", total_capacity=CAPACITY)
    table = answer(several, baseline="least-loaded")
    worse = decision(table, judge(table, "one-choice"), baseline="least-loaded", total_capacity=CAPACITY)
    assert "saves nothing: it needs" in worse
    assert "The best rule here is mixed(beta=0.5)." in worse


def test_text_is_aligned_and_narrow(several):
    table = answer(several)
    lines = text_table(table).splitlines()
    assert len(lines) == 2 + len(table)
    assert max(map(len, lines)) <= 120
    ends = [index for index, sign in enumerate(lines[1] + " ") if sign == " " and lines[1][index - 1] == "-"]
    for line in (lines[0], *lines[2:]):
        padded = line.ljust(len(lines[1])) + " "
        assert all(padded[end] == " " for end in ends)
    about = notes(table, baseline="one-choice", servers=100, total_capacity=CAPACITY)
    assert "at most 2 %" in about
    assert "800 tasks placed on 100 servers of 1,000 work units in total, 400 replicates" in about
    page = page_table(table, CAPACITY)
    assert page.index.names == ["policy", "load reports"]
    assert len(page) == len(table)


def test_the_printed_answer_fits_a_terminal_and_names_its_runs(several):
    table = answer(several)
    words = decision(table, judge(table), baseline="one-choice", total_capacity=CAPACITY)
    about = notes(table, baseline="one-choice", servers=100, total_capacity=CAPACITY)
    few, many = (answer_text(words, table, about, [f"r{k}" for k in range(count)]) for count in (2, 9))
    assert " ".join(few.split("\n\n")[0].split()) == " ".join(words.split())
    assert max(map(len, few.splitlines())) <= 140
    assert "runs: r0, r1 (" in few
    assert "runs: r0, r1, r2 and 6 more (" in many


def test_the_horizon_tells_growth_and_fall(draws):
    assert "median gap of one-choice grew by 1" in horizon(draws.assign(information="fresh"), "one-choice")
    falling = draws.assign(information="fresh", gap=1 / draws["tasks"])
    assert "fell by 88 % between 100 and 800 tasks" in horizon(falling, "one-choice")
    assert horizon(draws[draws["tasks"] == 800].assign(information="fresh"), "one-choice") == ""


def test_numbers_are_written_for_reading():
    assert reports("fresh") == "always fresh"
    assert reports("snapshot(every=2000)") == "every 2,000 tasks"
    assert reports("gossip") == "gossip"
    assert quantity(12000.4) == "12,000"
    assert quantity(3.25) == "3.25"
    assert quantity(np.nan) == "–"


@pytest.mark.parametrize(
    ("change", "options", "error", "message"),
    [
        (
            lambda t: t,
            {"baseline": "one-choise"},
            InputError,
            "baseline is 'one-choise'.*did you mean 'one-choice'",
        ),
        (lambda t: t, {"risk": 0}, InputError, "^risk is 0"),
        (lambda t: t, {"risk": 0.001}, TooFewReplicates, "400 replicates for .*at least 3688"),
        (lambda t: t, {"total_capacity": 0}, InputError, "^total_capacity is 0"),
        (lambda t: t.drop(columns="excess"), {}, InputError, "no column 'excess'"),
        (
            lambda t: t[(t["policy"] != "one-choice") | (t["information"] == "fresh")],
            {},
            InputError,
            r"'one-choice' was not run with information 'snapshot\(every=200\)'",
        ),
        (
            lambda t: t[(t["policy"] != "one-choice") | (t["tasks"] == 100)],
            {},
            InputError,
            "'one-choice' ends at tasks 100 but policy .* at tasks 800",
        ),
    ],
)
def test_wrong_records_are_refused_in_one_sentence(several, change, options, error, message):
    with pytest.raises(error, match=message):
        answer(change(several), **options)


def test_an_unknown_rule_in_operation_is_refused(several):
    with pytest.raises(InputError, match=r"policy is 'least-load'.*did you mean 'least-loaded'"):
        judge(answer(several), "least-load")
