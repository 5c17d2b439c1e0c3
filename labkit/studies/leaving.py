"""What a notebook about work that leaves is given, checked as a whole before anything is computed."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from labkit.checks import check_fraction, check_member, check_positive, check_whole
from labkit.engine.failures import checked_failures
from labkit.engine.service import DISCIPLINES, FAILURE_MODES
from labkit.engine.service_checks import lasting_availability, queues_are_cut
from labkit.engine.service_laws import parse_service
from labkit.errors import InputError, TooFewReplicates
from labkit.fleet.model import Fleet
from labkit.fleet.readers import read_fleet
from labkit.policies.naming import parse_policy
from labkit.policies.one_choice import OneChoice
from labkit.survey.stability import refuse_unstable
from labkit.traces.estimate import fleet_from_trace
from labkit.traces.reading import open_trace


def check_serving(values: Mapping[str, Any], fleet: Fleet) -> None:
    """Refuse what the serve notebook could not run on this fleet.

    Parameters
    ----------
    values : mapping of str
        Parameters of the notebook, of their declared types.
    fleet : Fleet

    Raises
    ------
    InputError
        For the first value that is refused; a load factor that is not below the stability limit is refused
        with the limit.
    TooFewReplicates
        When there are too few replicates for limits.
    """
    parse_service(values["service"])
    discipline = check_member("discipline", values["discipline"], tuple(DISCIPLINES))
    on_failure = check_member("on_failure", values["on_failure"], FAILURE_MODES)
    failures = checked_failures(values["failures"]) if values["failures"].strip() else None
    horizon = check_positive("horizon", values["horizon"])
    warmup = values["warmup"]
    if warmup is not None and not 0 <= warmup < horizon:
        raise InputError(
            f"warmup is {warmup:g} and horizon {horizon:g}; give a warm-up of at least 0 and a later horizon."
        )
    check_fraction("risk", values["risk"])
    check_positive("target", values["target"])
    for name in ("load_factors", "report_ages"):
        for place, number in enumerate(values[name]):
            check_positive(name, number)
            if number in values[name][:place]:
                raise InputError(f"{name} holds {number:g} more than once; give each once.")
    if discipline == "sessions":
        _check_replicates(values["replicates"], values["risk"])
        return
    if values["replicates"] < 2:
        raise TooFewReplicates(f"replicates is {values['replicates']}; limits need at least 2.")
    cut = queues_are_cut(failures, on_failure)
    for policy in values["policies"]:
        refuse_unstable(
            fleet,
            max(values["load_factors"]),
            even_split=isinstance(parse_policy(policy), OneChoice),
            # The page serves without failures, too, where none of the work is lost.
            availability=1.0 if cut else lasting_availability(failures),
            requeued=on_failure == "requeue",
        )


def check_replaying(values: Mapping[str, Any], fleet: Fleet, trace: Path) -> None:
    """Refuse what the replay notebook could not run on this fleet and trace.

    Parameters
    ----------
    values : mapping of str
        Parameters of the notebook, of their declared types.
    fleet : Fleet
    trace : pathlib.Path
        A CSV or parquet file.

    Raises
    ------
    InputError
        For the first value, or column of the trace, that is refused.
    TooFewReplicates
        When the trace has too few blocks for limits at this risk.
    """
    source = open_trace(trace, fleet)
    if not source.has_duration:
        raise InputError(
            f"{source.label} has no column 'duration', so that its work stays; lk.replay places it, and "
            "headroom.ipynb answers for a fleet made of it."
        )
    if source.unit == "s" and values["unit"] not in ("seconds", "s"):
        raise InputError(
            f"unit is {values['unit']!r}, but the times of {source.label} are dates, which become seconds; "
            'give unit "seconds", and day, block and warmup in seconds (a day has 86400).'
        )
    discipline = check_member("discipline", values["discipline"], tuple(DISCIPLINES))
    block = check_positive("block", values["block"])
    check_positive("day", values["day"])
    risk = check_fraction("risk", values["risk"])
    if values["report_age"] < 0 or values["warmup"] < 0:
        name = "report_age" if values["report_age"] < 0 else "warmup"
        raise InputError(f"{name} is {values[name]:g}; give a length of time of at least 0.")
    check_whole("replicates", values["replicates"])
    if discipline != "sessions":
        check_positive("target", values["target"])
    first = float(next(source.blocks(1)).time[0])
    blocks = int((source.last_time() - first - values["warmup"]) / block + 1e-9)
    if blocks < LEAST_BLOCKS:
        raise InputError(
            f"block is {block:g}, of which {source.label} holds {max(blocks, 0)} after the warm-up; limits "
            f"need {LEAST_BLOCKS}, so give a shorter block or a longer trace."
        )
    if discipline == "sessions":
        _check_replicates(blocks, risk, "whole blocks after the warm-up", "a shorter block, a longer trace")


def fleet_of(place: Path, capacity: float) -> Fleet:
    """Read a fleet from a folder of its tables, or make one of a log, where all have this capacity.

    Parameters
    ----------
    place : pathlib.Path
        A folder of servers and choices, or a CSV or parquet file of arrivals.
    capacity : float
        Used for a log only.
    """
    return fleet_from_trace(place, capacity=capacity) if place.is_file() else read_fleet(place)


LEAST_BLOCKS = 10


def _check_replicates(
    count: int, risk: float, what: str = "replicates", advice: str = "more replicates"
) -> None:
    from labkit.analysis.headroom import replicates_needed

    needed = replicates_needed(risk)
    if count < needed:
        raise TooFewReplicates(
            f"there are {count} {what}; limits at a risk of {risk:g} need {needed}: give {advice} or a "
            "larger risk."
        )
