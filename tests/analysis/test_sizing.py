"""From a small pilot: how many replicates, how long, and what to give up when it does not fit."""

import json

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.analysis.precision import relative_width
from labkit.analysis.sizing import makespan, replicates_for
from labkit.analysis.sizing_words import as_json, duration, sentences, study_lines, table_text


def pilot(**columns):
    sizes = [16, 32, 64, 128]
    table = {
        "point": [f"servers = {size}" for size in sizes],
        "servers": sizes,
        "mean": 2.0,
        "deviation": 0.4,
        "replicates": 20,
        "seconds_a_replicate": [0.01, 0.08, 0.64, 5.12],
        "seconds_fixed": 2.0,
        **columns,
    }
    return pd.DataFrame(table)


def test_replicates_are_those_that_make_the_interval_short_enough():
    for precision in (0.02, 0.1):
        for skewness in (0.0, 2.0):
            count = replicates_for(0.3, 10**7, precision, 0.95, skewness, least=2)
            quantile = 1.959964
            assert quantile * 0.3 / np.sqrt(count) < 1.001 * precision
            assert quantile * 0.3 / np.sqrt(count) * (1 + 3 * skewness**2 / count) > 0.95 * precision
    assert replicates_for(0.3, 20, 0.05, 0.95, least=2) > 1.2 * replicates_for(
        0.3, 10**7, 0.05, 0.95, least=2
    )
    assert replicates_for(0.3, 20, 0.05, 0.95, 3.0, least=2) > replicates_for(0.3, 20, 0.05, 0.95, least=2)
    assert replicates_for(0.001, 20, 0.05, 0.95, least=37) == 37
    assert replicates_for(0.0, 20, 0.01, 0.95, least=2) == 300


def test_so_many_replicates_are_enough_as_often_as_said():
    # 4 of 5 pilots, and 500 of them fall below 74 % with a probability under 0.1 %
    draws = np.random.default_rng(8)
    enough = 0
    for _ in range(500):
        small = 1 + 0.25 * draws.standard_normal(20)
        count = replicates_for(small.std(ddof=1) / small.mean(), 20, 0.05, 0.95, least=2)
        large = 1 + 0.25 * draws.standard_normal(count)
        enough += relative_width(large, 0.95) <= 0.05
    assert 0.74 <= enough / 500 <= 0.95


def test_the_group_with_the_greatest_need_counts():
    two = pd.concat([pilot().assign(policy="calm"), pilot(deviation=0.8).assign(policy="wild")])
    size = lk.size_study(two, precision=0.05)
    assert size.table["policy"].unique().tolist() == ["wild"]
    assert size.table["point"].tolist() == pilot()["point"].tolist()
    assert (size.table["replicates"] == replicates_for(0.4, 20, 0.05, 0.95, least=10)).all()
    expected = 2.0 + size.table["replicates"] * pilot()["seconds_a_replicate"]
    assert size.table["seconds"].tolist() == pytest.approx(expected.tolist())
    assert size.seconds == pytest.approx(expected.sum())
    assert size.fits
    assert size.most_replicates >= 1.5 * size.table["replicates"].max()


def test_what_does_not_fit_is_left_out_from_the_largest_on():
    size = lk.size_study(pilot(), precision=0.05, seconds=120, x="servers")
    assert not size.fits
    assert size.left_out == ["servers = 128"]
    assert size.seconds_of_rest <= 120 < size.seconds
    again = lk.size_study(pilot(), precision=size.precision_in_time, seconds=120)
    assert again.fits
    assert again.seconds > 0.9 * 120
    slow_small = pilot(seconds_a_replicate=[5.12, 0.64, 0.08, 0.01])
    assert lk.size_study(slow_small, precision=0.05, seconds=120).left_out == ["servers = 16"]
    by_size = lk.size_study(slow_small, precision=0.05, seconds=120, x="servers").left_out
    assert by_size == [f"servers = {servers}" for servers in (128, 64, 32, 16)]


def test_when_nothing_fits_it_says_so():
    size = lk.size_study(pilot(), precision=0.05, seconds=1)
    assert (len(size.left_out), size.precision_in_time, size.seconds_of_rest) == (4, None, 0)
    told = " ".join(sentences(size))
    assert "more than the 1 second asked for. Not even the smallest point alone fits. No precision" in told


def test_kernels_side_by_side_share_the_points():
    assert makespan([3, 1, 1, 1], 2) == 3
    assert makespan([1, 1, 1, 3], 2) == 4
    assert makespan([], 3) == 0
    assert lk.size_study(pilot(), precision=0.05, jobs=4).seconds == pytest.approx(
        lk.size_study(pilot(), precision=0.05).table["seconds"].max()
    )


def test_it_is_told_in_a_table_sentences_and_lines():
    size = lk.size_study(pilot(piloted=[True] * 3 + [False]), precision=0.05, seconds=120, x="servers")
    lines = table_text(size, []).splitlines()
    assert lines[0].split() == ["point", "replicates", "minutes", "known", "from"]
    assert lines[-1].startswith("- servers = 128")
    assert lines[-1].endswith("extrapolated")
    assert lines[2].endswith("pilot")
    told = sentences(size)
    assert told[0].startswith("All 4 points to a precision of 0.05: about ")
    assert told[0].endswith(" on 1 kernel, more than the 2 minutes asked for.")
    assert told[1].startswith("Without servers = 128 the rest takes about ")
    assert told[2] == f"Together they reach a precision of {size.precision_in_time:g} in 2 minutes."
    top = ["replicates = 30", "precision = 0.05", f"most_replicates = {size.most_replicates}"]
    assert study_lines(size, 30, True) == top
    assert study_lines(size, 30, False) == [f"replicates = {size.table['replicates'].max()}"]
    assert json.loads(json.dumps(as_json(size)))["points"][3]["piloted"] is False


@pytest.mark.parametrize(
    ("seconds", "words"),
    [
        (0.44, "0.44 seconds"),
        (9.6, "9.6 seconds"),
        (119, "119 seconds"),
        (120, "2 minutes"),
        (9e3, "2.5 hours"),
        (3.6e6, "1,000 hours"),
    ],
)
def test_durations_read_well(seconds, words):
    assert duration(seconds) == words


@pytest.mark.parametrize(
    ("changed", "sentence"),
    [
        ({"precision": 1}, "precision is 1; give a number above 0 and below 1"),
        ({"precision": 0.0}, "precision is 0.0; give a number above 0 and below 1"),
        ({"seconds": 0}, "seconds is 0; give a number above 0"),
        ({"jobs": 0}, "jobs is 0; give a whole number of at least 1"),
        ({"confidence": 2}, "confidence is 2; give a number above 0 and below 1"),
        ({"least": 0}, "least is 0; give a whole number of at least 1"),
        ({"pilot": {}}, "pilot is a dict without rows; give a DataFrame, one row a point and policy"),
        ({"pilot": pilot().drop(columns="deviation")}, "pilot has no column 'deviation'; allowed"),
        ({"x": "server"}, "pilot has no column 'server'; did you mean 'servers'"),
        ({"pilot": pilot(deviation=-1.0)}, "pilot row 0 has deviation -1.0; give a number of at least 0"),
        ({"pilot": pilot(replicates=1)}, "pilot row 0 has replicates 1; give a number of at least 2"),
        ({"pilot": pilot(mean=["1", "b", 1, 1])}, "pilot row 1 has mean b; give a finite number"),
        ({"pilot": pilot(seconds_fixed=np.inf)}, "pilot row 0 has seconds_fixed inf; give a number of"),
        ({"pilot": pilot(mean=[1.0, 0.0, 1, 1])}, "the mean at servers = 32 is 0, which has no relative"),
    ],
)
def test_what_cannot_be_is_refused(changed, sentence):
    asked = {"pilot": pilot(), "precision": 0.05, **changed}
    with pytest.raises(lk.InputError) as caught:
        lk.size_study(asked.pop("pilot"), **asked)
    assert sentence in str(caught.value)
