"""Values that the project's own notebooks would refuse, refused before any kernel starts.

What is known here about the parameters of the notebooks is known nowhere else outside them.
"""

from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

from labkit.checks import check_fraction, check_number, check_whole, nearest
from labkit.errors import InputError
from labkit.memory import check_memory
from labkit.policies.naming import moves_placed_work
from labkit.records.declared import Notebook
from labkit.records.project import from_root

if TYPE_CHECKING:
    from labkit.studies.model import Point, Study

RUN, ANSWER, SURVEY, RULES = "headroom", "headroom_answer", "survey", "rules"
LONG_RUN, GROWTH = "long_run", "growth"
SERVE, REPLAY = "serve", "replay"

# The least whole number that each of these parameters can be.
LEAST = {
    RUN: {"tasks": 1, "checkpoints": 1, "replicates": 1, "report_every": 0},
    RULES: {"tasks": 1, "replicates": 1, "dispatchers": 0, "forecast_rounds": 100},
    SERVE: {"replicates": 1},
    REPLAY: {"replicates": 1},
    SURVEY: {"outages": 0, "links": 0, "distance": 2},
    LONG_RUN: {"servers": 2, "horizon": 1, "replicates": 1, "most_replicates": 1},
    GROWTH: {"entropy": 0},
}

LEAST_RISK = 1e-15

# Numbers kept for each replicate and checkpoint, more or less: the measures, and copies of them in tables.
_MEASURES = 10


def check_values(notebook: Notebook, values: dict[str, Any]) -> None:
    """Refuse numbers that the notebook could not take, from what they are alone."""
    least = LEAST.get(notebook.name, {})
    for name in least.keys() & values.keys():
        check_whole(name, values[name], least=least[name])
    if notebook.name == ANSWER and values.get("max_headroom") is not None:
        allowed = check_number("max_headroom", values["max_headroom"])
        if allowed < 0:
            raise InputError(f"max_headroom is {allowed!r}; give a number of at least 0.")
    if notebook.name == GROWTH:
        if "ahead" in values:
            from labkit.analysis.growth_by_family import check_ahead

            check_ahead(values["ahead"])
        if "confidence" in values:
            check_fraction("confidence", values["confidence"])


def check_risk(value: Any) -> float:
    """Return the risk; refuse one so small that no number of replicates could answer it."""
    risk = check_fraction("risk", value)
    if risk < LEAST_RISK:
        raise InputError(f"risk is {value!r}; give a number of at least {LEAST_RISK:g}.")
    return risk


def check_points(study: "Study", points: Iterable["Point"]) -> None:
    """Refuse grid points with unknown or repeated policies, faulty tables, or more data than memory.

    Parameters
    ----------
    study : Study
        The study; one whose notebook places no tasks passes.
    points : iterable of Point
        Those that are going to be run.

    Raises
    ------
    InputError
        For the first point that is refused.
    """
    if study.notebook.name == LONG_RUN:
        _check_families(points)
    if study.notebook.name in (SERVE, REPLAY):
        _check_leaving(study.notebook.name, points)
    if study.notebook.name not in (RUN, RULES):
        return
    from labkit.fleet.readers import read_fleet

    sizes: dict[str, int] = {}
    for point in points:
        values = point.identity.parameters
        policies = policy_names(values["policies"])
        if study.answer_notebook is not None and all(map(moves_placed_work, policies)):
            raise InputError(
                f"policies is {policies}, which moves work already placed, as no placement rule can; give a "
                "rule to answer for."
            )
        place = values["fleet"]
        if place not in sizes:
            sizes[place] = len(read_fleet(from_root(place)))
        key = "replicates" if values.get("precision") is None else "most_replicates"
        _check_memory(key, values[key], sizes[place], values.get("checkpoints", 1), len(policies))


def _check_leaving(notebook: str, points: Iterable["Point"]) -> None:
    from labkit.studies.leaving import check_replaying, check_serving, fleet_of

    for point in points:
        values = point.identity.parameters
        policies = policy_names(values["policies"])
        fleet = fleet_of(from_root(values["fleet"]), values.get("capacity", 1.0))
        _check_memory("replicates", values["replicates"], len(fleet), 1, len(policies))
        if notebook == SERVE:
            check_serving(values, fleet)
        else:
            check_replaying(values, fleet, from_root(values["trace_path"]))


def _check_families(points: Iterable["Point"]) -> None:
    from labkit.fleet.named import fleet_of_family

    for point in points:
        values = point.identity.parameters
        policy_names([*values["policies"], *filter(None, [values["reference"]])])
        key = "replicates" if values["precision"] is None else "most_replicates"
        _check_memory(key, values[key], values["servers"], 1, len(values["policies"]) + 1)
        fleet_of_family(values["family"], values["servers"], rng=0)


def policy_names(policies: list[Any]) -> list[str]:
    """Return the full names of policies; refuse one that is unknown, ill-formed or repeated."""
    from labkit.policies.naming import parse_policy

    names: list[str] = []
    for policy in policies:
        try:
            name = parse_policy(policy).name
        except InputError as error:
            raise InputError(f"policies: {error}") from None
        if name in names:
            raise InputError(f"policies names {name!r} twice; give each policy once.")
        names.append(name)
    return names


def check_answer(study: "Study", points: Iterable["Point"]) -> None:
    """Refuse an answer about a policy that these points, which it is made from, do not run."""
    if study.notebook.name != RUN or study.answer_notebook is None or study.answer_notebook.name != ANSWER:
        return
    asked = study.answer_notebook.checked(study.answer_parameters or {})
    given = [policy for point in points for policy in point.identity.parameters["policies"]]
    for name in ("baseline", "policy"):
        value = asked[name]
        if name == "policy" and not value:
            continue
        if value in given and "(" not in value:
            continue  # a plain name, as in the records, and half a second of imports saved
        known = policy_names(list(dict.fromkeys(given)))
        if value not in known:
            default = "" if name in (study.answer_parameters or {}) else " by default"
            raise InputError(
                f"answer: {name} is {value!r}{default}, which is not run; {nearest(value, known)}."
            )


def _check_memory(key: str, replicates: int, servers: int, checkpoints: int, policies: int) -> None:
    check_memory(
        f"{key} is {replicates:,}; with {servers:,} servers, {checkpoints:,} checkpoints and {policies} "
        "policies one run",
        8 * policies * replicates * (servers + _MEASURES * checkpoints),
        "give fewer replicates (a larger risk needs fewer) or checkpoints",
    )
