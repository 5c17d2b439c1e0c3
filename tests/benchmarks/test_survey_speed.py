"""Time and memory of an exact survey, and its ratio to a general linear program on the same fleets."""

import resource
import subprocess
import sys
import time

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.survey.fair import fair_profile, top_of_profile
from tests.survey.oracles import linear_program

pytestmark = pytest.mark.benchmark


def road_like(side=317, seed=1):
    """Return a fleet like a road network: a grid of about 100,000 servers with 130,000 of its edges left."""
    rng = np.random.default_rng(seed)
    place = np.arange(side * side).reshape(side, side)
    across = np.stack([place[:, :-1].ravel(), place[:, 1:].ravel()], axis=1)
    down = np.stack([place[:-1].ravel(), place[1:].ravel()], axis=1)
    ends = np.concatenate([across, down])
    ends = ends[rng.random(len(ends)) < 0.65]
    choices = pd.DataFrame(ends, columns=["option_1", "option_2"])
    servers = pd.DataFrame({"server": np.arange(side * side), "capacity": rng.uniform(1, 3, side * side)})
    return lk.Fleet(servers, choices.assign(demand=rng.exponential(1, len(ends))))


def random_fleet(servers=10_000, choices=100_000, seed=1):
    rng = np.random.default_rng(seed)
    first = rng.integers(0, servers, choices)
    other = (first + rng.integers(1, servers, choices)) % servers
    table = pd.DataFrame({"option_1": first, "option_2": other})
    return lk.Fleet(pd.DataFrame({"server": np.arange(servers)}), table)


def timed(work):
    start = time.perf_counter()
    result = work()
    return time.perf_counter() - start, result


def warm():
    fleet = lk.ring_with_chords(30, 5, rng=1)
    top_of_profile(fleet)
    fair_profile(fleet)


@pytest.mark.parametrize(
    ("make", "target"), [(road_like, 3), (random_fleet, 20)], ids=["road-like", "random"]
)
def test_against_a_general_linear_program(make, target):
    warm()
    fleet = make()
    ours, top = timed(lambda: top_of_profile(fleet))
    whole, profile = timed(lambda: fair_profile(fleet))
    limit = 150
    theirs, value = min(
        (
            timed(lambda m=method: linear_program(fleet, method=m, time_limit=limit))
            for method in ("highs-ds", "highs-ipm")
        ),
        key=lambda done: (done[1] is None, done[0]),
    )
    word = "" if value is not None else "more than "
    print(
        f"\n{fleet}\noptimum {ours:.2f} s, whole profile {whole:.2f} s, HiGHS {word}{theirs:.1f} s: "
        f"{word}{theirs / ours:.0f} x"
    )
    assert value is None or value == pytest.approx(top.optimum, rel=1e-6)
    assert profile.optimum == pytest.approx(top.optimum, rel=1e-12)
    assert ours < 10
    assert whole < 60
    assert theirs > target * ours


def test_memory_of_a_road_like_fleet():
    code = (
        "import resource\nfrom tests.benchmarks.test_survey_speed import road_like\nimport labkit as lk\n"
        "best = lk.survey(road_like())\nbest.profile\nbest.table()\n"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    peak = int(done.stdout) * (1 if sys.platform == "darwin" else 1024)
    print(f"\nsurvey of 100,489 servers with all facts: {peak / 2**20:.0f} MiB at most")
    assert peak < 1.5 * 2**30
    assert resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss > 0


@pytest.mark.parametrize(
    "fleet",
    [
        lk.ring_with_chords(100_000, 20_000, rng=1),
        lk.torus(300, 300),
        lk.Fleet(
            pd.DataFrame({"server": np.arange(100_000)}),
            pd.DataFrame(
                {
                    "option_1": np.arange(100_000),
                    "option_2": (np.arange(100_000) + 1) % 100_000,
                    "demand": np.where(np.arange(100_000) < 50_000, 1.0, 0.9),
                }
            ),
        ),
    ],
    ids=["chords", "torus", "ring of two halves"],
)
def test_shapes_on_which_work_must_travel_far(fleet):
    warm()
    seconds, profile = timed(lambda: fair_profile(fleet))
    print(f"\n{fleet}: {seconds:.2f} s, {len(profile.level)} levels")
    assert seconds < 60
    assert abs(profile.agreement()) <= 1e-9
