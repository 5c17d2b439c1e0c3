"""Paired differences: what pairing means, bands against SciPy and the t law, refusals."""

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from labkit.analysis.comparison import compare
from labkit.errors import InputError, TooFewReplicates


def test_differences_are_taken_replicate_by_replicate(draws):
    rows = compare(draws, baseline="one-choice", rng=1)
    assert list(rows.columns) == [
        *(
            "policy",
            "tasks",
            "replicates",
            "baseline",
            "difference",
            "lower",
            "upper",
            "share_lower",
            "confidence",
        ),
    ]
    assert rows["policy"].tolist() == ["least-loaded", "least-loaded"]
    wide = draws.pivot(index="replicate", columns=["policy", "tasks"], values="gap")
    for row in rows.itertuples():
        difference = wide["least-loaded"][row.tasks] - wide["one-choice"][row.tasks]
        assert row.difference == pytest.approx(difference.mean(), rel=1e-12)
        assert row.share_lower == (difference < 0).mean()
        assert row.lower < row.difference < row.upper < 0


def test_bands_agree_with_scipy_bootstrap_and_the_t_law(draws):
    row = compare(draws[draws["tasks"] == 800], baseline="one-choice", rng=2).iloc[0]
    wide = draws[draws["tasks"] == 800].pivot(index="replicate", columns="policy", values="gap")
    difference = (wide["least-loaded"] - wide["one-choice"]).to_numpy()
    one_error = difference.std(ddof=1) / np.sqrt(len(difference))
    other = stats.bootstrap(
        (difference,), np.mean, method="percentile", rng=np.random.default_rng(4), batch=500
    )
    # A 2.5 % quantile of 9,999 resamples has a standard error of about 0.027 standard deviations.
    for mine, theirs in zip((row["lower"], row["upper"]), other.confidence_interval, strict=True):
        assert abs(mine - theirs) < 6 * 0.027 * np.sqrt(2) * one_error
    low, high = stats.t.interval(0.95, len(difference) - 1, row["difference"], one_error)
    assert abs(row["lower"] - low) < 0.25 * one_error
    assert abs(row["upper"] - high) < 0.25 * one_error


def test_bands_cover_the_true_difference():
    """Skewed differences, 600 tables in one; false-alarm rate about 1e-6 for a coverage of 93.5 % or more."""
    repeats, replicates = 600, 200
    draws = np.random.default_rng(8).exponential(size=(repeats, replicates)) - 1
    measures = pd.DataFrame(
        {
            "policy": np.repeat([f"rule {k:03d}" for k in range(repeats)] + ["base"], replicates),
            "replicate": np.tile(np.arange(replicates), repeats + 1),
            "tasks": 1,
            "gap": np.append(draws.ravel(), np.zeros(replicates)),
        }
    )
    rows = compare(measures, baseline="base", rng=3)
    covered = int(((rows["lower"] <= 0) & (rows["upper"] >= 0)).sum())
    assert stats.binomtest(covered, repeats, 0.935, alternative="less").pvalue > 1e-6
    assert stats.binomtest(covered, repeats, 0.965, alternative="greater").pvalue > 1e-6


def test_all_policies_and_checkpoints_meet_the_same_resamples(draws):
    one = draws[draws["policy"] == "least-loaded"]
    copies = [draws, one.assign(policy="twin"), one.assign(policy="shifted", gap=one["gap"] + 1.0)]
    rows = compare(pd.concat(copies), baseline="one-choice", rng=3).set_index(["policy", "tasks"])
    bands = rows[["difference", "lower", "upper"]]
    np.testing.assert_allclose(bands.loc["twin"], bands.loc["least-loaded"], rtol=1e-12)
    np.testing.assert_allclose(bands.loc["shifted"], bands.loc["least-loaded"] + 1, rtol=1e-12)
    alone = compare(draws, baseline="one-choice", rng=3).set_index(["policy", "tasks"])
    np.testing.assert_allclose(
        bands.loc["least-loaded"], alone.loc["least-loaded", bands.columns], rtol=1e-12
    )


def test_constant_differences_have_a_band_of_width_zero(draws):
    base = draws[draws["policy"] == "one-choice"]
    rows = compare(pd.concat([base, base.assign(policy="same")]), baseline="one-choice", rng=1)
    assert (rows[["difference", "lower", "upper", "share_lower"]].to_numpy() == 0).all()


def test_without_an_rng_only_the_band_differs_from_call_to_call(draws):
    rows, again = (compare(draws, baseline="one-choice") for _ in range(2))
    pd.testing.assert_frame_equal(
        rows.drop(columns=["lower", "upper"]), again.drop(columns=["lower", "upper"])
    )
    assert not rows["lower"].equals(again["lower"])
    np.testing.assert_allclose(rows["lower"], again["lower"], atol=0.1 * np.ptp(rows[["lower", "upper"]]))


def test_the_same_rng_gives_the_same_bands_and_rows_in_any_order(draws):
    first = compare(draws, baseline="one-choice", rng=7)
    pd.testing.assert_frame_equal(
        first, compare(draws.sample(frac=1, random_state=1), baseline="one-choice", rng=7)
    )
    assert not first["lower"].equals(compare(draws, baseline="one-choice", rng=8)["lower"])


def test_policies_meet_within_their_information_only(draws):
    late = draws.assign(gap=draws["gap"] + 1, information="snapshot(every=9)")
    rows = compare(pd.concat([draws.assign(information="fresh"), late]), baseline="one-choice", rng=1)
    assert list(rows.columns[:3]) == ["policy", "information", "tasks"]
    fresh, stale = (rows[rows["information"] == word] for word in ("fresh", "snapshot(every=9)"))
    np.testing.assert_allclose(fresh["difference"], stale["difference"], rtol=1e-12)
    with pytest.raises(InputError, match=r"baseline 'one-choice' has no rows for information 'snapshot"):
        compare(
            pd.concat([draws.assign(information="fresh"), late[late["policy"] != "one-choice"]]),
            baseline="one-choice",
            rng=1,
        )


def test_a_table_with_the_baseline_alone_gives_no_rows(draws):
    rows = compare(draws[draws["policy"] == "one-choice"], baseline="one-choice", rng=1)
    assert len(rows) == 0
    assert "difference" in rows


@pytest.mark.parametrize(
    ("change", "options", "message"),
    [
        (lambda t: t, {"baseline": "one-choise"}, r"baseline is 'one-choise'.*did you mean 'one-choice'"),
        (lambda t: t, {"confidence": 95}, "confidence is 95"),
        (lambda t: t, {"rng": -1}, "rng is -1"),
        (lambda t: t.drop(columns="policy"), {}, "more than once"),
        (lambda t: t[t["policy"] == "one-choice"].drop(columns="policy"), {}, "no column 'policy'"),
        (
            lambda t: t[(t["policy"] == "one-choice") | (t["replicate"] != 5)],
            {},
            "replicate 5 of policy 'least-loaded' is missing",
        ),
        (
            lambda t: t[(t["policy"] != "one-choice") | (t["replicate"] != 5)],
            {},
            "replicate 5 of policy 'one-choice' is missing",
        ),
        (
            lambda t: t[(t["policy"] != "one-choice") | (t["tasks"] != 800)],
            {},
            "measured at tasks 800 but the baseline",
        ),
    ],
)
def test_what_cannot_be_paired_is_refused_in_one_sentence(draws, change, options, message):
    with pytest.raises(InputError, match=message):
        compare(change(draws), **{"baseline": "one-choice", "rng": 1, **options})


def test_one_replicate_has_no_band(draws):
    with pytest.raises(TooFewReplicates, match="at least 2"):
        compare(draws[draws["replicate"] == 0], baseline="one-choice", rng=1)
