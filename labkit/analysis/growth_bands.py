"""Where growth is foretold, and the limits between which the curves of all resamples lie."""

from typing import Any

import numpy as np

from labkit.analysis.growth_sizes import LARGEST
from labkit.errors import InputError

# How far beyond the measured sizes a prediction is made without being forced.
REACH = 16.0


def check_points(xs: Any, low: float, high: float, above: dict[str, float], force: bool) -> np.ndarray:
    """Return the sizes asked for, shape (points,).

    Parameters
    ----------
    xs : float or sequence of float
    low, high : float
        Smallest and largest size that was measured.
    above : dict
        Law → the size above which it is defined.
    force : bool
        Whether sizes farther outside than `REACH` are allowed.

    Raises
    ------
    InputError
        When a size is not a finite number above 0, too far outside, or where a law is not defined.
    """
    try:
        points = np.atleast_1d(np.asarray(xs, dtype=np.float64))
    except (TypeError, ValueError):
        raise InputError(f"xs is {xs!r}; give one size or a list of sizes.") from None
    if points.ndim != 1 or not points.size:
        raise InputError(f"xs has shape {points.shape}; give one size or a list of at least one.")
    wrong = ~((points >= 1 / LARGEST) & (points <= LARGEST))
    if wrong.any():
        raise InputError(
            f"xs holds {points[wrong][0]:g}; every size must be above 0 and at most {LARGEST:g}."
        )
    if not force and points.max() > REACH * high:
        raise InputError(
            f"xs holds {points.max():g}, which is {points.max() / high:.3g} times the largest measured size "
            f"{high:g}; laws that agree on the data part company there, so ask for at most "
            f"{REACH * high:g}, or set force=True."
        )
    if not force and points.min() < low / REACH:
        raise InputError(
            f"xs holds {points.min():g}, which is less than 1/{REACH:g} of the smallest measured size "
            f"{low:g}; ask for at least {low / REACH:g}, or set force=True."
        )
    for name, least in above.items():
        if points.min() <= least:
            raise InputError(
                f"xs holds {points.min():g}, where the law {name!r} is not defined; ask for sizes above "
                f"{least:.4g}, or fit without it by laws=[...]."
            )
    return points


def quantile_band(
    curves: np.ndarray, masses: np.ndarray, confidence: float, simultaneous: bool
) -> tuple[np.ndarray, np.ndarray]:
    """Return the limits between which curves lie with a share of `confidence` of their mass.

    Parameters
    ----------
    curves : numpy.ndarray, shape (curves, points)
    masses : numpy.ndarray, shape (curves,)
    confidence : float
    simultaneous : bool
        True: that share of the mass lies between the limits at all points at once. Limits are then equally
        deep quantiles at every point, as deep as needed (ranks as in Mandel & Betensky 2008, from memory).
    """
    masses = masses / masses.sum()
    order = np.argsort(curves, axis=0, kind="stable")
    ordered = np.take_along_axis(curves, order, axis=0)
    middle = np.cumsum(masses[order], axis=0) - masses[order] / 2
    tail = (1 - confidence) / 2
    if simultaneous:
        shallow = np.minimum(middle, 1 - middle)
        depth = np.empty_like(shallow)
        np.put_along_axis(depth, order, shallow, axis=0)
        least = depth.min(axis=1)
        deepest = np.argsort(-least, kind="stable")
        last = min(int(np.searchsorted(np.cumsum(masses[deepest]), confidence)), len(deepest) - 1)
        tail = least[deepest[last]]
    columns = range(curves.shape[1])
    lower = [np.interp(tail, middle[:, at], ordered[:, at]) for at in columns]
    upper = [np.interp(1 - tail, middle[:, at], ordered[:, at]) for at in columns]
    return np.array(lower), np.array(upper)
