"""From what age of the reports on looking is worse: read from tables whose answer is known."""

import numpy as np
import pandas as pd
import pytest

from labkit.analysis.herding import against_blind, herding_words, worse_from
from labkit.errors import InputError, TooFewReplicates

AGES = (1.0, 2.0, 4.0, 8.0)


def measures(crossing=4.0, replicates=5):
    """Runs in which least-loaded has age/crossing times the sojourn of one-choice, replicate by replicate."""
    base = 10.0 + np.arange(replicates)
    rows = [("a ring", np.nan, "one-choice", at, base[at]) for at in range(replicates)]
    rows += [
        ("a ring", age, "least-loaded", at, base[at] * age / crossing + 0.01 * (-1) ** at)
        for age in AGES
        for at in range(replicates)
    ]
    return pd.DataFrame(rows, columns=["network", "age", "policy", "replicate", "sojourn_mean"])


def test_ratios_are_paired():
    table = against_blind(measures())
    np.testing.assert_allclose(table["estimate"], np.array(AGES) / 4, atol=1e-3)
    # unpaired, the limits would be as wide as the replicates differ: 15 % and more
    assert (table["upper"] - table["lower"]).max() < 0.01


def test_the_age_is_where_the_ratio_crosses_one():
    found = worse_from(against_blind(measures(crossing=3.0))).iloc[0]
    assert (found["better_at"], found["worse_at"]) == (2.0, 4.0)
    # ratios 2/3 and 4/3 at 2 and 4: half-way on a logarithmic scale
    assert found["age"] == pytest.approx(np.sqrt(8.0), rel=1e-2)


@pytest.mark.parametrize(
    ("crossing", "words"),
    [
        (3.0, "worse than not looking once reports are about 2.83"),
        (100.0, "better than not looking up to 8 mean service times"),
        (0.5, "not better than not looking, with certainty, at the youngest age"),
    ],
)
def test_words(crossing, words):
    found = worse_from(against_blind(measures(crossing)))
    assert words in herding_words(found, service_time=5.0, unit="minutes")


def test_what_cannot_be_compared_is_refused():
    with pytest.raises(InputError, match="no column 'age'"):
        against_blind(measures().drop(columns="age"))
    with pytest.raises(InputError, match="needs 'one-choice' once a replicate on a ring"):
        against_blind(measures()[lambda table: table["policy"] != "one-choice"])
    with pytest.raises(TooFewReplicates):
        against_blind(measures(replicates=1))
