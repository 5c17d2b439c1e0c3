"""Service laws: moments and draws against SciPy's distributions, names, refusals.

False alarms: each comparison with draws fails a correct program with probability 1e-6 (goodness of fit) or
6e-5 (4 standard errors), 2e-3 in all; seeds are fixed, so that a pass stays a pass.
"""

import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

import labkit as lk
from labkit.engine.service_laws import LAWS, parse_service
from tests.published.standard_error import assert_within

DRAWS = 400_000
SAMPLE = np.random.default_rng(3).gamma(2.0, 1.5, 1_000)


def two_phases(cv):
    """Return a function of x: the distribution function of balanced means 1, phase by phase."""
    root = np.sqrt((cv**2 - 1) / (cv**2 + 1))
    shares = np.array([(1 + root) / 2, (1 - root) / 2])
    return lambda x: sum(share * stats.expon.cdf(x, scale=1 / (2 * share)) for share in shares)


def lognormal(mean, cv):
    spread = np.log(1 + cv**2)
    return stats.lognorm(np.sqrt(spread), scale=mean * np.exp(-spread / 2))


CONTINUOUS = {
    "exponential": (lk.Exponential(mean=2.5), stats.expon(scale=2.5)),
    "lognormal": (lk.Lognormal(cv=1.5, mean=0.5), lognormal(0.5, 1.5)),
    "narrow lognormal": (lk.Lognormal(cv=0.01), lognormal(1.0, 0.01)),
    "pareto": (lk.BoundedPareto(1.5, 1000), stats.truncpareto(1.5, 1000)),
    "pareto of shape 1": (lk.BoundedPareto(1, 100, mean=3), stats.truncpareto(1, 100)),
    "pareto of shape 2": (lk.BoundedPareto(2, 50), stats.truncpareto(2, 50)),
    "light pareto": (lk.BoundedPareto(5, 4), stats.truncpareto(5, 4)),
}


def scaled(law, outside):
    """Return SciPy's law at the scale that gives the mean of ours; a Pareto law there starts at 1."""
    low = law.mean / outside.mean()
    return stats.truncpareto(*outside.args, scale=low) if isinstance(law, lk.BoundedPareto) else outside


@pytest.mark.parametrize("case", CONTINUOUS)
def test_moments_are_those_of_the_law_outside(case):
    law, outside = CONTINUOUS[case]
    outside = scaled(law, outside)
    assert law.mean == pytest.approx(outside.mean(), rel=1e-9)
    assert law.second_moment == pytest.approx(outside.moment(2), rel=1e-7)
    assert law.variation == pytest.approx(outside.std() / outside.mean(), rel=1e-6)


@pytest.mark.parametrize("case", CONTINUOUS)
def test_draws_follow_the_law_outside(case):
    law, outside = CONTINUOUS[case]
    drawn = law.draw(np.random.default_rng(1), 20_000)
    assert stats.kstest(drawn, scaled(law, outside).cdf).pvalue > 1e-6


@pytest.mark.parametrize("cv", [1, 2, 10])
def test_hyperexponential_draws_follow_two_phases_of_balanced_means(cv):
    drawn = lk.Hyperexponential(cv=cv).draw(np.random.default_rng(2), 20_000)
    assert stats.kstest(drawn, two_phases(cv)).pvalue > 1e-6


def test_hyperexponential_of_cv_1_is_exponential():
    law = lk.Hyperexponential(cv=1)
    assert (law.short, law.long) == (0.5, 0.5)
    assert law.second_moment == lk.Exponential().second_moment


def test_phases_of_a_wide_hyperexponential_keep_their_digits():
    # the long phase brings half of the work, and the two phases the whole second moment, at any width
    law = lk.Hyperexponential(cv=1e6)
    assert law.short + law.long == 1
    phases = sum(2 * share * (1 / (2 * share)) ** 2 for share in (law.short, law.long))
    assert phases == pytest.approx(law.second_moment, rel=1e-9)


EVERY = [
    lk.Exponential(),
    lk.Deterministic(mean=3),
    lk.Lognormal(cv=0.7, mean=20),
    lk.Hyperexponential(cv=2),
    lk.BoundedPareto(3.5, 100),
    lk.BoundedPareto(1.1, 50),
    lk.Empirical(SAMPLE),
]


@pytest.mark.parametrize("law", EVERY, ids=repr)
def test_draws_have_the_stated_moments(law):
    drawn = law.draw(np.random.default_rng(7), DRAWS)
    assert drawn.dtype == np.float64
    assert drawn.shape == (DRAWS,)
    assert drawn.min() > 0
    assert_within(drawn, law.mean, largest_error=0.01 * law.mean)
    assert_within(drawn**2, law.second_moment, largest_error=0.02 * law.second_moment)


@pytest.mark.parametrize("law", EVERY, ids=repr)
def test_draws_are_repeated_by_the_stream_alone(law):
    one, other = (law.draw(np.random.default_rng(5), 100) for _ in range(2))
    assert np.array_equal(one, other)
    copy = pickle.loads(pickle.dumps(law))
    assert copy == law
    assert np.array_equal(copy.draw(np.random.default_rng(5), 100), one)


class Zeros:
    """A generator's rarest outcome: nothing but zeros."""

    def standard_exponential(self, count):
        return np.zeros(count)

    def random(self, count):
        return np.zeros(count)


@pytest.mark.parametrize(
    "law", [lk.Exponential(), lk.Hyperexponential(cv=2), lk.BoundedPareto(1, 10)], ids=repr
)
def test_no_requirement_is_zero(law):
    assert (law.draw(Zeros(), 3) > 0).all()


def test_bounded_pareto_stays_within_its_bounds():
    for shape in (1e-9, 0.5, 300.0):
        law = lk.BoundedPareto(shape, 1e6)
        drawn = law.draw(np.random.default_rng(1), 10_000)
        assert drawn.min() >= law.low
        assert drawn.max() <= law.high == law.low * 1e6
    assert lk.BoundedPareto(1e300, 1e100).second_moment == 1


def test_empirical_draws_every_value_alike():
    # chi-square with 4 degrees of freedom, false alarm 1e-6
    law = lk.Empirical([5.0, 1.0, 2.0, 8.0, 3.0])
    values, counts = np.unique(law.draw(np.random.default_rng(4), 50_000), return_counts=True)
    assert values.tolist() == [1.0, 2.0, 3.0, 5.0, 8.0]
    assert stats.chisquare(counts).pvalue > 1e-6


def test_empirical_keeps_a_copy():
    given = np.array([1.0, 2.0])
    law = lk.Empirical(given)
    given[0] = 50
    assert law.mean == 1.5
    assert not law.draw(np.random.default_rng(1), 50).max() > 2
    assert law != lk.Empirical([1.0, 3.0])
    assert law == lk.Empirical((1, 2))
    assert hash(law) == hash(lk.Empirical((1, 2)))


@given(st.floats(1e-9, 1e9), st.floats(1, 1e6), st.floats(0.01, 50))
@settings(max_examples=30)
def test_names_read_back(mean, cv, shape):
    for law in (
        lk.Exponential(mean), lk.Deterministic(mean), lk.Lognormal(mean, cv=cv),
        lk.Hyperexponential(mean, cv=cv), lk.BoundedPareto(shape, 1 + cv, mean),
    ):  # fmt: skip
        assert parse_service(law.name) == law
        assert parse_service(law.name).second_moment == law.second_moment
        assert parse_service(law) is law


def test_names_hold_only_what_is_not_at_its_default():
    assert [parse_service(text).name for text in ("exponential", "exponential(mean=1)")] == [
        "exponential"
    ] * 2
    assert parse_service(" lognormal( cv = 2, mean=1.0 )").name == "lognormal(cv=2.0)"
    assert lk.Lognormal(mean=3, cv=2).name == "lognormal(cv=2.0, mean=3.0)"
    assert repr(lk.BoundedPareto(1.5, 10)) == "<service bounded-pareto(shape=1.5, ratio=10.0)>"
    assert set(LAWS) == {law.name.partition("(")[0] for law in EVERY} - {"empirical"}


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("exponental", "service is 'exponental'; did you mean 'exponential'"),
        ("pareto", "did you mean 'bounded-pareto'"),
        ("lognormal", r"it needs cv, as in 'lognormal\(cv=2\)'"),
        ("hyperexponential", "it needs cv"),
        ("bounded-pareto(shape=1)", r"it needs ratio, as in 'bounded-pareto\(shape=2, ratio=2\)'"),
        ("bounded-pareto", "it needs shape and ratio"),
        ("lognormal(CV=2)", "with 'CV=2'; allowed: mean, cv"),
        ("lognormal(cv=2, cv=3)", "give cv once"),
        ("lognormal(2)", "with '2'"),
        ("lognormal(cv=wide)", "cv is 'wide'; give a finite number"),
        ("exponential(mean=nan)", "mean is nan"),
        ("deterministic(cv=2)", "with 'cv=2'; allowed: mean"),
        ("", r"give a service or its name, such as 'lognormal\(cv=2\)'"),
        (3, "service is 3"),
        (None, "service is None"),
        (np.random.default_rng, "give a service or its name"),
        ("empirical(count=2, digest=ab)", r"a text holds no sample, so give lk.Empirical\(sample\)"),
    ],
)
def test_texts_are_refused(text, words):
    with pytest.raises(lk.InputError, match=words):
        parse_service(text)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: lk.Exponential(0), "mean is 0; give a number above 0"),
        (lambda: lk.Deterministic(mean=-1), "mean is -1"),
        (lambda: lk.Exponential(mean=True), "mean is True"),
        (lambda: lk.Exponential(mean=1e200), "mean is 1e.200; give a number from 1e-100 to 1e.100"),
        (lambda: lk.Lognormal(cv=0), "cv is 0; give a number above 0"),
        (lambda: lk.Lognormal(cv=1e7), "cv is 10000000.0; give at most 1e.06"),
        (lambda: lk.Hyperexponential(cv=0.5), "cv is 0.5; a hyperexponential law has a cv of at least 1"),
        (lambda: lk.BoundedPareto(0, 10), "shape is 0"),
        (lambda: lk.BoundedPareto(1, 1), "ratio is 1; give highest"),
        (lambda: lk.BoundedPareto(1, 1e200), "at most 1e.100"),
        (lambda: lk.BoundedPareto(1, float("nan")), "ratio is nan"),
        (lambda: lk.Empirical([]), r"sample is numbers of shape \(0,\)"),
        (lambda: lk.Empirical([[1.0]]), r"shape \(1, 1\)"),
        (lambda: lk.Empirical("abc"), "sample is str; give a list"),
        (lambda: lk.Empirical(2.0), r"shape \(\)"),
        (
            lambda: lk.Empirical([1.0, 0.0]),
            "sample holds 0.0 at place 2; each requirement is a number above 0",
        ),
        (lambda: lk.Empirical([np.nan]), "sample holds nan at place 1"),
        (lambda: lk.Empirical([1.0, np.inf]), "inf at place 2"),
        (lambda: lk.Empirical([True]), "sample is list"),
    ],
)
def test_bad_parameters_are_refused(make, words):
    with pytest.raises(lk.InputError, match=words):
        make()
