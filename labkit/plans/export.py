"""Making a plan: the public functions."""

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from labkit import __version__
from labkit.checks import check_whole
from labkit.engine.weights import comparison_weights
from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet, check_fleet
from labkit.fleet.readers import read_fleet
from labkit.plans.model import Plan
from labkit.plans.rules import UNIT, Parts, check_plannable, parts_of, remembering
from labkit.plans.schema import VERSION, header_digest
from labkit.plans.tables import SERVERS, csv_bytes, sha256
from labkit.plans.vectors import vectors_of
from labkit.policies.base import Policy
from labkit.policies.naming import parse_policy
from labkit.survey.fair import fair_profile

DECISIONS, MOST_DECISIONS = 320, 10**6
_VECTORS = (
    "vectors.csv holds one decision a row, in order, beginning with no load on any server. Where report is "
    "given, the loads become that column of vectors_loads.csv, and what depends on them is worked out anew; "
    "then the server is picked, with the row's coin and words of the own stream; then its load rises by 1."
)
_NUMBERS = (
    "64-bit IEEE floats, every product and sum rounded by itself (no fused multiply-add), sums term by term "
    "in table order; products with a coin are whole numbers of up to 128 bits"
)


def plan(fleet: Fleet, policy: Policy | str, *, decisions: int = DECISIONS) -> Plan:
    """Work out what a dispatcher outside Python needs to place tasks by a policy.

    Parameters
    ----------
    fleet : Fleet
        With a table of choices.
    policy : Policy or str
        A placement rule of labkit's, or its name such as ``"smooth-feedback"``.
    decisions : int
        How many decisions the test vectors hold, from 1 to a million. They follow from the fleet.

    Returns
    -------
    Plan
        `header`, `tables`, and `write(folder)`.

    Raises
    ------
    InputError
        For any argument that is refused: a complete fleet, a rule of the user's own, pairwise averaging, tree
        flow with drawn sets, smooth feedback where its smoothing needs iteration.

    Notes
    -----
    A dispatcher that follows the plan makes the same decisions as `labkit.place` on the same draws, to the
    bit. The reference dispatcher that `write` puts beside the tables does; the test vectors show whether a
    port to another language does.

    Examples
    --------
    >>> import labkit as lk
    >>> plan = lk.plan(lk.ring(64), "smooth-feedback")
    >>> plan
    <plan of smooth-feedback: 64 servers, 64 choices, 320 test decisions>
    >>> plan.header["refresh"]["every_tasks"]
    640
    >>> list(plan.tables)[:5]
    ['servers.csv', 'choices.csv', 'shifts.csv', 'vertices.csv', 'shares.csv']
    """
    check_fleet(fleet)
    rule = remembering(parse_policy(policy))
    check_plannable(rule, fleet)
    decisions = check_whole("decisions", decisions)
    if decisions > MOST_DECISIONS:
        raise InputError(f"decisions is {decisions}; give at most {MOST_DECISIONS:,}.")
    state = rule.prepare(fleet)
    parts = parts_of(rule, fleet, state)
    # From the fleet alone, so that the same fleet gives the same plan.
    seed = np.random.SeedSequence(int(fleet.digest[:32], 16))
    vectors, loads = vectors_of(fleet, rule, state, seed, decisions)
    tables = {
        SERVERS: _servers(fleet, parts),
        "choices.csv": _choices(fleet, parts),
        **parts.tables,
        "vectors.csv": vectors,
        "vectors_loads.csv": loads,
    }
    return Plan(_header(fleet, rule, parts, tables), tables)


def write_plan(
    folder: str | Path,
    policy: Policy | str,
    output: str | Path,
    *,
    decisions: int = DECISIONS,
    say: Callable[[str], Any] = print,
) -> Path:
    """Make the plan for the fleet in a folder, write it, and say what was written.

    Parameters
    ----------
    folder : str or Path
        Holds the fleet's two tables (`labkit.read_fleet`).
    policy : Policy or str
    output : str or Path
        New folder for the plan.
    decisions : int
        How many decisions the test vectors hold.
    say : callable
        Is given each line of what there is to say.

    Returns
    -------
    Path
        The folder of the plan.

    Raises
    ------
    InputError
        For any argument that is refused; nothing is written then.
    """
    made = plan(read_fleet(folder), policy, decisions=decisions)
    written = made.write(output)
    size = sum(path.stat().st_size for path in written.iterdir())
    refresh = made.header["refresh"]["every_tasks"]
    say(f"{repr(made)[1:-1]}, {size:,} bytes in {written}")
    if refresh:
        when = f"every {refresh:,} tasks" if refresh > 0 else "whenever loads are reported"
        say(f"what it keeps of the whole fleet is worked out anew {when}")
    say(f"check it, or a port of its dispatcher: python {written / 'dispatcher.py'} {written}")
    return written


def _servers(fleet: Fleet, parts: Parts) -> pd.DataFrame:
    names = fleet.names.to_numpy(dtype=object)
    weight = comparison_weights(fleet.capacity)
    return pd.DataFrame(
        {
            "number": np.arange(fleet.size),
            "name": pd.Series(names, dtype=object),
            "kind": pd.Series(
                ["text" if isinstance(name, str) else "number" for name in names], dtype=object
            ),
            "capacity": np.ones(fleet.size) if fleet.capacity is None else fleet.capacity,
            "weight": np.ones(fleet.size) if weight is None else weight,
            "fair_utilisation": fair_profile(fleet).of_unit_work,
            **{name: values for name, (values, _) in parts.servers.items()},
        }
    )


def _choices(fleet: Fleet, parts: Parts) -> pd.DataFrame:
    count, most = fleet.options.shape
    columns = {}
    for place in range(most):
        servers = fleet.options[:, place]
        columns[f"option_{place + 1}"] = pd.Series(servers.astype(np.int64), dtype="Int64").mask(
            servers == ABSENT
        )
    return pd.DataFrame(
        {
            "number": np.arange(count),
            "demand": np.full(count, fleet.equal_demand) if fleet.demand is None else fleet.demand,
            **columns,
            **{name: values for name, (values, _) in parts.choices.items()},
        }
    )


def _header(fleet: Fleet, rule: Policy, parts: Parts, tables: dict[str, pd.DataFrame]) -> dict[str, Any]:
    equal = comparison_weights(fleet.capacity) is None
    most = fleet.options.shape[1]
    meanings = {
        SERVERS: {
            "number": "number of the server, from 0; other tables name it so",
            "name": "its name; an apostrophe at the begin of text does not belong to it",
            "kind": "whether the name is text or a whole number",
            "capacity": "its capacity",
            "weight": "number in the ratio of the capacities: compares utilisations, weights coins",
            "fair_utilisation": "its utilisation in the fair split of one unit of work",
            **{name: meaning for name, (_, meaning) in parts.servers.items()},
        },
        "choices.csv": {
            "number": "number of the choice, from 0",
            "demand": "its demand",
            **{f"option_{place + 1}": "number of the server, blank for none" for place in range(most)},
            **{name: meaning for name, (_, meaning) in parts.choices.items()},
        },
        **parts.meanings,
        "vectors.csv": {
            "decision": "number of the decision, from 1",
            "report": "number of the loads reported just before it, blank for none",
            "choice": "number of the choice the task comes on",
            "coin": "the task's coin, a whole number below 2^64",
            "own": "words of the rule's own stream that it uses, parted by blanks",
            "server": "number of the server that is picked",
        },
        "vectors_loads.csv": {"number": "number of the server", "report_k": "its load in report k"},
    }
    about = str(type(rule).__doc__).strip().split("\n\n")[0].split()
    header: dict[str, Any] = {
        "$schema": "plan.schema.json",
        "schema_version": VERSION,
        "labkit": __version__,
        "policy": {
            "name": rule.name,
            "rule": parts.rule,
            "parameters": parts.parameters,
            "about": " ".join(about),
        },
        "fleet": {
            "digest": fleet.digest,
            "servers": fleet.size,
            "choices": len(fleet.options),
            "most_options": most,
        },
        "capacities": "equal" if equal else "unequal",
        "refresh": {"every_tasks": int(rule.renewal(fleet)), "rule": parts.refresh},
        "decisions": {
            "coin": f"a uniform whole number below 2^64 that belongs to the task; unit(word) is {UNIT}",
            "own": f"a second stream of such numbers, independent of the coins: {parts.own}",
            "rule": parts.decision,
            "ties": parts.ties,
            "numbers": _NUMBERS,
            "vectors": _VECTORS,
        },
        "files": {
            name: {
                "rows": len(table),
                "sha256": sha256(csv_bytes(name, table)),
                "columns": meanings[name],
            }
            for name, table in tables.items()
        },
    }
    return {**header, "digest": header_digest(header)}
