"""Fits of growth that can be drawn."""

from collections.abc import Callable
from dataclasses import dataclass, fields
from functools import wraps
from typing import TYPE_CHECKING, ParamSpec

from labkit.analysis import growth

if TYPE_CHECKING:
    from matplotlib.figure import Figure

P = ParamSpec("P")


@dataclass(frozen=True, eq=False, repr=False)
class GrowthFit(growth.GrowthFit):
    """Fitted laws of growth that can be drawn; attributes are those of `labkit.analysis.growth.GrowthFit`.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> table = pd.DataFrame({"servers": 2 * [16, 64, 256], "gap": [7.9, 15.9, 31.9, 8.1, 16.1, 32.1]})
    >>> grown = lk.fit_growth(table, rng=1, resamples=200)
    >>> grown
    <GrowthFit of gap on servers from 16 to 256: square root 0.99>
    """

    def figure(self, *, reach: float = 4.0, measure: str | None = None) -> "Figure":
        """Draw the means at each size, the average of the laws and its bands; see `growth_curve`.

        Parameters
        ----------
        reach : float
            How many times beyond the largest size is drawn, from 1 to 16.
        measure : str, optional
            Words at the vertical axis, with the unit. Default: the name of the column.

        Returns
        -------
        matplotlib.figure.Figure

        Raises
        ------
        InputError
            When `reach` lies outside.

        Examples
        --------
        >>> import pandas as pd
        >>> import labkit as lk
        >>> table = pd.DataFrame({"servers": 2 * [16, 64, 256], "gap": [7.9, 15.9, 31.9, 8.1, 16.1, 32.1]})
        >>> grown = lk.fit_growth(table, rng=1, resamples=200)
        >>> (axes,) = grown.figure(reach=4).axes
        >>> axes.get_ylabel(), round(axes.get_xlim()[1])
        ('mean gap, utilisation (load ÷ capacity)', 1024)
        >>> grown.figure(reach=40)
        Traceback (most recent call last):
            ...
        labkit.errors.InputError: reach is 40; give a number from 1 to 16.
        """
        from labkit.figures.growth_curve import growth_curve

        return growth_curve(self, reach=reach, measure=measure)


def _drawable(fit: Callable[P, growth.GrowthFit]) -> Callable[P, GrowthFit]:
    @wraps(fit)
    def run(*args: P.args, **kwargs: P.kwargs) -> GrowthFit:
        found = fit(*args, **kwargs)
        return GrowthFit(**{each.name: getattr(found, each.name) for each in fields(found)})

    return run


fit_growth = _drawable(growth.fit_growth)
