"""What the survey means for an answer, in words."""

import pandas as pd
import pytest

import labkit as lk
from labkit.analysis.balance import balance_in_words, in_words


def test_a_balanceable_fleet_is_said_to_be_one():
    assert "is balanceable" in balance_in_words(lk.survey(lk.ring(8)), 80.0)
    assert "the mean of 10.00" in balance_in_words(lk.survey(lk.ring(8)), 80.0)


def test_a_bottleneck_is_named_with_what_it_costs():
    # Star with a heavy edge: {a, b} take 3 of the 4 units, so 1.5 each when the mean is 4/3.
    choices = pd.DataFrame({"option_1": ["a", "b"], "option_2": ["b", "c"], "demand": [3.0, 1.0]})
    best = lk.survey(lk.Fleet(pd.DataFrame({"server": ["a", "b", "c"]}), choices))
    words = balance_in_words(best, 30.0)
    assert "is not balanceable" in words
    assert "the servers a and b will" in words
    assert "at least 11.250 full, 1.250 above the mean of 10.000" in words


@pytest.mark.parametrize(
    ("count", "words"),
    [
        (1, "server s0"),
        (2, "the servers s0 and s1"),
        (6, "the servers s0, s1, s2, s3, s4 and s5"),
        (7, "the 7 servers s0, s1, s2, s3, s4 and 2 more"),
    ],
)
def test_servers_in_words(count, words):
    assert in_words([f"s{number}" for number in range(count)]) == words
