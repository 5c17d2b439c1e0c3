"""Checking a user's rule: it is tried on tiny fleets, and what is wrong with it is told."""

import warnings
from typing import Any

import numpy as np
from numba.core.errors import NumbaWarning

from labkit.errors import InputError
from labkit.fleet.model import Fleet, check_fleet
from labkit.policies.base import Policy
from labkit.policies.outside import fingerprints
from labkit.policies.own_rule import OwnRule
from labkit.randomness import seed_sequence
from labkit.trials.asking import Answers, Endless, ask, picked_plainly
from labkit.trials.report import Finding, PolicyCheck
from labkit.trials.stages import Case, cases_of, own_stage, stages
from labkit.trials.words import ENDLESS, findings_of, notes_of, unseen_by


def check_policy(rule: OwnRule, fleet: Fleet | None = None, *, rng: Any = 1) -> PolicyCheck:
    """Try a rule of your own on tiny fleets and say what is wrong with it.

    The rule is compiled, and asked about some thousands of tasks: of two and of three options, on complete
    and on sparse fleets, with unequal capacities, demands and sizes, with late reports, and at loads that few
    tasks do not lead to. Each time it is asked in several ways that must not matter: twice in a row, after
    other tasks, with its arrays elsewhere in memory, compiled a second time, and as plain Python.

    Parameters
    ----------
    rule : OwnRule
        Made by `labkit.policy`.
    fleet : Fleet, optional
        A fleet of yours to try it on as well.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        Draws the tasks.

    Returns
    -------
    PolicyCheck
        `sound` tells whether nothing was found, `findings` what was; printed, it says what was tried, what to
        do, and what cannot be found in this way.

    Raises
    ------
    InputError
        When `rule` is no rule made by `labkit.policy`, or `fleet` no fleet. Faults of the rule do not raise.

    Examples
    --------
    >>> import labkit as lk
    >>> @lk.policy
    ... def third(options, loads, capacity, coin):
    ...     return 2
    >>> found = lk.check_policy(third)
    >>> found.sound
    False
    >>> [finding.fault for finding in found.findings]
    ['picks outside the options']
    """
    if not isinstance(rule, OwnRule):
        given = f"the built-in policy {rule.name}" if isinstance(rule, Policy) else repr(rule)
        raise InputError(
            f"rule is {given}; give a rule of your own: a function with @lk.policy above it, by its name "
            "without quotes."
        )
    if fleet is not None:
        check_fleet(fleet)
    generator = np.random.default_rng(seed_sequence(rng))
    stale = rule.changed_outside()
    before = fingerprints(rule.function)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NumbaWarning)
        try:
            for load in (np.int64, np.float64):
                rule.check(load)
        except InputError as refusal:
            what, _, advice = str(refusal).removeprefix(f"policy {rule.name} ").partition("; ")
            seen = what.removeprefix("cannot be compiled: ")
            seen = seen[:1].upper() + seen[1:] if seen != what else f"It {what}"
            fault = Finding("cannot be compiled", f"{seen}.", f"{advice[:1].upper()}{advice[1:]}")
            return PolicyCheck(rule.name, (fault,), (), (), ())
        try:
            answers, tried = _try(rule, fleet, generator)
        except Endless:
            return PolicyCheck(rule.name, (ENDLESS,), (), (), ())
    now = fingerprints(rule.function)
    changed = sorted(name for name in before.keys() | now if before.get(name) != now.get(name))
    return PolicyCheck(
        rule.name,
        findings_of(answers, stale, changed),
        notes_of(rule, answers),
        tried,
        unseen_by(rule, answers, own_fleet=fleet is not None),
    )


def _try(
    rule: OwnRule, fleet: Fleet | None, generator: np.random.Generator
) -> tuple[Answers, tuple[tuple[str, int], ...]]:
    """Return the answers on all stages together, and how many tasks each had."""
    total, tried, second = Answers(), [], rule.anew()
    for stage in stages():
        plain: list[Any] = []

        def pick(case: Case, plain: list[Any] = plain) -> int:
            return plain[-1] if isinstance(plain[-1], int) else -1

        cases = []
        for case in cases_of(stage, pick, generator):
            plain.append(picked_plainly(rule, case))
            cases.append(case)
        _add(total, ask(rule, second, cases, plain, generator))
        tried.append((stage.words, len(cases)))
    if fleet is not None:
        stage = own_stage(fleet)
        cases = list(cases_of(stage, lambda case: _compiled(rule, case), generator))
        _add(total, ask(rule, second, cases, None, generator))
        tried.append((stage.words, len(cases)))
    return total, tuple(tried)


def _compiled(rule: OwnRule, case: Case) -> int:
    try:
        return rule.pick(*case)
    except Exception:  # told when all cases are asked
        return -1


def _add(total: Answers, more: Answers) -> None:
    total.cases += more.cases
    total.picks += more.picks
    total.failures += more.failures
    total.beyond += more.beyond
    for way, found in more.other.items():
        total.other.setdefault(way, []).extend(found)
