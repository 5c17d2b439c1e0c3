"""Large fleets: fluid limits, exact laws of the highest load, heavily loaded limits, another simulation."""

from math import factorial, prod

import numpy as np
import pandas as pd
import pytest
from scipy.integrate import solve_ivp
from scipy.stats import chi2

import labkit as lk
from tests.published.standard_error import assert_within


def tail_fractions(fleet, policy, *, replicates, rng, tasks=None, levels=4):
    """Return the fraction of servers with load >= 1, 2, ..., one row a replicate."""
    rows = []
    for replicate in range(replicates):
        loads = lk.place(
            fleet, policy, tasks=tasks or len(fleet), rng=np.random.SeedSequence(rng, spawn_key=(replicate,))
        ).loads[0]
        rows.append([(loads >= level).mean() for level in range(1, levels + 1)])
    return np.array(rows)


@pytest.mark.parametrize(
    ("options", "fractions"),
    [
        (1, [0.6321206, 0.2642411, 0.0803014, 0.01898816]),
        (2, [0.7615942, 0.2295045, 0.008895258, 6.047256e-6]),
        (3, [0.8230405, 0.1764518, 5.077038e-4]),
        (4, [0.8591792, 0.1407978, 2.300596e-5]),
    ],
)
def test_fluid_limit(options, fractions):
    # ds_i/dt = s_(i-1)^d - s_i^d at t = 1 (Mitzenmacher, Combin. Probab. Comput. 8, 1999; values recomputed).
    # 20 replicates of 10^6 tasks on 10^6 servers; the limit is off by order 1e-6, the standard error is 1e-4.
    policy = "one-choice" if options == 1 else "least-loaded"
    fleet = lk.complete(10**6, options=max(options, 2), distinct=False)
    seen = tail_fractions(fleet, policy, replicates=20, rng=options)
    for level, fraction in enumerate(fractions):
        assert_within(seen[:, level], fraction, largest_error=3e-4)


def test_fluid_limit_with_two_groups_and_ties_to_the_first():
    # One option from each half of the servers, ties to the first (Vöcking 2003; equations of Mitzenmacher &
    # Vöcking 1999 integrated here).
    def change(_, state):
        left, right = np.split(state, 2)
        before_left, before_right = np.r_[1.0, left[:-1]], np.r_[1.0, right[:-1]]
        return np.r_[2 * (before_left - left) * before_right, 2 * (before_right - right) * left]

    end = solve_ivp(change, (0, 1), np.zeros(20), rtol=1e-10, atol=1e-12).y[:, -1]
    expected = (end[:10] + end[10:]) / 2
    assert expected[:3] == pytest.approx([0.7716752, 0.2238497, 0.004475053], rel=1e-5)
    half = 800
    grid = np.indices((half, half)).reshape(2, -1)
    fleet = lk.Fleet(
        pd.DataFrame({"server": range(2 * half)}),
        pd.DataFrame({"option_1": grid[0], "option_2": half + grid[1]}),
    )
    loads = lk.place(fleet, lk.LeastLoaded(ties="first"), tasks=2 * half, replicates=300, rng=2).loads
    for level in (1, 2):
        assert_within((loads >= level).mean(axis=1), expected[level - 1], largest_error=5e-4)


def test_one_choice_is_the_multinomial():
    # 6 servers, 9 tasks: all 6^9 placements equally likely. Chi-square over the 2,002 occupancies merged to
    # the 26 partitions of 9 into at most 6 parts; false alarm 1e-4.
    loads = np.sort(lk.place(lk.complete(6), "one-choice", tasks=9, replicates=40_000, rng=13).loads, axis=1)
    seen = pd.Series(map(tuple, loads)).value_counts()
    expected = {}
    for parts in {tuple(sorted(p)) for p in _compositions(9, 6)}:
        arrangements = factorial(6) / prod(factorial(parts.count(value)) for value in set(parts))
        expected[parts] = arrangements * factorial(9) / prod(map(factorial, parts)) / 6**9 * 40_000
    assert sum(expected.values()) == pytest.approx(40_000)
    rare = [parts for parts, count in expected.items() if count < 5]
    common = [parts for parts in expected if parts not in rare]
    pairs = [(seen.get(parts, 0), expected[parts]) for parts in common]
    pairs.append((sum(seen.get(parts, 0) for parts in rare), sum(expected[parts] for parts in rare)))
    statistic = sum((count - mean) ** 2 / mean for count, mean in pairs)
    assert statistic < chi2.ppf(1 - 1e-4, len(pairs) - 1)


def _compositions(total, parts):
    if parts == 1:
        yield (total,)
        return
    for first in range(total + 1):
        for rest in _compositions(total - first, parts - 1):
            yield (first, *rest)


@pytest.mark.parametrize(
    ("servers", "options", "replicates", "law"),
    [
        (256, 1, 20_000, {3: 0.0043743, 4: 0.3840443, 5: 0.4747209, 6: 0.1169752, 7: 0.0174765}),
        (4_096, 2, 3_000, {2: 0.0, 3: 0.9744096}),
        (256, 3, 20_000, {2: 0.8776489}),
    ],
)
def test_highest_load_of_n_tasks_on_n_servers(servers, options, replicates, law):
    # Exact laws by dynamic programming (derived); options with replacement. P(highest <= 3) for d = 2.
    policy = "one-choice" if options == 1 else "least-loaded"
    fleet = lk.complete(servers, options=max(options, 2), distinct=False)
    highest = lk.place(fleet, policy, tasks=servers, replicates=replicates, rng=21, workers=2).measures[
        "max_load"
    ]
    for level, probability in law.items():
        hit = (highest <= level) if (servers, level) == (4_096, 3) else (highest == level)
        if probability:
            assert_within(hit, probability)
        else:
            assert hit.sum() == 0


def test_highest_of_two_servers_one_choice():
    # 200 tasks on 2 servers: E[highest] = 105.6348479009 (Sedgewick & Flajolet, Analysis of Algorithms, 2nd
    # ed., 9.4; value recomputed).
    highest = lk.place(lk.complete(2), "one-choice", tasks=200, replicates=40_000, rng=2, workers=2).measures
    assert_within(highest["max_load"], 105.6348479009)


@pytest.mark.parametrize(("servers", "constant"), [(2, 0.56418958), (10, 1.53875273), (100, 2.50759364)])
def test_one_choice_heavily_loaded(servers, constant):
    # gap / sqrt(m / n) tends to the mean of the largest of n standard normals (Tippett 1925), here of
    # exchangeable ones with correlation -1/(n-1): the mean is taken off. The order-m^(-1/2)
    # error is below the standard error.
    gap = lk.place(
        lk.complete(servers, distinct=False), "one-choice", tasks=10_000 * servers, replicates=2_000,
        rng=4, workers=2,
    ).measures["gap"]  # fmt: skip
    assert_within(gap / np.sqrt(10_000), constant)


@pytest.mark.parametrize(
    ("policy", "variance", "rounds"), [("least-loaded", 0.909715, 30), ("mixed(beta=0.5)", 3.376889, 80)]
)
def test_load_variance_with_two_options_on_all_servers(policy, variance, rounds):
    # n to infinity, stationary (derived from the fluid limit); n = 10^5, 16 replicates from empty. Twice the
    # rounds give the same value within the error: stationary.
    servers = 100_000
    table = lk.place(
        lk.complete(servers), policy, tasks=2 * rounds * servers, replicates=16, rng=31, workers=2,
        checkpoints=[rounds * servers, 2 * rounds * servers],
    ).measures.pivot(index="replicate", columns="tasks", values="load_variance")  # fmt: skip
    for moment in table:
        assert_within(table[moment], variance)


def test_tail_of_two_options_heavily_loaded():
    # Fraction with load >= mean + 1, 2, 3 (derived).
    seen = []
    for replicate in range(12):
        seed = np.random.SeedSequence(41, spawn_key=(replicate,))
        loads = lk.place(lk.complete(100_000), "least-loaded", tasks=3_000_000, rng=seed).loads[0]
        seen.append([(loads >= 30 + level).mean() for level in (1, 2, 3)])
    for column, expected in zip(np.array(seen).T, (0.3073757, 0.02466803, 7.2749e-5), strict=True):
        assert_within(column, expected)


@pytest.mark.parametrize(("batch", "variance"), [(1, 1.480150), (4, 4.441917)])
def test_batches_that_see_only_the_start(batch, variance):
    # Batches of n or 4n tasks that see the loads of the batch's start (model of Berenbrink et al. 2012;
    # variance at batch ends derived).
    servers = 50_000
    period = batch * servers
    table = lk.place(
        lk.complete(servers), "least-loaded", tasks=40 * period, replicates=16, rng=51, workers=2,
        checkpoints=[20 * period, 40 * period], information=lk.Snapshot(every=period),
    ).measures.pivot(index="replicate", columns="tasks", values="load_variance")  # fmt: skip
    for moment in table:
        assert_within(table[moment], variance)


@pytest.mark.parametrize(
    ("fleet", "gap", "error", "rounds"),
    [
        (lk.ring(10), 1.6423, 0.0007, 300),
        (lk.torus(16, 16), 3.2415, 0.0023, 400),
        (lk.hypercube(8), 2.3010, 0.0014, 100),
        (lk.complete(64), 1.6787, 0.0013, 100),
    ],
    ids=["ring of 10", "torus", "hypercube", "complete of 64"],
)
def test_mean_gap_of_another_simulation(fleet, gap, error, rounds):
    # Stationary mean gaps of a separate program, with their standard errors; ours: 100 replicates of `rounds`
    # burn-in rounds of n tasks and four times as many sampled every 1.01 rounds.
    size = len(fleet)
    stride = size + next(step for step in range(1, size) if np.gcd(size + step, size) == 1)
    moments = range(rounds * size, 5 * rounds * size, stride)
    table = lk.place(
        fleet, "least-loaded", tasks=moments[-1], replicates=100, rng=61, checkpoints=moments, workers=2
    ).measures
    means = table.groupby("replicate")["gap"].mean()
    halves = (
        table.assign(half=table["tasks"] > 3 * rounds * size).groupby(["half", "replicate"])["gap"].mean()
    )
    ours = means.std() / np.sqrt(100)
    assert abs(means.mean() - gap) < 4 * np.hypot(ours, error)
    assert_within(halves[True] - halves[False], 0.0)
