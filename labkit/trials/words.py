"""What the answers of a rule mean, in words: its faults, what is worth knowing, and what stays unseen."""

from typing import Any

import numpy as np

from labkit.policies.compile_errors import NO_MEMORY
from labkit.policies.outside import plain_function, values_reached
from labkit.policies.own_rule import OwnRule
from labkit.trials.asking import AGAIN, ANEW, ELSEWHERE, LATER, PLAIN, STEPS, Answers
from labkit.trials.report import Finding
from labkit.trials.stages import Case

# Ways of asking whose answers are compared with the first, besides plain Python.
COMPARED = 4

ENDLESS = Finding(
    "does not come to an end",
    f"For a task on a tiny fleet it went on for more than {STEPS:,} lines, so it was not tried any further.",
    "Give every while loop a condition that becomes false, and every number of rounds a limit.",
)


def findings_of(answers: Answers, stale: list[str], changed: list[str]) -> tuple[Finding, ...]:
    """Return the faults that answers show.

    Parameters
    ----------
    answers : Answers
    stale : list of str
        Names from outside that have changed since the rule was compiled.
    changed : list of str
        Names from outside that changed while it was asked.
    """
    found = [*_wrong_picks(answers)]
    if stale:
        found.append(_stale(stale))
    if changed:
        found.append(
            Finding(
                "keeps something between tasks",
                f"While it was tried, this changed outside it: {', '.join(changed)}.",
                f"{NO_MEMORY[:1].upper()}{NO_MEMORY[1:]}.",
            )
        )
    repeated = [way for way in (AGAIN, LATER) if way in answers.other]
    if repeated:
        found.append(_not_repeatable(answers, repeated))
    elif ELSEWHERE in answers.other:
        found.append(_told(answers, ELSEWHERE, *_ELSEWHERE))
    elif ANEW in answers.other and not stale:
        found.append(_told(answers, ANEW, *_ANEW))
    elif PLAIN in answers.other and not stale:
        found.append(_told(answers, PLAIN, *_PLAIN))
    return tuple(found)


_ELSEWHERE = (
    "depends on where its arrays lie in memory",
    "With the same numbers at another place in memory it picked otherwise",
    "Use the numbers in the arrays only, not their addresses, and no position below 0 or beyond an array.",
)
_ANEW = (
    "depends on when it was compiled",
    "Compiled a second time it picked otherwise",
    "Let it depend on nothing outside that may change; that is fixed when it is compiled.",
)
_PLAIN = (
    "means something else compiled",
    "As plain Python it picked otherwise than compiled",
    "Set every name on all paths before it is used; take int(options[i]) before subtracting (servers' "
    "positions are unsigned); keep whole numbers below 2**63.",
)


def _wrong_picks(answers: Answers) -> list[Finding]:
    found = []
    outside = answers.outside()
    total = len(answers.cases)
    if outside:
        case, pick = outside[0]
        found.append(
            Finding(
                "picks outside the options",
                f"For {len(outside):,} of {total:,} tasks it returned no position within options; the first "
                f"time {pick}, for {_words(case)}.",
                "Return a position from 0 to len(options) - 1, not a server; a task may have two options, "
                "three or more.",
            )
        )
    if answers.failures:
        case, told = answers.failures[0]
        told = told.removeprefix("policy ").rstrip(".")
        beyond = "looked beyond" in told
        found.append(
            Finding(
                "looks beyond an array" if beyond else "stops with an error",
                f"For {len(answers.failures):,} of {total:,} tasks: {told}; "
                f"the first time for {_words(case)}.",
                "Read options at positions below len(options), and loads and capacity at options[i]."
                if beyond
                else "Let every task be placed, whatever its options, loads and coin.",
            )
        )
    return found


def _stale(names: list[str]) -> Finding:
    listed = ", ".join(names)
    return Finding(
        "reads what has changed since",
        f"It was compiled with the values at its first use, and these hold other values now: {listed}.",
        "Run the cell of the rule again, so that it takes the present values.",
    )


def _not_repeatable(answers: Answers, ways: list[str]) -> Finding:
    total = len(answers.cases)
    words = {AGAIN: "right afterwards", LATER: "after other tasks"}
    counts = " and ".join(f"for {len(answers.other[way]):,} of {total:,} tasks {words[way]}" for way in ways)
    case, first, then = answers.other[ways[0]][0]
    return Finding(
        "picks otherwise for the same task",
        f"Asked once more with the same four arguments it picked otherwise {counts}; the first time "
        f"{_pick(then)} instead of {_pick(first)}, for {_words(case)}.",
        "Decide from the four arguments alone; chance comes from coin.",
    )


def _told(answers: Answers, way: str, fault: str, what: str, advice: str) -> Finding:
    found = answers.other[way]
    case, first, then = found[0]
    return Finding(
        fault,
        f"{what}, for {len(found):,} of {len(answers.cases):,} tasks; the first time {_pick(then)} "
        f"instead of {_pick(first)}, for {_words(case)}.",
        advice,
    )


def _pick(pick: Any) -> str:
    return "an error" if pick is None else str(pick)


def _words(case: Case) -> str:
    servers = ", ".join(map(str, case.options))
    loads = ", ".join(f"{case.loads[each]:.6g}" for each in case.options)
    return f"options {servers} with loads {loads} and coin {case.coin:.4g}"


def notes_of(rule: OwnRule, answers: Answers) -> tuple[str, ...]:
    """Return what is worth knowing about a rule and no fault."""
    notes = []
    if AGAIN not in answers.other and LATER not in answers.other:
        notes.append(_NEEDS_MORE if answers.beyond else _NEEDS_OPTIONS)
    outside = values_reached(rule.function)
    values = [name for name, value in outside.items() if isinstance(value, _VALUES)]
    if values:
        notes.append(
            f"Taken from outside, with the values at its first use: {', '.join(values)}. After changing one, "
            "run the cell of the rule again."
        )
    if "objmode" in rule.function.__code__.co_names:
        notes.append("It leaves compiled code for Python (objmode) in every task, which takes far longer.")
    return tuple(notes)


_NEEDS_MORE = (
    "It looks at loads of servers beyond the options of a task: whoever places tasks must know those, too."
)
_NEEDS_OPTIONS = (
    "Loads of servers beyond the options of a task made no difference: it needs to know those of the options "
    "at most."
)
_VALUES = (bool, int, float, str, tuple, np.generic, np.ndarray)


def unseen_by(rule: OwnRule, answers: Answers, *, own_fleet: bool) -> tuple[str, ...]:
    """Return what a check cannot find, with the numbers of this one."""
    compared = COMPARED * len(answers.cases)
    unseen = [
        # The rule of three: with no event in n trials the 95 % limit of its probability is 3 / n.
        f"what happens by chance in fewer than about 1 of {compared // 3:,} answers ({compared:,} were "
        "compared), or only at loads, capacities or numbers of options that were not tried",
        "what changes outside the rule after this check, and a rule that goes on for ever only at loads "
        "that were not tried",
        "picks that differ on another processor or with other versions, as the last digits of sums and "
        "powers of floats may",
        "whether the rule is any good: compare it with others on the same arrivals",
    ]
    if not own_fleet:
        own = "what goes wrong on your fleet alone: lk.check_policy(rule, fleet) tries it there, too"
        unseen.insert(1, own)
    helpers = [name for name, value in values_reached(rule.function).items() if _is_helper(value)]
    if helpers:
        unseen.append(
            f"positions beyond an array and loops without end inside {', '.join(helpers)}: only the rule "
            "itself is compiled with bounds checks and followed line by line"
        )
    return tuple(unseen)


def _is_helper(value: Any) -> bool:
    return hasattr(value, "py_func") and plain_function(value) is not None
