"""What laws of growth say, in sentences."""

from typing import Any

import numpy as np
import pandas as pd

# Laws of at least this weight count as not ruled out.
_RIVAL = 0.05


def conclusions(
    name: str,
    weights: pd.Series,
    misfit: float,
    held_out: dict[str, Any],
    at_limit: list[str],
    left_out: dict[str, str],
) -> list[str]:
    """Return what can and what cannot be concluded, one sentence each.

    Parameters
    ----------
    name : str
        The measure.
    weights : pandas.Series
        Weight of each law, largest first.
    misfit : float
    held_out : dict
        As in `labkit.GrowthFit`.
    at_limit : list of str
        Laws whose exponent ends at the limit of its search.
    left_out : dict
        Law → why it was not fitted.
    """
    best, share = weights.index[0], weights.iloc[0]
    rivals = [f"{law} ({weight:.2f})" for law, weight in weights.iloc[1:].items() if weight >= _RIVAL]
    if rivals:
        sentences = [f"The data favour {best} ({share:.2f}) but do not rule out {', '.join(rivals)}."]
    else:
        sentences = [f"Among the laws tried, the data single out {best} ({share:.2f})."]
    if misfit > 1:
        sentences.append(
            "No law agrees with the means within their errors (chi-square per degree of freedom "
            f"{misfit:.3g}): bands are widened {np.sqrt(misfit):.3g} times; beyond the data all is a guess."
        )
    if held_out["inside"] is not None:
        verdict = "the two agree" if held_out["inside"] else "they miss it, so beware of larger sizes"
        sentences.append(
            f"From the smaller sizes alone the laws expect a mean {name} of {held_out['estimate']:.4g} "
            f"({held_out['lower']:.4g} to {held_out['upper']:.4g}) at {held_out['x']:g}, where "
            f"{held_out['mean']:.4g} was measured: {verdict}."
        )
    sentences += [f"The exponent of {law} ends at the limit of its search." for law in at_limit]
    sentences += [f"{law.capitalize()} was left out: {reason}." for law, reason in left_out.items()]
    sentences.append(
        "Beyond the sizes measured, a band holds only if one of these laws goes on holding there."
    )
    return sentences
