"""Laws of growth: fits against SciPy, exact recovery, weights by hand, registration."""

import numpy as np
import pytest
from scipy.optimize import curve_fit

from labkit.analysis.growth_laws import (
    LAWS,
    Form,
    Law,
    Parameters,
    aicc,
    akaike_weights,
    chosen_forms,
    misfit_of,
    register_law,
    usable_forms,
)
from labkit.errors import InputError

X = 2.0 ** np.arange(4, 12)
EXPONENTS = {"power": 0.6, "power of log": 1.7}
FORMS = [form for law in LAWS.values() for form in law.forms()]


def curve(form: Form, factor=0.8, offset=2.5):
    shape = form.law.shape(X) if form.law.exponents is None else form.law.shape(X, EXPONENTS[form.law.name])
    return factor * shape + (offset if form.offset else 0.0)


@pytest.fixture
def registry():
    before = dict(LAWS)
    yield LAWS
    LAWS.clear()
    LAWS.update(before)


@pytest.mark.parametrize("form", FORMS, ids=lambda form: form.formula)
def test_exact_curves_are_recovered(form):
    fitted = form.fit_one(X, curve(form), 0.01 * X**0.3)
    assert fitted.chi_square[0] < 1e-8
    assert fitted.factor[0] == pytest.approx(0.8, rel=1e-5)
    if form.law.exponents:
        assert fitted.exponent[0] == pytest.approx(EXPONENTS[form.law.name], rel=1e-6)
    if form.offset:
        assert fitted.offset[0] == pytest.approx(2.5, rel=1e-5)
    else:
        assert np.isnan(fitted.offset[0])
    np.testing.assert_allclose(form.curves(X, fitted)[0], curve(form), rtol=1e-6)


@pytest.mark.parametrize("form", FORMS, ids=lambda form: form.formula)
def test_fits_agree_with_curve_fit(form):
    rng = np.random.default_rng(5)
    errors = 0.02 * curve(form) * rng.uniform(0.5, 2, len(X))
    tables = curve(form) + errors * rng.standard_normal((6, len(X)))
    fitted = form.fit(X, tables, errors)
    for at, means in enumerate(tables):

        def model(x, *values):
            values = list(values)
            offset = values.pop() if form.offset else 0.0
            return offset + values[0] * form.law.shape(x, *values[1:])

        start = [0.8, *([EXPONENTS[form.law.name]] if form.law.exponents else []), *([2.5] * form.offset)]
        theirs, _ = curve_fit(model, X, means, p0=start, sigma=errors, maxfev=20_000, xtol=1e-13, ftol=1e-13)
        least = (((means - model(X, *theirs)) / errors) ** 2).sum()
        assert fitted.chi_square[at] == pytest.approx(least, rel=1e-6)
        one = form.fit_one(X, means, errors)
        assert one.chi_square[0] <= fitted.chi_square[at] * (1 + 1e-12)
        np.testing.assert_allclose(form.curves(X, one)[0], model(X, *theirs), rtol=1e-4)


def test_weights_by_hand():
    scores = np.array([[3.0, 5.0, 3.0]])
    weights = akaike_weights(scores, np.array([1.0, 1.0, 0.5]))[0]
    expected = np.array([1, np.exp(-1), 0.5])
    np.testing.assert_allclose(weights, expected / expected.sum())
    constant, line = LAWS["constant"].forms()[0], LAWS["log"].forms()[0]
    # 2k + 2(k + 1)(k + 2)/(n − k − 2) with n = 20: 2 + 12/17 and 4 + 24/16
    np.testing.assert_allclose(aicc([constant, line], np.array([6.0, 4.0]), 20, 2.0), [5 + 12 / 17, 7.5])


def test_misfit_is_one_when_one_law_fits():
    forms = LAWS["constant"].forms() + LAWS["log"].forms()
    assert misfit_of(forms, np.array([700.0, 8.0]), 8, 1e6) == 1.0
    assert misfit_of(forms, np.array([700.0, 60.0]), 8, 1e6) == pytest.approx(10.0)
    assert misfit_of(forms[1:], np.array([0.0]), 2, 10.0) == 1.0


def test_laws_that_do_not_fit_the_sizes_are_left_out():
    kept, reasons = usable_forms(FORMS, np.array([2.0, 8.0, 32.0]))
    assert {form.law.name for form in kept} == {"constant", "log", "power of log", "square root", "power"}
    assert reasons["log log"] == "defined above 2.718, and the smallest size is 2"
    kept, reasons = usable_forms(FORMS, np.array([20.0, 40.0]))
    assert reasons["power with an offset"] == "has 3 parameters, and there are 2 sizes"
    assert max(form.count for form in kept) == 2


def test_a_registered_law_is_tried(registry):
    law = register_law("cube root", np.cbrt, formula="x^(1/3)")
    assert registry["cube root"] is law
    assert [form.formula for form in chosen_forms(["cube root"])] == ["a·x^(1/3)", "c + a·x^(1/3)"]
    assert len(chosen_forms(None)) == len(FORMS) + 2
    stretched = register_law(
        "saturating", lambda x, b: -np.expm1(-((x / 50) ** b)), exponents=(0.2, 2.0), offset="never"
    )
    means = 7 * stretched.shape(X, 0.8)
    fitted = stretched.forms()[0].fit_one(X, means, np.ones(len(X)))
    assert (fitted.factor[0], fitted.exponent[0]) == pytest.approx((7, 0.8), rel=1e-5)
    assert isinstance(fitted, Parameters)


def test_laws_are_asked_by_name_or_as_they_are():
    cube = Law("cube", np.cbrt, "x^(1/3)", None, "never", 0.0)
    assert [form.law.name for form in chosen_forms([cube, "log"])] == ["cube", "log"]
    assert [form.law.name for form in chosen_forms("log")] == ["log"]


@pytest.mark.parametrize(
    ("given", "sentence"),
    [
        ({"name": "power"}, "name is 'power', which is taken; choose another"),
        ({"name": " "}, "name is ' '; give the law a name"),
        ({"offset": "maybe"}, "offset is 'maybe'"),
        ({"exponents": (2, 1)}, r"exponents is \(2, 1\); give the lowest and the highest"),
        ({"exponents": 3}, "exponents is 3; give the lowest and the highest"),
        ({"exponents": (0, 1)}, r"does not take shape\(x, exponent\)"),
        ({"shape": "√x"}, "shape of 'new' is '√x'; give a function"),
        ({"shape": lambda x: 1.0}, "it must give one finite number for each x"),
        ({"shape": lambda x: x * np.nan}, "it must give one finite number for each x"),
        ({"above": np.inf}, "above is inf"),
    ],
)
def test_what_is_no_law_is_refused(registry, given, sentence):
    before = set(registry)
    given = {"name": "new", "shape": lambda x: np.cbrt(x), **given}
    with pytest.raises(InputError, match=sentence):
        register_law(given.pop("name"), given.pop("shape"), **given)
    assert set(registry) == before


@pytest.mark.parametrize(
    ("laws", "sentence"),
    [
        (["powr"], "laws holds 'powr'; did you mean 'power'"),
        ([3], "laws holds 3"),
        ([], "laws is empty"),
        (["log", Law("log", np.log2, "log2 x", None, "always", 0.0)], "two different laws named 'log'"),
    ],
)
def test_unknown_laws_are_refused(laws, sentence):
    with pytest.raises(InputError, match=sentence):
        chosen_forms(laws)
