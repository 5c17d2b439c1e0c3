"""Service laws: how much work a task brings, by its first two moments exactly and by draws."""

import hashlib
import math
from typing import Any

import numpy as np

from labkit.checks import check_number, check_positive
from labkit.engine.sizes import as_numbers
from labkit.errors import InputError
from labkit.text import from_name, name_part

# Within these, squares and ratios stay well inside double precision.
LEAST_MEAN, MOST_MEAN = 1e-100, 1e100
MOST_VARIATION = 1e6
MOST_RATIO = 1e100
# A draw is never 0, which a sampler may return once in 2^53 draws.
_LEAST_DRAW = float(np.finfo(np.float64).tiny)


class ServiceLaw:
    """A distribution of service requirements, in units of work: time on a server of capacity 1.

    Attributes
    ----------
    mean : float
        Mean requirement.
    second_moment : float
        Mean of the squared requirement.
    variation : float
        Coefficient of variation: standard deviation over mean.
    name : str
        The law in words, with the parameters that are not at their default.

    Examples
    --------
    >>> import labkit as lk
    >>> for law in (lk.Deterministic(), lk.Exponential(mean=2), lk.Lognormal(cv=2)):
    ...     print(law.name, law.mean, law.second_moment, law.variation)
    deterministic 1.0 1.0 0.0
    exponential(mean=2.0) 2.0 8.0 1.0
    lognormal(cv=2.0) 1.0 5.0 2.0
    """

    mean: float
    second_moment: float

    @property
    def name(self) -> str:
        """The law in words, with the parameters that are not at their default."""
        raise NotImplementedError

    def draw(self, generator: np.random.Generator, count: int) -> np.ndarray:
        """Return independent requirements.

        Parameters
        ----------
        generator : numpy.random.Generator
            Source of the draws.
        count : int
            How many.

        Returns
        -------
        numpy.ndarray, shape (count,)
            float64 above 0, in units of work.

        Examples
        --------
        Mean, and standard deviation over mean, of a hundred thousand draws:

        >>> import numpy as np
        >>> import labkit as lk
        >>> laws = lk.Exponential(mean=2), lk.Lognormal(mean=2, cv=0.5), lk.Hyperexponential(mean=2, cv=2)
        >>> for law in laws:
        ...     drawn = law.draw(np.random.default_rng(1), 100_000)
        ...     print(law.name, round(float(drawn.mean()), 1), round(float(drawn.std() / drawn.mean()), 1))
        exponential(mean=2.0) 2.0 1.0
        lognormal(cv=0.5, mean=2.0) 2.0 0.5
        hyperexponential(cv=2.0, mean=2.0) 2.0 2.0
        """
        raise NotImplementedError

    @property
    def variation(self) -> float:
        """Coefficient of variation: standard deviation over mean."""
        return math.sqrt(max(0.0, self.second_moment / self.mean**2 - 1))

    def __repr__(self) -> str:
        return f"<service {self.name}>"

    def __eq__(self, other: object) -> bool:
        return isinstance(other, ServiceLaw) and self.name == other.name

    def __hash__(self) -> int:
        return hash(self.name)


class Exponential(ServiceLaw):
    """Exponential requirements: the coefficient of variation is 1.

    Parameters
    ----------
    mean : float
        Mean requirement, above 0.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.Exponential(mean=2).name, lk.Exponential(mean=2).second_moment
    ('exponential(mean=2.0)', 8.0)
    """

    def __init__(self, mean: float = 1.0) -> None:
        self.mean = _checked_mean(mean)
        self.second_moment = 2 * self.mean**2

    @property
    def name(self) -> str:
        """The law in words."""
        return _named("exponential", self.mean)

    def draw(self, generator: np.random.Generator, count: int) -> np.ndarray:
        """Return `count` requirements."""
        return _above_zero(generator.standard_exponential(count) * self.mean)


class Deterministic(ServiceLaw):
    """Every task brings the same requirement; nothing is drawn.

    Parameters
    ----------
    mean : float
        The requirement, above 0.

    Examples
    --------
    >>> import numpy as np
    >>> import labkit as lk
    >>> law = lk.Deterministic(mean=3)
    >>> law.name, law.second_moment, law.variation
    ('deterministic(mean=3.0)', 9.0, 0.0)
    >>> law.draw(np.random.default_rng(1), 4).tolist()
    [3.0, 3.0, 3.0, 3.0]
    """

    def __init__(self, mean: float = 1.0) -> None:
        self.mean = _checked_mean(mean)
        self.second_moment = self.mean**2

    @property
    def name(self) -> str:
        """The law in words."""
        return _named("deterministic", self.mean)

    def draw(self, generator: np.random.Generator, count: int) -> np.ndarray:
        """Return `count` equal requirements."""
        return np.full(count, self.mean)


class Lognormal(ServiceLaw):
    """Lognormal requirements: the logarithm is normal.

    Parameters
    ----------
    mean : float
        Mean requirement, above 0.
    cv : float
        Coefficient of variation (standard deviation over mean), above 0 and at most 10⁶.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.Lognormal(cv=2).name, lk.Lognormal(cv=2).second_moment
    ('lognormal(cv=2.0)', 5.0)
    """

    def __init__(self, mean: float = 1.0, *, cv: float) -> None:
        self.mean, self.cv = _checked_mean(mean), _checked_variation(cv)
        self.second_moment = self.mean**2 * (1 + self.cv**2)

    @property
    def name(self) -> str:
        """The law in words."""
        return _named("lognormal", self.mean, cv=self.cv)

    def draw(self, generator: np.random.Generator, count: int) -> np.ndarray:
        """Return `count` requirements."""
        spread = math.log1p(self.cv**2)
        return generator.lognormal(math.log(self.mean) - spread / 2, math.sqrt(spread), count)


class Hyperexponential(ServiceLaw):
    """Exponential with one of two means: many short tasks, a few long ones.

    Parameters
    ----------
    mean : float
        Mean requirement, above 0.
    cv : float
        Coefficient of variation (standard deviation over mean), from 1 (exponential) to 10⁶.

    Notes
    -----
    Two phases have three free numbers. The third is fixed by balanced means: both phases bring the same
    share of the work (Morse 1958, from memory). A task is of the short phase with probability
    p = (1 + √((cv² − 1)/(cv² + 1)))/2, and a phase of probability p has mean requirement mean/(2p).

    Examples
    --------
    Nearly nine tasks in ten are of the short phase, and bring half of the work:

    >>> import labkit as lk
    >>> law = lk.Hyperexponential(cv=2)
    >>> law.name, law.second_moment
    ('hyperexponential(cv=2.0)', 5.0)
    >>> round(law.short, 3), round(law.long, 3)
    (0.887, 0.113)
    """

    def __init__(self, mean: float = 1.0, *, cv: float) -> None:
        self.mean, self.cv = _checked_mean(mean), _checked_variation(cv)
        if self.cv < 1:
            raise InputError(
                f"cv is {cv!r}; a hyperexponential law has a cv of at least 1, so give that or take "
                "lk.Lognormal."
            )
        self.second_moment = self.mean**2 * (1 + self.cv**2)
        root = math.sqrt((self.cv**2 - 1) / (self.cv**2 + 1))
        # 1 - root would lose its digits where cv is large
        self.short, self.long = (1 + root) / 2, 1 / ((self.cv**2 + 1) * (1 + root))

    @property
    def name(self) -> str:
        """The law in words."""
        return _named("hyperexponential", self.mean, cv=self.cv)

    def draw(self, generator: np.random.Generator, count: int) -> np.ndarray:
        """Return `count` requirements."""
        long = generator.random(count) < self.long
        means = np.where(long, self.mean / (2 * self.long), self.mean / (2 * self.short))
        return _above_zero(generator.standard_exponential(count) * means)


class BoundedPareto(ServiceLaw):
    """Requirements with a Pareto law between a lowest and a highest one: heavy tails that end.

    The density at x is proportional to x^(−shape − 1) from `low` to `high`.

    Parameters
    ----------
    shape : float
        Exponent of the tail, above 0; below 2 a few tasks bring much of the work.
    ratio : float
        highest/lowest requirement, above 1 and at most 10¹⁰⁰.
    mean : float
        Mean requirement, above 0; it fixes the lowest one.

    Attributes
    ----------
    low, high : float
        Lowest and highest requirement.

    Examples
    --------
    >>> import labkit as lk
    >>> law = lk.BoundedPareto(shape=1.5, ratio=1000)
    >>> law.name
    'bounded-pareto(shape=1.5, ratio=1000.0)'
    >>> round(law.low, 6), round(law.high, 3), round(law.second_moment, 4)
    (0.344208, 344.208, 10.8848)
    """

    def __init__(self, shape: float, ratio: float, mean: float = 1.0) -> None:
        self.shape, self.ratio = check_positive("shape", shape), check_number("ratio", ratio)
        if not 1 < self.ratio <= MOST_RATIO:
            raise InputError(
                f"ratio is {ratio!r}; give highest ÷ lowest requirement, above 1 and at most {MOST_RATIO:g}."
            )
        self.mean = _checked_mean(mean)
        first, second = self._moment(1), self._moment(2)
        self.low = self.mean / first
        self.high = self.low * self.ratio
        self.second_moment = self.mean**2 * (second / first / first)

    def _moment(self, order: int) -> float:
        """Return the mean of (requirement/low)^order: a ratio of two integrals of powers."""
        span = math.log(self.ratio)
        return _integral(order - self.shape, span) / _integral(-self.shape, span)

    @property
    def name(self) -> str:
        """The law in words."""
        return _named("bounded-pareto", self.mean, shape=self.shape, ratio=self.ratio)

    def draw(self, generator: np.random.Generator, count: int) -> np.ndarray:
        """Return `count` requirements by inversion, one uniform number each.

        Examples
        --------
        >>> import numpy as np
        >>> import labkit as lk
        >>> law = lk.BoundedPareto(shape=1.5, ratio=1000)
        >>> drawn = law.draw(np.random.default_rng(1), 10_000)
        >>> bool(law.low <= drawn.min() and drawn.max() <= law.high), round(float(np.median(drawn)), 1)
        (True, 0.5)
        """
        beyond = math.expm1(-self.shape * math.log(self.ratio))
        powers = np.exp(np.log1p(generator.random(count) * beyond) / -self.shape)
        return np.minimum(self.low * powers, self.high)


class Empirical(ServiceLaw):
    """Requirements drawn from a sample, with replacement.

    Parameters
    ----------
    sample : array-like
        Measured requirements, one dimension, each a finite number above 0. It is copied.

    Notes
    -----
    The name carries a digest of the sample, so that results can be told apart; no text gives the law back.

    Examples
    --------
    >>> import labkit as lk
    >>> law = lk.Empirical([1.0, 1.0, 4.0])
    >>> law.mean, law.second_moment
    (2.0, 6.0)
    """

    def __init__(self, sample: Any) -> None:
        given = as_numbers(sample)
        if given is None or given.ndim != 1 or not len(given):
            found = type(sample).__name__ if given is None else f"numbers of shape {given.shape}"
            raise InputError(f"sample is {found}; give a list of measured requirements, at least one.")
        self.sample = np.array(given, np.float64)
        bad = ~((self.sample >= LEAST_MEAN) & (self.sample <= MOST_MEAN))
        if bad.any():
            place = int(np.argmax(bad))
            raise InputError(
                f"sample holds {given[place]} at place {place + 1}; each requirement is a number above 0 "
                f"({LEAST_MEAN:g} to {MOST_MEAN:g})."
            )
        self.sample.flags.writeable = False
        self.mean = float(self.sample.mean())
        self.second_moment = float(np.square(self.sample).mean())
        self._digest = hashlib.sha256(self.sample.astype("<f8").tobytes()).hexdigest()[:12]

    @property
    def name(self) -> str:
        """The law in words; it cannot be read back."""
        return f"empirical(count={len(self.sample)}, digest={self._digest})"

    def draw(self, generator: np.random.Generator, count: int) -> np.ndarray:
        """Return `count` requirements.

        Examples
        --------
        A third of the draws are the long task:

        >>> import numpy as np
        >>> import labkit as lk
        >>> drawn = lk.Empirical([1.0, 1.0, 4.0]).draw(np.random.default_rng(1), 3000)
        >>> int((drawn == 1.0).sum()), int((drawn == 4.0).sum())
        (1984, 1016)
        """
        return self.sample[generator.integers(len(self.sample), size=count)]


LAWS: dict[str, type[ServiceLaw]] = {
    "exponential": Exponential,
    "deterministic": Deterministic,
    "lognormal": Lognormal,
    "hyperexponential": Hyperexponential,
    "bounded-pareto": BoundedPareto,
}


def parse_service(service: Any) -> ServiceLaw:
    """Return the service law that a text names, or the law itself.

    Parameters
    ----------
    service : str or ServiceLaw
        Such as ``"exponential"``, ``"lognormal(cv=2)"`` or ``"bounded-pareto(shape=1.5, ratio=1000)"``.

    Raises
    ------
    InputError
        Unknown name, unknown or missing parameter, or a value that the law refuses.
    """
    if isinstance(service, ServiceLaw):
        return service
    if isinstance(service, str) and name_part(service) == "empirical":
        raise InputError(f"service is {service!r}; a text holds no sample, so give lk.Empirical(sample).")
    law: ServiceLaw = from_name("service", service, LAWS, "lognormal(cv=2)", value="2")
    return law


def _checked_mean(mean: Any) -> float:
    number = check_positive("mean", mean)
    if not LEAST_MEAN <= number <= MOST_MEAN:
        raise InputError(f"mean is {mean!r}; give a number from {LEAST_MEAN:g} to {MOST_MEAN:g}.")
    return number


def _checked_variation(cv: Any) -> float:
    number = check_positive("cv", cv)
    if number > MOST_VARIATION:
        raise InputError(f"cv is {cv!r}; give at most {MOST_VARIATION:g}.")
    return number


def _named(word: str, mean: float, **parameters: float) -> str:
    shown = [f"{name}={value!r}" for name, value in parameters.items()]
    shown += [f"mean={mean!r}"] if mean != 1 else []
    return f"{word}({', '.join(shown)})" if shown else word


def _integral(power: float, span: float) -> float:
    """Return the integral of exp(power·u) over u from 0 to `span`."""
    return math.expm1(power * span) / power if power else span


def _above_zero(draws: np.ndarray) -> np.ndarray:
    return np.maximum(draws, _LEAST_DRAW, out=draws)
