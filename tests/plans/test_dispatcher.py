"""The reference dispatcher: small, on its own, and to the bit what the engine does."""

import ast
import re
import subprocess
import sys
from functools import lru_cache
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import labkit as lk
from labkit.engine.arrivals import arrivals_of
from labkit.plans import dispatcher
from labkit.policies.naming import parse_policy
from tests import reference
from tests.plans.makers import RULES, copy_of, odd_fleet, two_rings

SOURCE = Path(dispatcher.__file__)
TASKS = 40


def test_it_is_at_most_150_lines_of_plain_python():
    text = SOURCE.read_text(encoding="utf-8")
    assert len(text.splitlines()) <= 150
    imported = set()
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.Import):
            imported |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0
            imported.add(str(node.module).split(".")[0])
    assert imported <= sys.stdlib_module_names


@st.composite
def fleets(draw, *, plain):
    """Draw a small fleet: a plain one of pairs, or one with up to four options and unequal amounts.

    Either kind has one loop to be compiled for each rule.
    """
    size = draw(st.integers(4, 9))
    width = 2 if plain else 4
    options = st.lists(st.integers(0, size - 1), min_size=2, max_size=width, unique=True)
    rows = [[0, 1, 2, 3][:width], *draw(st.lists(options, min_size=1, max_size=9))]
    choices = pd.DataFrame([row + [None] * (width - len(row)) for row in rows], dtype="Int64")
    choices.columns = [f"option_{position + 1}" for position in range(width)]
    servers = pd.DataFrame({"server": range(size)})
    if not plain:
        capacity = st.sampled_from([1.0, 2.0, 3.0]) | st.floats(0.5, 3.0)
        servers["capacity"] = [2.0, 1.0, *(draw(capacity) for _ in range(size - 2))]
        demand = st.sampled_from([0.0, 0.5, 1.0, 3.7])
        choices["demand"] = [2.5, *(draw(demand) for _ in rows[1:])]
    return lk.Fleet(servers, choices)


@pytest.fixture(scope="session")
def place_of_plans(tmp_path_factory):
    return tmp_path_factory.mktemp("drawn")


def path_of(place, fleet, rule, entropy, every, sizes, tasks):
    """Place tasks by the dispatcher on NumPy's words; return the loads after each."""
    made = lk.plan(fleet, rule, decisions=20)
    served = dispatcher.Dispatcher(made.write(place / made.digest))
    law = arrivals_of(fleet)
    table = None if law.threshold is None else (law.threshold, law.alias)
    arriving, own = reference.words(entropy, 0, 0), reference.words(entropy, 0, 1)
    renewal = rule.renewal(fleet)
    loads, history = [0] * fleet.size, []
    for task in range(tasks):
        reported = task % every == 0 if every else task == 0
        if every and reported:
            served.loads = list(loads)
        if task % renewal == 0 if renewal > 0 else renewal < 0 and reported:
            served.refresh()
        _, choice, coin = reference.arrival(fleet, arriving, table)
        server = served.pick(choice, coin, own)
        amount = 1 if sizes is None else float(sizes[task])
        loads[server] += amount
        if not every:
            served.add(server, amount)
        history.append(list(loads))
    return history


def assert_same_path(place, fleet, rule, entropy, every, sizes=None, tasks=TASKS, step=1):
    """Compare the loads after every `step` tasks; the engine's first ones do not depend on what follows."""
    rule = parse_policy(rule)
    rule.prepare = lru_cache(rule.prepare)
    history = path_of(place, fleet, rule, entropy, every, sizes, tasks)
    for count in range(step, tasks + 1, step):
        outcome = lk.place(
            fleet, rule, tasks=count, rng=entropy, sizes=None if sizes is None else sizes[:count],
            information=lk.Snapshot(every) if every else lk.Fresh(),
        )  # fmt: skip
        assert outcome.loads[0].tolist() == history[count - 1], f"after task {count}"


# Every pair here is a loop to be compiled: plain pairs only where rules have a short way for them.
ON_PAIRS = (
    "least-loaded",
    "smooth-feedback(gain=1.5, every=7)",
    "tree-flow(strengths=equal)",
)


@pytest.mark.parametrize(
    ("rule", "plain"), [(rule, False) for rule in RULES] + [(rule, True) for rule in ON_PAIRS]
)
@settings(max_examples=8)
@given(data=st.data())
def test_the_engine_has_the_same_loads_after_every_task(place_of_plans, rule, plain, data):
    fleet = data.draw(fleets(plain=plain))
    entropy = data.draw(st.integers(0, 2**40))
    every = data.draw(st.sampled_from([0, 0, 1, 5]))
    sizes = None if plain else np.arange(TASKS) % 5 / 3
    assert_same_path(place_of_plans, fleet, rule, entropy, every, sizes)


@pytest.mark.parametrize("every", [0, 50])
@pytest.mark.parametrize("rule", ["smooth-feedback(every=100)", "tree-flow"])
def test_the_engine_has_the_same_loads_on_a_ring(place_of_plans, rule, every):
    assert_same_path(place_of_plans, lk.ring(64), rule, 11, every, tasks=640, step=64)


def test_dispatchers_beside_others_leave_differences_at_the_last_report(place_of_plans):
    fleet, count, every, entropy, tasks = lk.ring(12), 3, 24, 5, 240
    made = lk.plan(fleet, "tree-flow(strengths=equal)")
    folder = made.write(place_of_plans / made.digest)
    several = [dispatcher.Dispatcher(folder) for _ in range(count)]
    arriving, own, turns = (reference.words(entropy, 0, stream) for stream in (0, 1, 3))
    loads = [0] * fleet.size
    for task in range(tasks):
        if task % every == 0:
            for one in several:
                one.refresh(loads)
        _, choice, coin = reference.arrival(fleet, arriving, None)
        served = several[next(turns) * count >> 64]
        server = served.pick(choice, coin, own)
        served.add(server, fresh=False)
        loads[server] += 1
    outcome = lk.place(
        fleet, "tree-flow(strengths=equal)", tasks=tasks, rng=entropy,
        information=lk.Dispatchers(count=count, every=every),
    )  # fmt: skip
    assert outcome.loads[0].tolist() == loads


@pytest.mark.parametrize("fleet", [lk.ring(12), odd_fleet(), two_rings()], ids=["ring", "odd", "parts"])
@pytest.mark.parametrize("rule", RULES)
def test_every_plan_passes_its_own_vectors_on_its_own(rule, fleet, tmp_path):
    folder = lk.plan(fleet, rule).write(tmp_path / "plan")
    assert dispatcher.check(folder) == 320
    names = dispatcher.Dispatcher(folder).names
    assert list(names) == [str(name) for name in fleet.names]


def run(folder, *words):
    return subprocess.run(
        [sys.executable, "-I", "-W", "error", folder / "dispatcher.py", *words],
        cwd=folder.parent, capture_output=True, text=True, check=False,
    )  # fmt: skip


def test_the_copy_in_a_plan_runs_without_labkit(written):
    done = run(written, written)
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout == f"{written}: all 320 decisions are made as the plan says\n"


def test_without_a_plan_it_says_what_to_give(written):
    done = run(written)
    assert done.returncode == 1
    assert done.stderr.startswith("usage: python dispatcher.py PLAN_FOLDER")


@pytest.mark.parametrize(
    ("name", "old", "new", "said"),
    [
        ("plan.json", b'"schema_version": 1', b'"schema_version": 2', "schema version is 2, not 1"),
        ("shares.csv", b"share_1", b"share_9", "shares.csv is not as it was written"),
        ("plan.json", b"{", b"", "Extra data"),
        ("dispatcher.py", b"+ tilt[server] for", b"- tilt[server] for", r"decision \d+ picks server \d"),
    ],
)
def test_a_spoilt_plan_fails_in_one_line(written, tmp_path, name, old, new, said):
    folder = copy_of(written, tmp_path / "plan")
    content = (folder / name).read_bytes()
    assert old in content
    (folder / name).write_bytes(content.replace(old, new, 1))
    done = run(folder, folder)
    assert done.returncode == 1
    assert done.stdout == ""
    assert len(done.stderr.splitlines()) == 1
    assert re.search(said, done.stderr)


@pytest.mark.parametrize(
    ("rule", "old", "new"),
    [
        ("one-choice", "coin * len(options) >> 64", "len(options) - 1 - (coin * len(options) >> 64)"),
        ("least-loaded", "server, best) < 0.0", "server, best) <= 0.0"),
        ("least-loaded", "coin * ties >> 64", "0"),
        ("least-loaded(ties=first)", 'get("ties") == "first"', 'get("ties") == "last"'),
        ("mixed(beta=0.3)", '< self.settings["beta"]', "< 0.5"),
        ("static-split", "bound <= _unit", "bound > _unit"),
        ("smooth-feedback(gain=1.5, every=7)", "6364136223846793005", "6364136223846793007"),
        ("smooth-feedback(gain=1.5, every=7)", "reversed(joined)", "joined"),
        ("smooth-feedback(gain=1.5) on a ring", "(_unit(coin) - 0.5) * width * (", "0.0 * ("),
        (
            "tree-flow(strengths=equal) on a ring",
            "second if push > 0 else first",
            "first if push > 0 else second",
        ),
        ("tree-flow(strengths=equal) on a ring", "if fresh and", "if not fresh and"),
        ("tree-flow(strengths=equal)", "word -= abs(push)", "word += abs(push)"),
        ("tree-flow(strengths=equal, leftover=coin)", "(push >> 1)", "0 * (push >> 1)"),
        ("tree-flow(strengths=equal, response=linear)", "apart * slope", "2.0 * apart * slope"),
    ],
)
def test_the_vectors_catch_a_port_that_is_wrong(rule, old, new, tmp_path):
    rule, ring, _ = rule.partition(" on a ring")
    fleet = lk.ring(12) if ring or rule == "one-choice" else odd_fleet()
    folder = lk.plan(fleet, rule).write(tmp_path / "plan")
    text = SOURCE.read_text(encoding="utf-8")
    assert old in text
    (folder / "dispatcher.py").write_text(text.replace(old, new), encoding="utf-8")
    assert "picks server" in run(folder, folder).stderr
