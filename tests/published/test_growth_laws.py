"""How the gap grows with size: published laws for one option, two options, and rings.

Means are compared in standard errors (4: a correct program fails with probability 6e-5 a comparison, see
`assert_within`); seeds are fixed. Where a bound is wider than that, its distance is stated in the test.
"""

import numpy as np
import pandas as pd
import pytest
from scipy.stats import poisson

import labkit as lk
from tests.published.standard_error import assert_within


def tasks_of(servers):
    """Return n ln²n, and the leading term sqrt(2 m ln n / n) of the gap with so many tasks."""
    tasks = round(servers * np.log(servers) ** 2)
    return tasks, np.sqrt(2 * tasks * np.log(servers) / servers)


def gap_of_poisson_loads(servers, mean):
    """Return the mean of the largest of n independent Poisson loads, less their mean.

    The loads of one-choice are these, given their sum. As the gap is nearly linear in small changes of the
    number of tasks m, its mean over that sum differs from its value at m by a part of 1/m.
    """
    spread = np.sqrt(mean) + 1
    levels = np.arange(int(mean - 40 * spread), int(mean + 80 * spread * (1 + np.log(servers) / 100)))
    levels = levels[levels >= 0]
    with np.errstate(divide="ignore"):
        highest_is_above = -np.expm1(servers * np.log1p(-poisson.sf(levels, mean)))
    return levels[0] + highest_is_above.sum() - mean


class TestOneChoice:
    """With m = n ln²n tasks the gap is sqrt(2 m ln n / n) to leading order (Raab & Steger 1998).

    The leading order is all that the theorem says at this m, and it is slow: the exact law, computed from
    Poisson loads, is at 0.80 of it for 16 servers and 0.96 for 32,768.
    """

    @pytest.mark.parametrize(
        ("fleet", "replicates"),
        [
            (lk.complete(16, distinct=False), 4_000),
            (lk.ring(128), 2_000),
            (lk.complete(1_024), 600),
            (lk.complete(8_192), 150),
        ],
        ids=["complete of 16", "ring of 128", "complete of 1,024", "complete of 8,192"],
    )
    def test_simulation_has_the_exact_law(self, fleet, replicates):
        tasks, leading = tasks_of(len(fleet))
        gap = lk.place(fleet, "one-choice", tasks=tasks, replicates=replicates, rng=5, workers=2).measures[
            "gap"
        ]
        exact = gap_of_poisson_loads(len(fleet), tasks / len(fleet))
        assert_within(gap / leading, exact / leading, largest_error=0.01)

    def test_the_ratio_grows_towards_one(self):
        # Each step is at least 7 standard errors of its difference.
        ratios = []
        for servers, replicates in ((16, 4_000), (128, 2_000), (1_024, 600)):
            tasks, leading = tasks_of(servers)
            outcome = lk.place(
                lk.complete(servers), "one-choice", tasks=tasks, replicates=replicates, rng=6, workers=2
            )
            ratios.append(outcome.measures["gap"].mean() / leading)
        assert 0.75 < ratios[0] < ratios[1] < ratios[2] < 1

    def test_the_exact_law_tends_to_the_leading_term(self):
        # Computed, not simulated: ln n from 3 to 600. The ratio comes up to 1 near n = e^40, passes it by
        # less than a hundredth, and turns back.
        logs = [3, 5, 10, 20, 40, 80, 160, 320, 600]
        ratios = [gap_of_poisson_loads(np.exp(log), log**2) / np.sqrt(2 * log**3) for log in logs]
        distances = [abs(ratio - 1) for ratio in ratios]
        assert ratios[:5] == sorted(ratios[:5])
        assert max(distances[4:]) < 0.01
        assert distances[8] < distances[7] < distances[6]


class TestTwoOptionsOnAllServers:
    """The gap is ln ln n / ln 2 + O(1), whatever the number of tasks.

    Azar, Broder, Karlin & Upfal 1999 for n tasks; Berenbrink, Czumaj, Steger & Vöcking 2006 for any number.
    """

    def test_it_does_not_drift(self):
        servers = 256
        moments = [10 * servers, 100 * servers, 1_000 * servers]
        gaps = lk.place(
            lk.complete(servers), "least-loaded", tasks=moments[-1], replicates=400, rng=7, workers=2,
            checkpoints=moments,
        ).measures.pivot(index="replicate", columns="tasks", values="gap")  # fmt: skip
        for later in moments[1:]:
            assert_within(gaps[later] - gaps[moments[0]], 0.0, largest_error=0.02)

    def test_it_grows_as_the_logarithm_of_the_logarithm(self):
        # n from 2^6 to 2^18: ln ln n / ln 2 grows by 1.58; what is left lies in (-1, 0) and does not spread
        # over more than 0.75, with at least 4 standard errors to spare at each bound.
        left = []
        for power, replicates in ((6, 2_000), (8, 1_000), (10, 400), (12, 200), (14, 100), (16, 40), (18, 8)):
            servers = 2**power
            gap = lk.place(
                lk.complete(servers),
                "least-loaded",
                tasks=15 * servers,
                replicates=replicates,
                rng=8,
                workers=2,
            ).measures["gap"]
            assert gap.std() / np.sqrt(replicates) < 0.06
            left.append(gap.mean() - np.log(np.log(servers)) / np.log(2))
        assert -1 < min(left) < max(left) < 0
        assert max(left) - min(left) < 0.75


class TestRings:
    """On rings the gap of least-loaded and the spread of pairwise averaging grow as the square root of n.

    Peres, Talwar & Wieder 2015; Alistarh, Nadiradze & Sabour 2020. From empty, n² rounds of n tasks are some
    twelve times the relaxation time of the slowest wave, n² / 12.6 rounds in the linearised model; then as
    many rounds again twice over, seen at all phases of the period n.
    """

    SIZES = ((8, 1_500), (16, 1_500), (32, 800), (64, 300), (128, 120))

    @pytest.mark.parametrize("policy", ["least-loaded", "pairwise-averaging"])
    def test_the_exponent_is_one_half(self, policy):
        tables = []
        for servers, replicates in self.SIZES:
            moments = range(servers**3, 3 * servers**3, servers**3 // 12 // servers * servers + 1)
            table = lk.place(
                lk.ring(servers), policy, tasks=moments[-1], replicates=replicates, rng=9, workers=2,
                checkpoints=moments,
            ).measures  # fmt: skip
            later = table["tasks"] >= 2 * servers**3
            halves = [rows.groupby("replicate")["gap"].mean() for rows in (table[~later], table[later])]
            assert_within(halves[1] - halves[0], 0.0)
            means = table.groupby("replicate")["gap"].mean().reset_index()
            tables.append(means.assign(servers=servers))
        # On these sizes the exponent of c + a·n^b is near 0.525 for least-loaded and 0.505 for averaging,
        # with a standard error of 0.006: the bound is four of them further, or more.
        forms = lk.fit_growth(pd.concat(tables), rng=10, laws=["power"], resamples=500).table()
        offset = forms[forms["parameters"] == 3].iloc[0]
        assert offset["weight"] > 0.99
        assert offset["exponent_upper"] - offset["exponent_lower"] < 4 * 0.01
        assert abs(offset["exponent"] - 0.5) < 0.05


@pytest.mark.parametrize(
    ("family", "servers", "gap", "error"),
    [("ring", 400, 17.3, 0.2), ("torus", 256, 3.2415, 0.0023), ("complete", 64, 1.6787, 0.0013)],
)
def test_the_frozen_growth_table_agrees_with_another_simulation(family, servers, gap, error):
    """Stationary gaps of a simulation made elsewhere, with its standard errors; four joint standard errors.

    That one averages over all phases of the loads' period, the table is taken at whole mean loads, which
    differ by less than one task in `servers`.
    """
    table = lk.read_frozen("growth").table
    row = table[(table["family"] == family) & (table["servers"] == servers)].set_index("policy")
    found, own = row.loc["least-loaded", ["excess", "excess_error"]]
    assert abs(found - gap) < 4 * np.hypot(own, error) + 1 / servers
    assert own < 0.025 * found
