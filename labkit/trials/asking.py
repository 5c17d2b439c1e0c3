"""Asking a rule what it picks, in every way in which the answer must be the same."""

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from types import FrameType
from typing import Any

import numpy as np

from labkit.errors import InputError
from labkit.policies.own_rule import OwnRule
from labkit.trials.stages import Case

# Lines of Python that a rule may execute for one task on a tiny fleet before it counts as endless.
STEPS = 100_000

# The ways of asking once more, in the order in which they tell what is wrong.
AGAIN, LATER, ELSEWHERE, ANEW, PLAIN = "again", "later", "elsewhere", "anew", "plain"


class Endless(BaseException):
    """A rule that did not come to an end within `STEPS` lines; none of its own ``except`` may catch it."""


@dataclass
class Answers:
    """What came of all the asking."""

    cases: list[Case] = field(default_factory=list)
    picks: list[Any] = field(default_factory=list)
    failures: list[tuple[Case, str]] = field(default_factory=list)
    other: dict[str, list[tuple[Case, Any, Any]]] = field(default_factory=dict)
    beyond: int = 0

    def outside(self) -> list[tuple[Case, int]]:
        """Return the cases with a pick that is no position within the options."""
        pairs = zip(self.cases, self.picks, strict=True)
        return [(case, pick) for case, pick in pairs if pick is not None and not _inside(case, pick)]


def _inside(case: Case, pick: int) -> bool:
    return 0 <= pick < len(case.options)


def picked_plainly(rule: OwnRule, case: Case) -> Any:
    """Return what the rule's Python text picks, not compiled; an error is returned as its name.

    Positions are signed here, as whoever writes ``options[0] - options[1]`` means them.

    Raises
    ------
    Endless
        When it executes more than `STEPS` lines.
    """
    try:
        with np.errstate(all="ignore"), _limited(STEPS, rule.function.__code__.co_filename):
            return int(rule(case.options.astype(np.int64), *case[1:]))
    except Endless:
        raise
    except Exception as error:
        return type(error).__name__


@contextmanager
def _limited(steps: int, file: str) -> Iterator[None]:
    """Raise `Endless` in what executes more than so many lines of this file; a compiled helper has none."""
    left = steps

    def count(frame: FrameType, event: str, _: Any) -> Callable | None:
        nonlocal left
        if frame.f_code.co_filename != file:
            return None
        left -= event == "line"
        if left < 0:
            raise Endless
        return count

    before = sys.gettrace()
    sys.settrace(count)
    try:
        yield
    finally:
        sys.settrace(before)


def ask(
    rule: OwnRule, second: OwnRule, cases: list[Case], plain: list[Any] | None, rng: np.random.Generator
) -> Answers:
    """Ask a compiled rule about all cases, in every way in which the answer must be the same.

    Parameters
    ----------
    rule : OwnRule
        It compiles.
    second : OwnRule
        The same rule, to be compiled once more.
    cases : list of Case
    plain : list or None
        What its Python text picks for each case, or None when that was not asked.
    rng : numpy.random.Generator
        Draws the order of the second round.
    """
    answers = Answers(cases)
    for at, case in enumerate(cases):
        first = _picked(rule, case, answers)
        answers.picks.append(first)
        _compare(answers, AGAIN, at, _picked(rule, case, None))
        if plain is not None:
            _compare(answers, PLAIN, at, plain[at])
    for at in rng.permutation(len(cases)):
        _compare(answers, LATER, at, _picked(rule, cases[at], None))
        _compare(answers, ELSEWHERE, at, _picked(rule, _moved(cases[at], rng), None))
        _compare(answers, ANEW, at, _picked(second, cases[at], None))
        altered = _altered(cases[at], rng)
        if altered is not None:
            picked = _picked(rule, altered, None)
            answers.beyond += picked is not None and picked != answers.picks[at]
    return answers


def _picked(rule: OwnRule, case: Case, answers: Answers | None) -> int | None:
    """Return the pick, or None for an error, which is kept when answers are given."""
    try:
        return rule.pick(*case)
    except Exception as error:
        if answers is not None:
            refusal = rule.explain(error)
            assert isinstance(refusal, InputError)
            answers.failures.append((case, str(refusal)))
        return None


def _compare(answers: Answers, way: str, at: int, pick: Any) -> None:
    first = answers.picks[at]
    failed = first is None and (pick is None or isinstance(pick, str))
    if not failed and pick != first:
        answers.other.setdefault(way, []).append((answers.cases[at], first, pick))


def _moved(case: Case, rng: np.random.Generator) -> Case:
    """Return the same case with its arrays at other places in memory, between other numbers."""
    arrays = [_copied(array, int(rng.integers(1, 64))) for array in case[:3]]
    return Case(arrays[0], arrays[1], arrays[2], case.coin)


def _copied(array: np.ndarray, before: int) -> np.ndarray:
    room = np.full(before + array.size + 8, 7, array.dtype)
    room[before : before + array.size] = array
    copy = room[before : before + array.size]
    copy.setflags(write=False)
    return copy


def _altered(case: Case, rng: np.random.Generator) -> Case | None:
    """Return the case with other loads on servers beyond its options, or None when there are none."""
    others = np.setdiff1d(np.arange(case.loads.size), case.options)
    if not others.size:
        return None
    loads = case.loads.copy()
    loads[others] = rng.permutation(loads[others]) + rng.integers(0, 3, others.size)
    loads[rng.choice(others)] = 0
    loads.setflags(write=False)
    return case._replace(loads=loads)
