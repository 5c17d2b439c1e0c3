"""How large a study has to be: the pilot, and what it says about precision and time on this machine."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from labkit.analysis.headroom import replicates_needed
from labkit.analysis.sizing import StudySize, size_study
from labkit.analysis.sizing_words import study_lines
from labkit.checks import check_fraction, check_positive, check_whole, nearest
from labkit.errors import InputError
from labkit.studies.door import check_points
from labkit.studies.model import Study
from labkit.studies.piloting import pilot_study
from labkit.studies.running import check_notebook, cores

PRECISION = 0.05
# The grid parameter that is a size when nobody names one.
SIZE = "servers"
# The first look of a study that stops by a precision; from there on intervals cover what they say.
FIRST_LOOK = 30


@dataclass(frozen=True)
class Sizing:
    """What was found: the measure, the study's size, lines for its file and their precision, group labels."""

    measure: str
    size: StudySize
    precision: float
    lines: list[str]
    labels: list[str]


def size_of(
    study: Study,
    *,
    precision: Any = None,
    minutes: Any = 10.0,
    pilot: Any = 20,
    measure: str | None = None,
    jobs: int | None = None,
    x: str | None = None,
    say: Callable[[str], None] = lambda sentence: None,
) -> Sizing:
    """Pilot a study and say what it takes; nothing is recorded.

    Parameters
    ----------
    study : Study
    precision : float
        Half-width of the 95 % interval of each mean, as a share of the mean; default that of the study file,
        or 0.05.
    minutes : float
        That running the study may take.
    pilot : int
        Replicates of each point's first run.
    measure : str, optional
        Default: what the notebook's parameter precision_of says, or the gap.
    jobs : int, optional
        Kernels at the same time; default one a core, as `labkit run` does.
    x : str, optional
        The grid parameter that is the size; default `servers` where the grid has it.
    say : callable

    Raises
    ------
    InputError
        When anything is refused.
    PilotFailed
        When the notebook breaks.
    """
    precision = study.parameters.get("precision", PRECISION) if precision is None else precision
    precision = check_fraction("precision", precision)
    seconds = 60 * check_positive("minutes", minutes)
    measure = _measure(study) if measure is None else measure
    jobs = cores() if jobs is None else check_whole("jobs", jobs)
    x = _size_parameter(study, x)
    check_notebook(study)
    check_points(study, study.points)
    jobs = min(jobs, len(study.points))
    table = pilot_study(
        study, precision=precision, seconds=seconds, replicates=pilot, measure=measure, jobs=jobs,
        threads=max(1, cores() // jobs), x=x, say=say,
    )  # fmt: skip
    least = _first_look(study)
    size = size_study(table, precision=precision, seconds=seconds, jobs=jobs, least=least, x=x)
    # What does not fit is no advice: the lines are then for the precision that does.
    within = size
    if not size.fits and size.precision_in_time is not None:
        reachable = size.precision_in_time
        within = size_study(table, precision=reachable, seconds=seconds, jobs=jobs, least=least, x=x)
    lines = study_lines(within, least, stops="precision" in study.notebook.parameters)
    labels = [name for name in ("policy", "information", "moment") if _differs(table, name)]
    return Sizing(measure, size, within.precision, lines, labels)


def _differs(table: Any, name: str) -> bool:
    return name in table.columns and (name == "policy" or table[name].nunique() > 1)


def _measure(study: Study) -> str:
    """Return the measure by whose precision the study's notebook stops."""
    declared = study.notebook.parameters.get("precision_of")
    return str(study.parameters.get("precision_of", declared.default if declared else "gap"))


def _size_parameter(study: Study, x: str | None) -> str | None:
    if x is None:
        return SIZE if _is_size(study, SIZE) else None
    if x not in study.grid:
        known = nearest(x, study.grid) if study.grid else "this study has none"
        raise InputError(f"x is {x!r}, which is no grid parameter; {known}.")
    if not _is_size(study, x):
        raise InputError(
            f"x is {x!r}, whose values are not all numbers above 0; name a grid parameter that is."
        )
    return x


def _is_size(study: Study, name: str) -> bool:
    values = study.grid.get(name, [])
    return bool(values) and all(
        isinstance(value, int | float) and not isinstance(value, bool) and value > 0 for value in values
    )


def _first_look(study: Study) -> int:
    """Return the least replicates: those of the first look, or more where the study's answer needs them."""
    if study.answer_notebook is None or "risk" not in study.answer_notebook.parameters:
        return FIRST_LOOK
    answer = study.answer_notebook.checked(study.answer_parameters or {})
    return max(FIRST_LOOK, replicates_needed(answer["risk"], answer.get("confidence", 0.95)))
