"""What `size_study` found, in words: a table, sentences, and lines for a study file."""

import math

import pandas as pd

from labkit.analysis.sizing import StudySize

_SHOWN = 3


def sentences(size: StudySize) -> list[str]:
    """Return whether a study fits, what to leave out, and what precision fits."""
    kernels = f"{size.jobs} kernel{'s' * (size.jobs > 1)}"
    points = len(size.table)
    every = {1: "The only point", 2: "Both points"}.get(points, f"All {points} points")
    told = f"{every} to a precision of {size.precision:g}: about {duration(size.seconds)} on {kernels}"
    if size.allowed is None:
        return [f"{told}."]
    if size.fits:
        return [f"{told}, which fits into {duration(size.allowed)}."]
    found = [f"{told}, more than the {duration(size.allowed)} asked for."]
    if len(size.left_out) == points:
        found.append("Not even the smallest point alone fits.")
    else:
        found.append(
            f"Without {_listed(size.left_out)} the rest takes about {duration(size.seconds_of_rest)}."
        )
    if size.precision_in_time is None:
        found.append("No precision below 1 lets all points fit: give more time or fewer points.")
    else:
        who = "It reaches" if points == 1 else "Together they reach"
        within = duration(size.allowed)
        found.append(f"{who} a precision of {size.precision_in_time:g} in {within}.")
    return found


def _listed(points: list[str]) -> str:
    shown = "; ".join(points[:_SHOWN])
    more = len(points) - _SHOWN
    return f"{shown} and {more} more (marked - in the table)" if more > 0 else shown


def duration(seconds: float) -> str:
    """Return a time as one says it: seconds up to two minutes, minutes up to two hours, then hours."""
    units = (("second", 1, 120), ("minute", 60, 7200), ("hour", 3600, math.inf))
    unit, length, _ = next(each for each in units if seconds < each[2])
    number = seconds / length
    shown = f"{number:.2g}" if number < 99.5 else f"{number:,.0f}"
    return f"{shown} {unit}{'s' * (shown != '1')}"


def table_text(size: StudySize, labels: list[str]) -> str:
    """Return the table of points, aligned; what is to be left out is marked with a minus sign."""
    table = size.table
    names = [name for name in labels if name in table.columns]
    columns = {
        "point": [f"- {point}" if point in size.left_out else point for point in table["point"]],
        **{name: table[name].astype(str).tolist() for name in names},
        "replicates": [f"{count:,}" for count in table["replicates"]],
        "minutes": [f"{seconds / 60:,.2f}" for seconds in table["seconds"]],
        "known from": table["source"].tolist()
        if "source" in table.columns
        else ["pilot" if piloted else "extrapolated" for piloted in table["piloted"]],
    }
    right = {"replicates", "minutes"}
    widths = {name: max(len(name), *map(len, cells)) for name, cells in columns.items()}

    def line(cells: dict[str, str]) -> str:
        return "  ".join(
            cell.rjust(widths[name]) if name in right else cell.ljust(widths[name])
            for name, cell in cells.items()
        ).rstrip()

    rows = [{name: cells[at] for name, cells in columns.items()} for at in range(len(table))]
    heads = [{name: name for name in columns}, {name: "-" * width for name, width in widths.items()}]
    return "\n".join(line(cells) for cells in [*heads, *rows])


def study_lines(size: StudySize, replicates: int, stops: bool) -> list[str]:
    """Return the lines to put at the top of the study file.

    Parameters
    ----------
    size : StudySize
    replicates : int
        At which the first look is taken.
    stops : bool
        Whether the notebook can stop by a precision; if not, every point gets as many as the largest need.
    """
    if not stops:
        return [f"replicates = {size.table['replicates'].max()}"]
    return [
        f"replicates = {replicates}",
        f"precision = {size.precision:g}",
        f"most_replicates = {max(size.most_replicates, replicates)}",
    ]


def as_json(size: StudySize) -> dict:
    """Return all of it as plain values."""
    return {
        "precision": size.precision,
        "confidence": size.confidence,
        "jobs": size.jobs,
        "seconds": size.seconds,
        "allowed": size.allowed,
        "fits": size.fits,
        "left_out": size.left_out,
        "seconds_of_rest": size.seconds_of_rest,
        "precision_in_time": size.precision_in_time,
        "most_replicates": size.most_replicates,
        "points": [
            {name: value for name, value in row.items() if not pd.isna(value)}
            for row in size.table.astype(object).to_dict("records")
        ],
    }
