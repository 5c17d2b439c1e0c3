"""How a measure grows with size: candidate laws, their weights, and bands that contain the choice of law."""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from scipy.stats import norm, t

from labkit.analysis.growth_bands import check_points, quantile_band
from labkit.analysis.growth_laws import (
    Form,
    Law,
    Parameters,
    aicc,
    akaike_weights,
    chosen_forms,
    misfit_of,
    usable_forms,
)
from labkit.analysis.growth_sizes import (
    SizeGroups,
    moderated_errors,
    resampled_means,
    sizes_and_values,
)
from labkit.analysis.growth_words import conclusions
from labkit.cards.shown import Shown
from labkit.checks import check_fraction, check_whole
from labkit.errors import InputError
from labkit.randomness import seed_sequence
from labkit.sharing.waiting import Waiting

_NEGLIGIBLE = 1e-5
_NOTABLE = 0.05


@dataclass(frozen=True, eq=False, repr=False)
class GrowthFit(Shown):
    """Fitted laws of growth; made by `fit_growth`.

    Attributes
    ----------
    x, y : str
        Names of the size and of the measure.
    sizes : pandas.DataFrame
        One row a size: x, replicates, mean, standard_error.
    confidence : float
        Coverage of the bands.
    weights : pandas.Series
        AICc weight of each law, its forms with and without an offset together, largest first.
    misfit : float
        1 when at least one law agrees with the means within their errors; otherwise the least chi-square
        per degree of freedom, by which chi-squares are divided and all bands widened (its square root).
    held_out : dict
        What the smaller sizes alone say about the largest: x, mean, standard_error, estimate, lower, upper
        (for the mean measured there), inside (whether it lies between;
        None when every law needs all sizes).
    left_out : dict
        Laws that were not fitted, with the reason.

    Examples
    --------
    A gap of 2√n, measured twice at each size and off by 0.1:

    >>> import pandas as pd
    >>> import labkit as lk
    >>> table = pd.DataFrame({"servers": 2 * [16, 64, 256], "gap": [7.9, 15.9, 31.9, 8.1, 16.1, 32.1]})
    >>> grown = lk.fit_growth(table, rng=1, resamples=200)
    >>> grown
    <GrowthFit of gap on servers from 16 to 256: square root 0.99>
    >>> grown.sizes[["x", "replicates", "mean"]].round(3).values.tolist()
    [[16.0, 2.0, 8.0], [64.0, 2.0, 16.0], [256.0, 2.0, 32.0]]
    """

    x: str
    y: str
    sizes: pd.DataFrame
    confidence: float
    weights: pd.Series
    misfit: float
    held_out: dict[str, Any]
    left_out: dict[str, str]
    _rows: pd.DataFrame
    _fitted: "_Fitted"

    def __repr__(self) -> str:
        low, high = self.sizes["x"].iloc[[0, -1]]
        laws = ", ".join(f"{name} {weight:.2f}" for name, weight in self.weights.items() if weight >= 0.05)
        return f"<GrowthFit of {self.y} on {self.x} from {low:g} to {high:g}: {laws}>"

    def table(self) -> pd.DataFrame:
        """Return one row a form of a law, largest weight first.

        Returns
        -------
        pandas.DataFrame
            law, formula, parameters (how many), factor (a), exponent (b) with exponent_lower and
            exponent_upper (percentiles over resamples), offset (c), chi_square, freedom (sizes − parameters),
            aicc, weight, held_out (relative error at the largest size when fitted to the others),
            held_out_errors (the same in standard errors of that difference).

        Examples
        --------
        >>> import pandas as pd
        >>> import labkit as lk
        >>> table = pd.DataFrame({"servers": 2 * [16, 64, 256], "gap": [7.9, 15.9, 31.9, 8.1, 16.1, 32.1]})
        >>> best = lk.fit_growth(table, rng=1, resamples=200).table().iloc[0]
        >>> best["law"], best["formula"], round(float(best["factor"]), 2)
        ('square root', 'a·√x', 2.0)
        """
        return self._rows.copy()

    def predict(self, xs: Any, *, simultaneous: bool = False, force: bool = False) -> pd.DataFrame:
        """Return the mean measure at any sizes, with a band that contains the choice of law.

        Parameters
        ----------
        xs : float or sequence of float
            Sizes.
        simultaneous : bool
            False: each row's band holds with the stated confidence by itself. True: all rows' bands hold at
            once with that confidence.
        force : bool
            Whether sizes beyond 16 times the largest (or below 1/16 of the smallest) are allowed.

        Returns
        -------
        pandas.DataFrame
            One row a size, in the order given: x, estimate (average over laws by weight), lower, upper,
            extrapolated (outside the sizes that were measured), disagreement (weighted standard deviation
            of the laws' estimates about their average).

        Raises
        ------
        InputError
            When a size is not a number above 0, too far outside, or where a fitted law is not defined.

        Examples
        --------
        >>> import pandas as pd
        >>> import labkit as lk
        >>> table = pd.DataFrame({"servers": 2 * [16, 64, 256], "gap": [7.9, 15.9, 31.9, 8.1, 16.1, 32.1]})
        >>> ahead = lk.fit_growth(table, rng=1, resamples=200).predict([256, 4096])
        >>> ahead[["x", "estimate", "extrapolated"]].round(1).values.tolist()
        [[256.0, 32.0, False], [4096.0, 128.0, True]]
        >>> bool((ahead["lower"] < ahead["estimate"]).all() and (ahead["estimate"] < ahead["upper"]).all())
        True
        """
        low, high = self.sizes["x"].iloc[0], self.sizes["x"].iloc[-1]
        points = self._points(xs, force)
        estimate, disagreement = self._fitted.average(points)
        lower, upper = self._fitted.band(points, self.confidence, simultaneous)
        return pd.DataFrame(
            {
                "x": points,
                "estimate": estimate,
                "lower": np.minimum(lower, estimate),
                "upper": np.maximum(upper, estimate),
                "extrapolated": (points < low) | (points > high),
                "disagreement": disagreement,
            }
        )

    def by_law(self, xs: Any, *, force: bool = False) -> pd.DataFrame:
        """Return what each form of each law says at any sizes, without bands.

        Parameters
        ----------
        xs, force
            As in `predict`.

        Returns
        -------
        pandas.DataFrame
            One row a form and size, largest weight first: law, formula, weight, x, estimate.

        Raises
        ------
        InputError
            As in `predict`.

        Examples
        --------
        >>> import pandas as pd
        >>> import labkit as lk
        >>> table = pd.DataFrame({"servers": 2 * [16, 64, 256], "gap": [7.9, 15.9, 31.9, 8.1, 16.1, 32.1]})
        >>> curves = lk.fit_growth(table, rng=1, resamples=200).by_law([4096])
        >>> curves[["law", "formula", "estimate"]].head(3).round(1).values.tolist()
        [['square root', 'a·√x', 128.0], ['square root', 'c + a·√x', 128.0], ['power', 'a·x^b', 128.0]]
        """
        points = self._points(xs, force)
        fitted, rows = self._fitted, []
        for at in np.argsort(-fitted.weights, kind="stable"):
            form = fitted.forms[at]
            curve = form.curves(points, fitted.best[at])[0]
            for x, estimate in zip(points, curve, strict=True):
                rows.append((form.law.name, form.formula, fitted.weights[at], x, estimate))
        return pd.DataFrame(rows, columns=["law", "formula", "weight", "x", "estimate"])

    def notes(self) -> list[str]:
        """Return what can and what cannot be concluded.

        Returns
        -------
        list of str
            One sentence each.

        Examples
        --------
        >>> import pandas as pd
        >>> import labkit as lk
        >>> table = pd.DataFrame({"servers": 2 * [16, 64, 256], "gap": [7.9, 15.9, 31.9, 8.1, 16.1, 32.1]})
        >>> lk.fit_growth(table, rng=1, resamples=200).notes()[0]
        'Among the laws tried, the data single out square root (0.99).'
        """
        heavy = [at for at, weight in enumerate(self._fitted.weights) if weight >= _NOTABLE]
        limits = [
            form.formula
            for form, best in ((self._fitted.forms[at], self._fitted.best[at]) for at in heavy)
            if form.law.exponents and np.isclose(best.exponent[0], form.law.exponents, atol=1e-3).any()
        ]
        return conclusions(self.y, self.weights, self.misfit, self.held_out, limits, self.left_out)

    def _points(self, xs: Any, force: bool) -> np.ndarray:
        low, high = self.sizes["x"].iloc[0], self.sizes["x"].iloc[-1]
        above = {form.law.name: form.law.above for form in self._fitted.forms}
        return check_points(xs, float(low), float(high), above, force)


@dataclass(frozen=True, eq=False)
class _Fitted:
    """Forms with their fits to the means (`best`, one table) and to resampled means (`again`)."""

    forms: list[Form]
    best: list[Parameters]
    scores: np.ndarray  # AICc, (forms,)
    weights: np.ndarray  # (forms,)
    again: list[Parameters]
    weights_again: np.ndarray  # (resamples, forms)
    misfit: float

    def average(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        curves = np.vstack([f.curves(points, p) for f, p in zip(self.forms, self.best, strict=True)])
        kept = self.weights > 0
        curves, weights = curves[kept], self.weights[kept]
        mean = weights @ curves
        return mean, np.sqrt(weights @ (curves - mean) ** 2)

    def band(
        self, points: np.ndarray, confidence: float, simultaneous: bool
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return limits from all curves of all resamples, each with its law's weight in that resample."""
        curves, masses = [], []
        for at, (form, fits) in enumerate(zip(self.forms, self.again, strict=True)):
            mass = self.weights_again[:, at]
            kept = mass > _NEGLIGIBLE
            some = Parameters(*(getattr(fits, name)[kept] for name in fits.__dataclass_fields__))
            if kept.any():
                curves.append(form.curves(points, some))
                masses.append(mass[kept])
        return quantile_band(np.vstack(curves), np.concatenate(masses), confidence, simultaneous)


def fit_growth(
    measures: pd.DataFrame,
    x: str = "servers",
    y: str = "gap",
    *,
    rng: Any,
    laws: Iterable[str | Law] | None = None,
    confidence: float = 0.95,
    resamples: int = 2_000,
) -> GrowthFit:
    """Fit laws of growth to the mean of a measure, weigh them, and say how sure a larger size is.

    Each law is fitted to the means at each size by least squares weighted with their standard errors, and
    gets a weight by its AICc [1]_: chi-square + 2k + 2(k + 1)(k + 2)/(n − k − 2) with k parameters and n
    rows; laws are equally likely beforehand, with their forms (with and without an offset) together. Bands
    come from the bootstrap [2]_: whole replicates are drawn anew within each size, and all laws are fitted
    and weighed again in each resample; the band then holds the curves of all resamples, each law with its
    weight there, so that it contains the choice of law [3]_. Resampled means are spread to the standard
    error with divisor n − 1, times the ratio of Student's t to the normal.

    Parameters
    ----------
    measures : pandas.DataFrame
        One row a replicate, with columns `x` and `y`; at least three sizes and two replicates at each.
        Replicates at different sizes are taken as independent.
    x : str
        Column (or index level) of the size.
    y : str
        Column of the measure.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Source of the resamples.
    laws : iterable of str or Law, optional
        Laws to be tried. Default: all seven and those of `register_law`. A law that is not defined at the
        smallest size, or has more parameters than there are sizes, is left out.
    confidence : float
        Coverage of the bands, in (0, 1).
    resamples : int
        Number of resamples, at least 200.

    Returns
    -------
    GrowthFit
        With ``.predict(xs)`` (within 16 times the sizes measured unless forced), ``.by_law(xs)``,
        ``.table()``, ``.notes()``, from `labkit.fit_growth` also ``.figure()``, and the attributes described
        there.

    Raises
    ------
    TooFewReplicates
        When a size has a single replicate.
    InputError
        When the table mixes policies, studies or moments, has too few sizes, or holds a value that cannot
        be used.

    Examples
    --------
    >>> import labkit as lk
    >>> import pandas as pd
    >>> sizes = [8, 16, 32, 64]
    >>> runs = [lk.place(lk.ring(n), "one-choice", tasks=64 * n, replicates=40, rng=1) for n in sizes]
    >>> table = pd.concat([run.measures.assign(servers=n) for n, run in zip(sizes, runs)])
    >>> grown = lk.fit_growth(table, rng=2)
    >>> ahead = grown.predict([64, 256])
    >>> ahead["extrapolated"].tolist()
    [False, True]
    >>> bool((ahead["lower"] < ahead["estimate"]).all() and (ahead["estimate"] < ahead["upper"]).all())
    True

    References
    ----------
    .. [1] K. P. Burnham and D. R. Anderson, "Model Selection and Multimodel Inference", 2nd edition,
       Springer, 2002, chapters 2 and 4 (from memory).
    .. [2] B. Efron and R. J. Tibshirani, "An Introduction to the Bootstrap", Chapman & Hall, 1993 (from
       memory).
    .. [3] B. Efron, "Estimation and accuracy after model selection", J. Amer. Statist. Assoc. 109, 2014
       (from memory): the choice of model belongs into the resample.
    """
    seed = seed_sequence(rng)
    confidence = check_fraction("confidence", confidence)
    resamples = check_whole("resamples", resamples, least=200)
    forms = chosen_forms(laws)
    groups = sizes_and_values(measures, x, y)
    errors, freedom = moderated_errors(groups)
    forms, left_out = usable_forms(forms, groups.x)
    if not forms:
        reasons = "; ".join(f"{name} is {reason}" for name, reason in left_out.items())
        raise InputError(f"laws leaves no law to fit: {reasons}; name others.")
    # An error that is itself uncertain makes a wider band, as in Student's t.
    stretch = t.ppf((1 + confidence) / 2, freedom) / norm.ppf((1 + confidence) / 2)
    generator = np.random.Generator(np.random.SFC64(seed))
    again = resampled_means(groups, errors * stretch, resamples, generator)
    least_freedom = float(freedom.min())
    fitted = _fit_all(forms, groups, errors, again, least_freedom)
    if fitted.misfit > 1:
        again = groups.means + (again - groups.means) * np.sqrt(fitted.misfit)
        fitted = _fit_all(forms, groups, errors, again, least_freedom)
    held_out, by_form = _held_out(forms, groups, errors, again, least_freedom, confidence)
    table = _table(fitted, groups, confidence, by_form)
    weights = table.groupby("law", sort=False)["weight"].sum().sort_values(ascending=False, kind="stable")
    sizes = pd.DataFrame(
        {"x": groups.x, "replicates": groups.counts, "mean": groups.means, "standard_error": errors}
    )
    return GrowthFit(x, y, sizes, confidence, weights, fitted.misfit, held_out, left_out, table, fitted)


def _fit_all(
    forms: list[Form], groups: SizeGroups, errors: np.ndarray, means: np.ndarray, freedom: float
) -> _Fitted:
    """Fit and weigh all forms, on the means of `groups` and on the resampled `means`."""
    best = [form.fit_one(groups.x, groups.means, errors) for form in forms]
    again = []
    with Waiting("laws fitted to resamples", len(forms), "law") as waiting:
        for form in forms:
            again.append(form.fit(groups.x, means, errors))
            waiting.add()
    chi_square = np.array([fits.chi_square[0] for fits in best])
    misfit = misfit_of(forms, chi_square, len(groups.x), freedom)
    rows = int(groups.counts.sum())
    prior = np.array([1 / sum(other.law is form.law for other in forms) for form in forms])
    scores = aicc(forms, chi_square, rows, misfit)
    # The noise of the data is in a resample twice, which would favour laws with more parameters; half of the
    # excess goes when its AICc is averaged with that of the data.
    scores_again = (
        aicc(forms, np.column_stack([fits.chi_square for fits in again]), rows, misfit) + scores
    ) / 2
    weights, weights_again = akaike_weights(scores, prior), akaike_weights(scores_again, prior)
    return _Fitted(forms, best, scores, weights, again, weights_again, misfit)


def _held_out(
    forms: list[Form],
    groups: SizeGroups,
    errors: np.ndarray,
    means: np.ndarray,
    freedom: float,
    confidence: float,
) -> tuple[dict[str, Any], dict[Form, tuple[float, float]]]:
    """Return what the smaller sizes say about the largest: all laws together, and each form by itself."""
    x, mean, error = groups.x[-1:], groups.means[-1], errors[-1]
    about = {"x": float(x[0]), "mean": float(mean), "standard_error": float(error)}
    forms = [form for form in forms if form.count < len(groups.x)]
    if not forms:
        return {**about, "estimate": np.nan, "lower": np.nan, "upper": np.nan, "inside": None}, {}
    smaller = SizeGroups(groups.x[:-1], groups.values[:-1])
    fitted = _fit_all(forms, smaller, errors[:-1], means[:, :-1], freedom)
    by_form, curves = {}, []
    for form, best, again in zip(fitted.forms, fitted.best, fitted.again, strict=True):
        off = form.curves(x, best)[0, 0] - mean
        ahead = form.curves(x, again)[:, 0]
        spread = float(np.hypot(np.diff(np.quantile(ahead, norm.cdf([-1, 1])))[0] / 2, error))
        by_form[form] = (off / abs(mean) if mean else np.nan, off / spread)
        curves.append(ahead + means[:, -1] - mean)
    points, masses = np.concatenate(curves)[:, None], fitted.weights_again.T.ravel()
    (lower,), (upper,) = quantile_band(points, masses, confidence, False)
    about |= {"estimate": float(fitted.average(x)[0][0]), "lower": float(lower), "upper": float(upper)}
    return {**about, "inside": bool(lower <= mean <= upper)}, by_form


def _table(
    fitted: _Fitted, groups: SizeGroups, confidence: float, held_out: dict[Form, tuple[float, float]]
) -> pd.DataFrame:
    tails = [(1 - confidence) / 2, (1 + confidence) / 2]
    rows = []
    for at, (form, best, again) in enumerate(zip(fitted.forms, fitted.best, fitted.again, strict=True)):
        low, high = np.quantile(again.exponent, tails)
        row = {"law": form.law.name, "formula": form.formula, "parameters": form.count}
        row |= {"factor": best.factor[0], "exponent": best.exponent[0]}
        row |= {"exponent_lower": low, "exponent_upper": high, "offset": best.offset[0]}
        row |= {"chi_square": best.chi_square[0], "freedom": len(groups.x) - form.count}
        row |= {"aicc": fitted.scores[at], "weight": fitted.weights[at]}
        row["held_out"], row["held_out_errors"] = held_out.get(form, (np.nan, np.nan))
        rows.append(row)
    return pd.DataFrame(rows).sort_values("weight", ascending=False, kind="stable", ignore_index=True)
