"""Laws of growth of several networks and rules side by side, and what they say in words."""

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from labkit.analysis.growth import GrowthFit, fit_growth
from labkit.analysis.growth_bands import REACH
from labkit.analysis.long_run_table import long_run_table
from labkit.checks import check_number
from labkit.errors import InputError
from labkit.policies.naming import moves_placed_work, shown_name
from labkit.randomness import seed_sequence
from labkit.stationary.long_run import STATIONARY
from labkit.text import align

FEWEST_SIZES = 3
# An exponent from fewer sizes says more about the noise than about the growth.
ENOUGH_FOR_A_POWER = 5
# A law of at least this weight is not ruled out.
LEAST_WEIGHT = 0.05


@dataclass(frozen=True)
class FamilyFit:
    """The growth of one measure on one network under one rule.

    Attributes
    ----------
    family, policy, moment : str
        moment is when it was measured, such as "stationary".
    fit : GrowthFit
    """

    family: str
    policy: str
    moment: str
    fit: GrowthFit


def fit_families(
    measures: pd.DataFrame, *, rng: Any, y: str = "excess", confidence: float = 0.95
) -> tuple[list[FamilyFit], list[str]]:
    """Fit laws of growth to each network and rule.

    Parameters
    ----------
    measures : pandas.DataFrame
        Rows of `labkit.long_run` with the columns family and servers added.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Source of the resamples.
    y : str
        The measure.
    confidence : float
        Coverage of the bands.

    Returns
    -------
    list of FamilyFit
        In the order of `measures`.
    list of str
        What was left out and why, one sentence each.

    Raises
    ------
    InputError
        When a column is missing, or there are too few sizes everywhere.
    """
    seed = seed_sequence(rng)
    table = long_run_table(measures, y)
    fits, left_out = [], []
    for at, (labels, sizes) in enumerate(table.groupby(["family", "policy", "moment"], sort=False)):
        family, policy, moment = map(str, labels)
        where = f"{shown_name(policy)} on {in_words(family)}"
        usable = sizes["settled"] | (moment != STATIONARY)
        unsettled = sizes.loc[~usable, "servers"].tolist()
        if unsettled:
            named = ", ".join(f"{size:,}" for size in unsettled)
            left_out.append(
                f"{where}: not shown stationary at {named} servers, which are left out of its laws."
            )
        used = sizes.loc[usable, "servers"]
        if len(used) < FEWEST_SIZES:
            left_out.append(
                f"{where}, {moment}: {len(used)} size{'s' * (len(used) != 1)}, too few for a law of growth."
            )
            continue
        chosen = (
            (measures["family"] == family) & (measures["policy"] == policy) & (measures["moment"] == moment)
        )
        rows = measures.loc[chosen & measures["servers"].isin(used), ["servers", "policy", "replicate", y]]
        own = np.random.SeedSequence(seed.entropy, spawn_key=(*seed.spawn_key, at))
        try:
            fit = fit_growth(rows, x="servers", y=y, rng=own, confidence=confidence)
        except InputError as refusal:
            left_out.append(f"{where}, {moment}: {refusal}")
            continue
        fits.append(FamilyFit(family, policy, moment, fit))
    if not fits:
        raise InputError(f"measures has no growth to fit: {' '.join(left_out)}")
    return fits, left_out


def laws_table(fits: list[FamilyFit], *, ahead: float = 4.0) -> pd.DataFrame:
    """Return one row a network and rule: its laws, its exponent, and a fleet `ahead` times as large.

    Parameters
    ----------
    fits : list of FamilyFit
    ahead : float
        Times the largest size measured, from 1 to 16.

    Returns
    -------
    pandas.DataFrame
        family, policy, moment, sizes (how many), smallest, largest (servers), mean, error (at the largest),
        ahead (servers), estimate, lower, upper (there), times (estimate ÷ mean), laws (those not ruled out,
        with weights; a power of negative exponent is called a levelling power), exponent, exponent_lower,
        exponent_upper (of a power law, by its better form), held_out (relative error at the largest size when
        foretold from the others), inside (whether it was foretold within the band; None when it could not
        be). A rule that moves no placed work has no gap or excess below 0, nor a limit there.

    Raises
    ------
    InputError
        When `ahead` lies outside.
    """
    check_ahead(ahead)
    return pd.DataFrame([_row(each, ahead) for each in fits])


def _row(each: FamilyFit, ahead: float) -> dict[str, Any]:
    fit = each.fit
    largest = fit.sizes.iloc[-1]
    far = fit.predict(ahead * largest["x"]).iloc[0]
    floor = 0.0 if fit.y in ("gap", "excess") and not moves_placed_work(each.policy) else -np.inf
    forms = fit.table()
    power = forms[forms["law"] == "power"]
    exponents = power.iloc[0] if len(power) else pd.Series(np.nan, index=forms.columns)
    levelling = len(power) and exponents["exponent"] < 0
    named = {"power": "levelling power"} if levelling else {}
    laws = ", ".join(
        f"{named.get(str(law), law)} {weight:.2f}"
        for law, weight in fit.weights.items()
        if weight >= LEAST_WEIGHT
    )
    held = fit.held_out
    return {
        "family": each.family,
        "policy": each.policy,
        "moment": each.moment,
        "sizes": len(fit.sizes),
        "smallest": int(fit.sizes["x"].iloc[0]),
        "largest": int(largest["x"]),
        "mean": largest["mean"],
        "error": largest["standard_error"],
        "ahead": round(far["x"]),
        "estimate": far["estimate"],
        "lower": max(far["lower"], floor),
        "upper": far["upper"],
        "times": far["estimate"] / largest["mean"],
        "laws": laws,
        "exponent": exponents["exponent"],
        "exponent_lower": exponents["exponent_lower"],
        "exponent_upper": exponents["exponent_upper"],
        "held_out": held["estimate"] / held["mean"] - 1 if held["mean"] else np.nan,
        "inside": held["inside"],
    }


def check_ahead(ahead: Any) -> float:
    """Return `ahead` when it is from 1 to 16: beyond, laws that agree on the data part company."""
    if not 1 <= check_number("ahead", ahead) <= REACH:
        raise InputError(f"ahead is {ahead!r}; give a number from 1 to {REACH:g}.")
    return float(ahead)


def in_words(family: str) -> str:
    """Return a family as it stands in a sentence."""
    words = {"random-regular": "random regular graph", "complete": "complete graph"}
    return "a " + words.get(family, family.replace("-", " "))


def growth_in_words(
    laws: pd.DataFrame, left_out: list[str], *, measure: str = "excess", confidence: float = 0.95
) -> str:
    """Return what the laws say: the best rule at the larger size, a table, and what cannot be concluded.

    Parameters
    ----------
    laws : pandas.DataFrame
        From `laws_table`.
    left_out : list of str
        From `fit_families`.
    measure : str
        What was fitted.
    confidence : float
        Coverage of the bands.
    """
    percent = f"{100 * confidence:g} %"
    header = ["network", "measured at", "mean", "at", "foretold", f"{percent} band", "times", "laws"]
    if laws["exponent_lower"].gt(0).any() and laws["sizes"].ge(ENOUGH_FOR_A_POWER).any():
        header.append("if a power of n")
    tables = []
    for (policy, moment), rows in laws.groupby(["policy", "moment"], sort=False):
        lines = [_cells(row) for _, row in rows.sort_values("times", ascending=False).iterrows()]
        shown = align([header, *(line[: len(header)] for line in lines)])
        tables.append(f"{shown_name(str(policy))}, {moment}\n{shown}")
    ending = [
        f"Bands: {percent}, the choice among the laws tried included. Beyond the sizes measured they hold "
        "only if one of these laws goes on holding there."
    ]
    for _, row in laws[laws["inside"].eq(False)].iterrows():
        ending.append(
            f"{shown_name(row['policy'])} on {in_words(row['family'])}: from the smaller sizes the largest "
            f"was foretold {100 * row['held_out']:+.0f} % off, outside its band; beware of larger sizes."
        )
    best = "\n".join(_best(family, rows, measure) for family, rows in laws.groupby("family", sort=False))
    return "\n\n".join([best, *tables, "\n".join([*ending, *left_out])])


def _best(family: Any, rows: pd.DataFrame, measure: str) -> str:
    """Return which placement rule has the lowest measure on a network at the larger size.

    A mean at a horizon would be higher later, so where some rules become stationary only they are compared.
    """
    rules = rows[[not moves_placed_work(policy) for policy in rows["policy"]]]
    if not len(rules):
        return f"On {in_words(family)} only references were measured."
    settled = rules["moment"] == STATIONARY
    rules = rules[settled] if settled.any() else rules[rules["moment"] == rules["moment"].iloc[0]]
    best = rules.sort_values("estimate").iloc[0]
    others = rules[(rules["policy"] != best["policy"]) & (rules["lower"] <= best["upper"])]
    band = _banded(best)
    when = "" if settled.any() else f", {best['moment']},"
    where = f"On {in_words(family)} of {best['ahead']:,} servers{when}"
    above = {"excess": " above the optimum", "gap": " above the mean"}.get(measure, "")
    what = "the fullest server" if above else f"the mean {measure}"
    if len(rules) == 1:
        return f"{where} only {best['policy']} was measured: {what} would be at {band}{above}."
    if len(others):
        alike = "; ".join(f"{row['policy']} {_banded(row)}" for _, row in others.iterrows())
        return (
            f"{where} {what} would be at {band}{above} under {best['policy']}, not told apart from {alike}."
        )
    return f"{where} {best['policy']} would keep {what} lowest: {band}{above}."


def _banded(row: pd.Series) -> str:
    return f"{row['estimate']:.3g} ({row['lower']:.3g} to {row['upper']:.3g})"


def _cells(row: pd.Series) -> list[str]:
    laws = row["laws"].split(", ")
    more = f", {len(laws) - 2} more" if len(laws) > 2 else ""
    power = ""
    if row["exponent_lower"] > 0 and row["sizes"] >= ENOUGH_FOR_A_POWER:
        power = f"n^{row['exponent']:.2f} ({row['exponent_lower']:.2f} – {row['exponent_upper']:.2f})"
    return [
        str(row["family"]),
        f"{row['largest']:,}",
        f"{row['mean']:.3g}",
        f"{row['ahead']:,}",
        f"{row['estimate']:.3g}",
        f"{row['lower']:.3g} – {row['upper']:.3g}",
        f"{row['times']:.2f}",
        f"{', '.join(laws[:2])}{more}",
        power,
    ]
