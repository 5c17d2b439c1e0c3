"""Laws of growth: which curves are tried, and their weighted least-squares fits to many tables at once."""

import inspect
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.optimize import least_squares
from scipy.stats import f as variance_ratio

from labkit.checks import check_member, check_number, nearest
from labkit.errors import InputError

Shape = Callable[..., np.ndarray]

# Points at which an exponent is tried first; an even count leaves out 0, where a power is a second offset.
_GRID = 80
_GOLDEN = (np.sqrt(5) - 1) / 2
# Brackets shrink by 0.618 a step: 24 steps leave 1e-5 of the spacing, and the misfit is flat there.
_STEPS = 24
# Every law is taken to misfit when even the best would be as far off once in a hundred times.
_MISFIT = 0.01
_OFFSETS = {"both": (False, True), "always": (True,), "never": (False,)}


@dataclass(frozen=True)
class Law:
    """A curve ``factor · shape(x)`` or ``factor · shape(x, exponent)``, with or without an offset added.

    Attributes
    ----------
    name : str
    shape : callable
        The curve; it broadcasts over arrays.
    formula : str
        The shape in words, such as "x^b".
    exponents : tuple of float or None
        Where the exponent is searched.
    offset : str
        "both" tries the law with and without an offset, "always" and "never" only the one.
    above : float
        The law is defined for x above this.
    """

    name: str
    shape: Shape
    formula: str
    exponents: tuple[float, float] | None
    offset: str
    above: float

    def forms(self) -> list["Form"]:
        """Return the law with an offset, without, or both."""
        return [Form(self, offset) for offset in _OFFSETS[self.offset]]


@dataclass(frozen=True)
class Parameters:
    """Fits of one form to several tables; all arrays of shape (tables,), NaN for what the form lacks."""

    factor: np.ndarray
    exponent: np.ndarray
    offset: np.ndarray
    chi_square: np.ndarray


@dataclass(frozen=True)
class Form:
    """A law with or without an offset."""

    law: Law
    offset: bool

    @property
    def count(self) -> int:
        """Number of fitted parameters."""
        return 1 + self.offset + (self.law.exponents is not None)

    @property
    def formula(self) -> str:
        """The whole curve in words."""
        scaled = "a" if self.law.formula == "1" else f"a·{self.law.formula}"
        return f"c + {scaled}" if self.offset else scaled

    def fit(self, x: np.ndarray, means: np.ndarray, errors: np.ndarray) -> Parameters:
        """Return the weighted least-squares fits to every row of `means`.

        Given the exponent the curve is linear, so the exponent is the only unknown that is searched
        (variable projection, Golub & Pereyra 1973, from memory): on a grid, then by golden section around
        the best grid point.

        Parameters
        ----------
        x : numpy.ndarray, shape (sizes,)
        means : numpy.ndarray, shape (tables, sizes)
        errors : numpy.ndarray, shape (sizes,)
            Standard errors of the means.
        """
        scaled = means / errors
        if self.law.exponents is None:
            exponent = np.full(len(means), np.nan)
        else:
            exponent = self._search(x, scaled, errors)
        factor, offset, chi_square = self._project(self._shape(x, exponent), scaled, errors)
        return Parameters(factor, exponent, offset, chi_square)

    def fit_one(self, x: np.ndarray, means: np.ndarray, errors: np.ndarray) -> Parameters:
        """Return the fit to one table of means, shape (sizes,), its exponent settled by SciPy."""
        first = self.fit(x, means[None, :], errors)
        if self.law.exponents is None:
            return first
        scaled = (means / errors)[None, :]

        def residuals(exponent: np.ndarray) -> np.ndarray:
            shape = self._shape(x, exponent)
            factor, offset, _ = self._project(shape, scaled, errors)
            return (scaled - (factor[:, None] * shape + np.nan_to_num(offset)[:, None]) / errors)[0]

        low, high = self.law.exponents
        inside = np.clip(first.exponent, low + 1e-9, high - 1e-9)
        found = least_squares(residuals, inside, bounds=(low, high), xtol=1e-12, ftol=1e-12, gtol=1e-12)
        factor, offset, chi_square = self._project(self._shape(x, found.x), scaled, errors)
        better = Parameters(factor, found.x, offset, chi_square)
        return better if chi_square[0] <= first.chi_square[0] else first

    def curves(self, x: np.ndarray, fitted: Parameters) -> np.ndarray:
        """Return the fitted curves at `x`, shape (tables, len(x))."""
        shape = self._shape(x, fitted.exponent)
        return fitted.factor[:, None] * shape + np.nan_to_num(fitted.offset)[:, None]

    def _shape(self, x: np.ndarray, exponent: np.ndarray) -> np.ndarray:
        with np.errstate(all="ignore"):
            if self.law.exponents is None:
                values = np.broadcast_to(self.law.shape(x), (1, len(x)))
            else:
                values = self.law.shape(x, exponent[:, None])
        return np.asarray(values, dtype=np.float64)

    def _project(
        self, shape: np.ndarray, scaled: np.ndarray, errors: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return factor, offset and chi-square of the linear fit of each row of `scaled` to its shape."""
        column = shape / errors
        one = 1 / errors
        if self.offset:
            square = one @ one
            centre = column @ one / square
            column = column - centre[:, None] * one
            middle = scaled @ one / square
            scaled = scaled - middle[:, None] * one
        with np.errstate(all="ignore"):
            factor = (column * scaled).sum(axis=1) / (column**2).sum(axis=1)
            chi_square = ((scaled - factor[:, None] * column) ** 2).sum(axis=1)
        lost = ~np.isfinite(chi_square)
        factor, chi_square = np.where(lost, 0.0, factor), np.where(lost, np.inf, chi_square)
        offset = middle - factor * centre if self.offset else np.full(len(factor), np.nan)
        return factor, offset, chi_square

    def _search(self, x: np.ndarray, scaled: np.ndarray, errors: np.ndarray) -> np.ndarray:
        assert self.law.exponents is not None
        grid = np.linspace(*self.law.exponents, _GRID)
        column = self._shape(x, grid) / errors
        if self.offset:
            one = 1 / errors
            column = column - (column @ one / (one @ one))[:, None] * one
        with np.errstate(all="ignore"):
            unit = column / np.sqrt((column**2).sum(axis=1))[:, None]
            explained = np.nan_to_num((scaled @ unit.T) ** 2, nan=-1.0)
        best = np.clip(explained.argmax(axis=1), 1, _GRID - 2)
        low, high = grid[best - 1], grid[best + 1]
        left, right = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)

        def misfit(exponent: np.ndarray) -> np.ndarray:
            return self._project(self._shape(x, exponent), scaled, errors)[2]

        at_left, at_right = misfit(left), misfit(right)
        for _ in range(_STEPS):
            lower = at_left < at_right
            low, high = np.where(lower, low, left), np.where(lower, right, high)
            fresh = np.where(lower, high - _GOLDEN * (high - low), low + _GOLDEN * (high - low))
            kept, at_kept = np.where(lower, left, right), np.where(lower, at_left, at_right)
            at_fresh = misfit(fresh)
            left, at_left = np.where(lower, fresh, kept), np.where(lower, at_fresh, at_kept)
            right, at_right = np.where(lower, kept, fresh), np.where(lower, at_kept, at_fresh)
        return np.where(at_left < at_right, left, right)


def _logarithm_over_double(x: np.ndarray) -> np.ndarray:
    return np.log(x) / np.log(np.log(x))


def _double_logarithm(x: np.ndarray) -> np.ndarray:
    return np.log(np.log(x))


def _power(x: np.ndarray, exponent: np.ndarray) -> np.ndarray:
    return x**exponent


def _power_of_logarithm(x: np.ndarray, exponent: np.ndarray) -> np.ndarray:
    return np.log(x) ** exponent


# A logarithm without an offset depends on the unit in which x is counted; ln x / ln ln x falls up to e^e.
LAWS: dict[str, Law] = {
    law.name: law
    for law in (
        Law("constant", np.ones_like, "1", None, "never", 0.0),
        Law("log log", _double_logarithm, "ln ln x", None, "always", float(np.e)),
        Law("log over log log", _logarithm_over_double, "ln x / ln ln x", None, "both", float(np.e**np.e)),
        Law("log", np.log, "ln x", None, "always", 0.0),
        Law("power of log", _power_of_logarithm, "(ln x)^b", (-5.0, 8.0), "both", 1.0),
        Law("square root", np.sqrt, "√x", None, "both", 0.0),
        Law("power", _power, "x^b", (-2.0, 2.0), "both", 0.0),
    )
}


def register_law(
    name: str,
    shape: Shape,
    *,
    exponents: tuple[float, float] | None = None,
    offset: str = "both",
    above: float = 0.0,
    formula: str | None = None,
) -> Law:
    """Add a law to those that `fit_growth` tries from now on, in this Python process.

    Parameters
    ----------
    name : str
        Its name in tables; a name can be taken once.
    shape : callable
        ``shape(x)``, or ``shape(x, exponent)`` when `exponents` is given: the curve up to a factor and an
        offset, for arrays that broadcast against each other.
    exponents : tuple of float, optional
        Lowest and highest exponent to be tried.
    offset : str
        "both" (the law is tried with and without an offset added), "always" or "never".
    above : float
        The law is defined for x above this; it is left out when a size is not.
    formula : str, optional
        The shape in words, with b for the exponent. Default: the name.

    Returns
    -------
    Law
        The law, which ``fit_growth(..., laws=[...])`` takes as well as its name.

    Raises
    ------
    InputError
        When the name is taken, or the shape does not give finite numbers of the right shape.

    Examples
    --------
    >>> import labkit as lk
    >>> from labkit.analysis.growth_laws import LAWS
    >>> law = lk.register_law("cube root", lambda x: x ** (1 / 3), formula="x^(1/3)")
    >>> [form.formula for form in law.forms()]
    ['a·x^(1/3)', 'c + a·x^(1/3)']
    >>> del LAWS["cube root"]
    """
    if not isinstance(name, str) or not name.strip():
        raise InputError(f"name is {name!r}; give the law a name in words.")
    if name in LAWS:
        raise InputError(f"name is {name!r}, which is taken; choose another.")
    check_member("offset", offset, _OFFSETS)
    if exponents is not None:
        pair = isinstance(exponents, tuple | list) and len(exponents) == 2
        if not pair or not check_number("exponents", exponents[0]) < check_number("exponents", exponents[1]):
            raise InputError(f"exponents is {exponents!r}; give the lowest and the highest, in this order.")
        exponents = (float(exponents[0]), float(exponents[1]))
    law = Law(name, shape, formula or name, exponents, offset, check_number("above", above))
    _try_shape(law)
    LAWS[name] = law
    return law


def _try_shape(law: Law) -> None:
    wanted = "shape(x)" if law.exponents is None else "shape(x, exponent)"
    if not callable(law.shape):
        raise InputError(f"shape of {law.name!r} is {law.shape!r}; give a function {wanted}.")
    x = max(law.above, 1.0) * np.array([2.0, 3.0, 5.0])
    trial: list[Any] = [x]
    if law.exponents is not None:
        low, high = law.exponents
        trial.append(low + (high - low) * np.array([[0.31], [0.62]]))
    try:
        inspect.signature(law.shape).bind(*trial)
    except TypeError as error:
        raise InputError(f"shape of {law.name!r} does not take {wanted}: {error}.") from error
    except ValueError:  # some functions written in C do not tell what they take
        pass
    values = np.asarray(law.shape(*trial))
    expected = (3,) if law.exponents is None else (2, 3)
    if values.shape != expected or values.dtype.kind not in "fiu" or not np.isfinite(values).all():
        raise InputError(
            f"shape of {law.name!r} gave {values!r} at x = {x.tolist()}; it must give one finite number for "
            "each x (and each exponent, by broadcasting)."
        )


def chosen_forms(laws: Iterable[Any] | None) -> list[Form]:
    """Return the forms of the asked laws, given by name or as `Law`; all that are registered for None."""
    if laws is None:
        return [form for law in LAWS.values() for form in law.forms()]
    if isinstance(laws, str | Law):
        laws = [laws]
    found: dict[str, Law] = {}
    for asked in laws:
        law = asked if isinstance(asked, Law) else LAWS.get(asked) if isinstance(asked, str) else None
        if law is None:
            raise InputError(f"laws holds {asked!r}; {nearest(asked, LAWS)}.")
        if found.setdefault(law.name, law) is not law:
            raise InputError(f"laws holds two different laws named {law.name!r}; give them two names.")
    if not found:
        raise InputError("laws is empty; name at least one law, or leave it out for all.")
    return [form for law in found.values() for form in law.forms()]


def usable_forms(forms: list[Form], x: np.ndarray) -> tuple[list[Form], dict[str, str]]:
    """Return the forms that are defined at all sizes and have no more parameters than there are sizes."""
    kept, reasons = [], {}
    for form in forms:
        name = form.law.name + (" with an offset" if form.offset and form.law.offset == "both" else "")
        if x[0] <= form.law.above:
            reasons[form.law.name] = f"defined above {form.law.above:.4g}, and the smallest size is {x[0]:g}"
        elif form.count > len(x):
            reasons[name] = f"has {form.count} parameters, and there are {len(x)} sizes"
        else:
            kept.append(form)
    return kept, reasons


def misfit_of(forms: list[Form], chi_square: np.ndarray, sizes: int, freedom: float) -> float:
    """Return the least chi-square per degree of freedom when all laws misfit, else 1."""
    left = np.array([sizes - form.count for form in forms])
    ratio = chi_square[left > 0] / left[left > 0]
    fine = variance_ratio.sf(ratio, left[left > 0], freedom) > _MISFIT
    return float(max(1.0, ratio.min())) if ratio.size and not fine.any() else 1.0


def aicc(forms: list[Form], chi_square: np.ndarray, rows: int, misfit: float) -> np.ndarray:
    """Return the AICc of each form, shape (tables, forms); the scale of the errors counts as a parameter."""
    count = np.array([form.count for form in forms])
    return chi_square / misfit + 2 * count + 2 * (count + 1) * (count + 2) / np.maximum(rows - count - 2, 1)


def akaike_weights(scores: np.ndarray, prior: np.ndarray) -> np.ndarray:
    """Return prior · exp(−Δ/2), normalised over the last axis."""
    weights = prior * np.exp(-(scores - scores.min(axis=-1, keepdims=True)) / 2)
    return weights / weights.sum(axis=-1, keepdims=True)
