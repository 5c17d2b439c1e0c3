"""The answer table as arithmetic, the verdict, the guard, and the words."""

import re

import numpy as np
import pandas as pd
import pytest

from labkit.analysis.answer import answer_table, check_max_headroom, judge
from labkit.analysis.comparison import compare
from labkit.analysis.headroom import headroom
from labkit.analysis.wording import (
    answer_text,
    decision,
    guard,
    horizon,
    notes,
    page_table,
    paired_table,
    percent,
    quantity,
    reports,
    text_table,
    utilisation,
    writer,
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
    assert page.index.names == ["rule", "load reports"]
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


@pytest.mark.parametrize("size", [3e-9, 2e-6, 4e-4, 0.03, 0.4, 7.0, 90.0, 4e4])
def test_a_headroom_of_any_size_is_written_with_three_digits_and_its_limits_alike(size):
    write = writer(size)
    assert float(write(size).replace(",", "")) == pytest.approx(size, rel=0.5e-2)
    limits = [write(0.83 * size), write(1.21 * size)]
    assert [float(text.replace(",", "")) / size for text in limits] == pytest.approx([0.83, 1.21], rel=1e-2)
    decimals = {len(text.split("e")[0].partition(".")[2]) for text in (write(size), *limits)}
    assert len(decimals) == 1
    assert write(0.0) == write(-1e-20 * size)


def test_a_small_utilisation_gives_the_same_answer_on_a_smaller_scale(draws):
    columns = ["max_utilisation", "gap", "excess"]
    small = draws.assign(**{name: draws[name] * 1e-6 for name in columns})
    words = []
    for measured, capacity in ((draws, 1e4), (small, 1e10)):
        table = answer(measured, total_capacity=capacity)
        row = judge(table).worst
        text = decision(table, judge(table), baseline="one-choice", total_capacity=capacity)
        found = [float(number) for number in re.findall(r"(?:of|limits|to) ([0-9.]+(?:e-[0-9]+)?)", text)[:4]]
        wanted = [row["headroom"], row["mean_utilisation"], row["lower"], row["upper"]]
        assert found == pytest.approx(wanted, rel=5e-3)
        assert " 0.0000" not in text_table(table)
        words.append(re.search(r"saves ([0-9,]+) work units", text)[1])
    assert words[0] == words[1]


@pytest.mark.parametrize(
    ("capacity", "words"),
    [(6.0, "times the fleet's 6"), (1000.0, "% of the fleet's 1,000")],
)
def test_a_saving_is_a_share_or_a_multiple_of_the_fleet(draws, capacity, words):
    table = answer(draws, total_capacity=capacity)
    table[["saved", "saved_at_least"]] = table[["saved", "saved_at_least"]] * (1000 / capacity)
    text = decision(table, judge(table), baseline="one-choice", total_capacity=capacity)
    share = judge(table).worst["saved"] / capacity
    stated = float(re.search(rf"\(([0-9.,]+) {re.escape(words)}\)", text)[1].replace(",", ""))
    assert stated == pytest.approx(share if share > 1 else 100 * share, rel=1e-2)


def test_a_fleet_too_small_is_told_so_by_how_much(draws):
    table = answer(draws)
    worst = judge(table).worst
    needed, work = worst["capacity_needed"], worst["mean_utilisation"] * CAPACITY

    def said(capacity):
        # the same work and need in work units, on a fleet of another capacity
        given = table.assign(mean_utilisation=work / capacity)
        return decision(given, judge(given), baseline="one-choice", total_capacity=capacity)

    assert "today's" not in said(needed * 1.001)
    short = said(needed / 1.05)
    found = re.search(
        r"so ([0-9.,]+) work units of capacity, ([0-9.,]+) \(([0-9.]+) %\) more than today's", short
    )
    stated = [float(text.replace(",", "")) for text in found.groups()]
    assert stated == pytest.approx([needed, needed - needed / 1.05, 5], rel=1e-2)
    assert "hold even the work" not in short
    assert f"which do not hold even the work alone, {quantity(work)}." in said(work / 1.1)


def test_equal_rules_save_nothing(draws):
    twin = draws[draws["policy"] == "one-choice"].assign(policy="a twin")
    table = answer(pd.concat([draws[draws["policy"] == "one-choice"], twin]))
    text = decision(table, judge(table, "a twin"), baseline="one-choice", total_capacity=CAPACITY)
    assert "Against one-choice that saves nothing: both need the same." in text


def test_the_paired_table_speaks_of_replicates_and_reports(several):
    ends = several.loc[several["tasks"] == 800, ["policy", "information", "replicate", "tasks", "gap"]]
    paired = compare(ends, baseline="one-choice", rng=1)
    table = paired_table(paired)
    assert table.index.names == ["rule", "load reports"]
    assert table.columns.tolist() == ["gap less that of one-choice", "95 % band", "ended lower in"]
    assert "every 200 tasks" in table.index.get_level_values("load reports")
    counts = table["ended lower in"].str.extract(r"^(\d+) of 400 replicates$")[0].astype(int)
    np.testing.assert_allclose(counts / 400, paired["share_lower"])
    assert paired_table(paired[:0]).empty


def test_a_guard_that_holds_says_what_it_compared(several):
    verdict = judge(answer(several))
    assert "upper limit" in guard(verdict, 5.0)
    assert "not above the `max_headroom` of 5" in guard(verdict, 5.0)
    assert guard(verdict, None) == "No `max_headroom` was set for this answer."


def test_numbers_are_written_for_reading():
    assert reports("fresh") == "always fresh"
    assert reports("snapshot(every=2000)") == "every 2,000 tasks"
    assert reports("gossip") == "gossip"
    assert quantity(12000.4) == "12,000"
    assert quantity(3.25) == "3.25"
    assert quantity(300.5) == "300.5"
    assert quantity(300.0) == "300"
    # The form follows what is written, not what was rounded.
    assert [quantity(value) for value in (999.96, 999.94, 1050.0)] == ["1,000", "999.9", "1,050"]
    assert [quantity(value) for value in (99.996, 99.99)] == ["100.0", "99.99"]
    assert quantity(np.nan) == "–"
    assert quantity(0.00234) == "0.00234"
    assert utilisation(0.18333) == "0.1833"
    assert utilisation(2e-6) == "2.00e-06"
    assert utilisation(np.nan) == percent(np.nan) == "–"
    assert [percent(value) for value in (47.92, 0.0, 0.0123)] == ["47.9", "0.0", "0.0123"]


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


def test_a_reference_that_moves_placed_work_is_never_the_answer():
    table = answer_table(
        measures({"pairwise-averaging": 0.5, "least-loaded": 1.0, "one-choice": 3.0}),
        risk=0.02,
        baseline="one-choice",
        total_capacity=1000,
    )
    assert judge(table).policy == "least-loaded"
    assert "pairwise-averaging (moves placed work)" in text_table(table)
    with pytest.raises(InputError, match="moves work already placed"):
        judge(table, "pairwise-averaging")
