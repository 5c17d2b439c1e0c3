"""Policies by name."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk
from labkit.policies.naming import BUILT_IN, parse_policy


@given(st.floats(0, 1))
def test_names_read_back(beta):
    plain = (lk.OneChoice(), lk.LeastLoaded(), lk.LeastLoaded(ties="first"), lk.StaticSplit())
    for policy in (*plain, lk.Mixed(beta)):
        assert parse_policy(policy.name) == policy
        assert parse_policy(policy.name).name == policy.name


def test_blanks_do_not_matter():
    assert parse_policy("  mixed( beta = 0.5 ) ") == lk.Mixed(0.5)


def test_every_built_in_refuses_unknown_words():
    for name in BUILT_IN:
        with pytest.raises(lk.InputError, match="with 'colour=red'"):
            parse_policy(f"{name}(colour=red)")


@pytest.mark.parametrize(
    "text", ["mixed(0.5)", "mixed(beta=)", "mixed(beta=0.5", "", "least loaded", "mixed(beta=nan)"]
)
def test_malformed_names_are_refused(text):
    with pytest.raises(lk.InputError):
        parse_policy(text)


def test_a_colon_will_do():
    assert parse_policy("mixed(beta: 0.5)") == parse_policy("mixed(beta=0.5)")
