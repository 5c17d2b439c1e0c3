"""What holds of every run of `serve`, whatever its numbers: counts add up, bits repeat, units cancel."""

import itertools

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.policies.least_loaded import LeastLoaded

DISCIPLINES = ("fcfs", "ps", "sessions")
MODES = ("wait", "requeue", "lost")
FAILURES = lk.RandomFailures(up=12.0, down=3.0)


def fleet_of(order=None, scale=1.0):
    """Return seven servers of unequal capacity with unequal demands, listed in some order."""
    names = np.array(list("abcdefg"))
    servers = pd.DataFrame({"server": names, "capacity": scale * np.array([1.0, 2, 1, 3, 2, 1, 2])})
    pairs = [*itertools.pairwise("abcdefg"), ("g", "a"), ("a", "d")]
    choices = pd.DataFrame(pairs, columns=["option_1", "option_2"])
    choices["option_3"] = ["e", None, None, "b", None, None, None, "f"]
    choices["demand"] = [2.0, 1, 1, 2, 1, 1, 1, 2]
    return lk.Fleet(servers if order is None else servers.iloc[list(order)].reset_index(drop=True), choices)


FLEET = fleet_of()


def serve(fleet=FLEET, policy="least-loaded", **changed):
    arguments = {
        "load_factor": 0.6,
        "horizon": 60.0,
        "warmup": 20.0,
        "replicates": 3,
        "rng": 5,
        "intervals": 8,
    }
    return lk.serve(fleet, policy, **arguments | changed)


def assert_same_tables(one, other):
    for name in ("measures", "by_interval", "by_server", "tails"):
        pd.testing.assert_frame_equal(getattr(one, name), getattr(other, name), check_exact=True)


@pytest.mark.parametrize("discipline", DISCIPLINES)
@pytest.mark.parametrize("mode", MODES)
def test_every_task_is_somewhere(discipline, mode):
    """Arrivals = completed + blocked + lost + those still there, whatever goes wrong."""
    for limit, on_full, information in itertools.product(
        (None, 3), ("another", "lost"), (None, lk.Snapshot(0.9), lk.Dispatchers(2, 0.9))
    ):
        outcome = serve(
            discipline=discipline, warmup=0.0, limit=limit, on_full=on_full, failures=FAILURES,
            on_failure=mode, information=information, load_factor=0.5, target=2.0, levels=2,
        )  # fmt: skip
        sums = outcome.by_interval.groupby("replicate").sum(numeric_only=True)
        there = np.array([each.loads.sum() for each in outcome.results])
        assert (sums["arrivals"] == sums[["completed", "blocked", "lost"]].sum(axis=1) + there).all()
        assert sums["arrivals"].min() > 50
        measures = outcome.measures.set_index("replicate")
        assert measures["little_error"].abs().max() < 1e-9
        assert (sums["lost"] > 0).all() == (mode == "lost")
        assert (sums["requeued"] > 0).all() == (mode == "requeue")
        assert (sums["waited"] > 0).any() == (mode != "lost")
        assert (sums["blocked"] > 0).any() == (limit is not None)
        assert limit is None or measures["max_load"].max() == limit
        assert (sums["late"] == (measures["late_share"] * sums["completed"]).round()).all()


@pytest.mark.parametrize("discipline", DISCIPLINES)
def test_all_leave_when_no_more_come(discipline):
    # arrivals in the first of 20 parts only; all servers come back for good at 30
    schedule = pd.DataFrame(
        {"time": [2.0, 3, 30, 30], "server": list("abab"), "state": ["down"] * 2 + ["up"] * 2}
    )
    outcome = serve(
        discipline=discipline, profile=[1] + [0] * 19, period=200.0, load_factor=0.04, horizon=200.0,
        warmup=0.0, failures=lk.Failures(schedule),
    )  # fmt: skip
    sums = outcome.by_interval.groupby("replicate")[["arrivals", "completed", "sojourn_sum", "area"]].sum()
    assert sums["arrivals"].min() > 30
    assert (sums["arrivals"] == sums["completed"]).all()
    assert all((each.loads == 0).all() for each in outcome.results)
    # Little's law from the table alone, since nobody is there at either end
    assert sums["area"].to_numpy() == pytest.approx(sums["sojourn_sum"].to_numpy(), rel=1e-12)
    assert outcome.by_interval.query("start >= 25")["arrivals"].sum() == 0


def test_workers_and_first_replicate_change_no_bit():
    circumstances = {
        "failures": FAILURES,
        "on_failure": "requeue",
        "limit": 4,
        "information": lk.Snapshot(0.5),
    }
    whole = serve(replicates=5, **circumstances)
    assert_same_tables(whole, serve(replicates=5, workers=3, **circumstances))
    parts = [
        serve(first_replicate=first, replicates=count, **circumstances) for first, count in ((0, 2), (2, 3))
    ]
    for name in ("measures", "by_interval", "by_server", "tails"):
        joined = pd.concat([getattr(part, name) for part in parts], ignore_index=True)
        pd.testing.assert_frame_equal(joined, getattr(whole, name), check_exact=True)
    other = serve(replicates=5, rng=6, **circumstances).measures
    assert (other["sojourn_mean"] != whole.measures["sojourn_mean"]).all()


@pytest.mark.parametrize("discipline", DISCIPLINES)
def test_looking_more_often_changes_nothing(discipline):
    """Intervals cut the window and nothing else; sums may differ in the last digits."""
    for information in (None, lk.Snapshot(0.7)):
        given = {"discipline": discipline, "failures": FAILURES, "information": information}
        few, many = (serve(intervals=count, **given) for count in (1, 57))
        exact = [
            "arrivals",
            "completed",
            "sojourn_p50",
            "sojourn_p99",
            "waiting_p90",
            "sojourn_max",
            "max_load",
        ]
        pd.testing.assert_frame_equal(few.measures[exact], many.measures[exact], check_exact=True)
        for name in ("sojourn_mean", "waiting_mean", "queue_mean", "utilisation", "max_utilisation"):
            assert few.measures[name].to_numpy() == pytest.approx(many.measures[name].to_numpy(), rel=1e-12)
        ends = many.by_interval.query("replicate == 0")[["start", "end"]].to_numpy()
        assert ends[0, 0] == 20.0
        assert ends[-1, 1] == 60.0
        assert (ends[1:, 0] == ends[:-1, 1]).all()


def test_policies_meet_the_same_arrivals():
    rules = ("one-choice", "least-loaded")
    one, other = (serve(policy=rule, load_factor=0.3).by_interval for rule in rules)
    assert (one["arrivals"] == other["arrivals"]).all()
    assert (one["sojourn_sum"] != other["sojourn_sum"]).any()
    # sessions stay for their time: without limits no rule changes the total
    sums = [serve(policy=rule, load_factor=0.3, discipline="sessions").by_interval for rule in rules]
    pd.testing.assert_frame_equal(*(each[["arrivals", "completed"]] for each in sums))
    assert sums[0]["area"].to_numpy() == pytest.approx(sums[1]["area"].to_numpy(), rel=1e-12)


@pytest.mark.parametrize("discipline", DISCIPLINES)
def test_the_order_of_servers_does_not_matter(discipline):
    given = {"discipline": discipline, "limit": 5, "levels": 3, "information": lk.Snapshot(0.5)}
    ours = serve(**given).by_server
    theirs = serve(fleet_of([3, 0, 6, 2, 5, 1, 4]), **given).by_server
    theirs = theirs.sort_values(["replicate", "server"], ignore_index=True)
    pd.testing.assert_frame_equal(ours, theirs, check_exact=True)


@pytest.mark.parametrize("discipline", ["fcfs", "ps"])
def test_faster_servers_are_a_shorter_day(discipline):
    """Capacities times c serve as many tasks a unit of time as the same servers in c units."""
    for factor in (4.0, 3.7):
        slow = serve(discipline=discipline, information=lk.Snapshot(0.5)).measures
        fast = serve(
            fleet_of(scale=factor), discipline=discipline, horizon=60 / factor, warmup=20 / factor,
            information=lk.Snapshot(0.5 / factor),
        ).measures  # fmt: skip
        for name in ("sojourn_mean", "waiting_mean", "sojourn_max"):
            assert fast[name].to_numpy() * factor == pytest.approx(slow[name].to_numpy(), rel=1e-9)
        for name in ("queue_mean", "utilisation", "waiting_share"):
            assert fast[name].to_numpy() == pytest.approx(slow[name].to_numpy(), rel=1e-9)
        assert (fast["completed"] == slow["completed"]).all()


def test_longer_requirements_are_a_longer_day():
    short = serve().measures
    long = serve(service="exponential(mean=2.5)", horizon=150.0, warmup=50.0).measures
    assert long["sojourn_mean"].to_numpy() / 2.5 == pytest.approx(short["sojourn_mean"].to_numpy(), rel=1e-9)
    assert (long["completed"] == short["completed"]).all()


def test_fewer_are_late_of_a_later_target():
    targets = np.geomspace(0.05, 20, 9)
    shares = np.array([serve(target=target).measures["late_share"] for target in targets])
    assert (np.diff(shares, axis=0) <= 0).all()
    assert (shares[0] > 0.8).all()
    assert (shares[-1] < 0.05).all()
    measures = serve(horizon=600.0).measures
    for name, share in (("sojourn_p50", 0.5), ("sojourn_p90", 0.1), ("sojourn_p99", 0.01)):
        late = [
            serve(horizon=600.0, target=row[name], replicates=1, first_replicate=row["replicate"]).measures
            for row in measures.to_dict("records")
        ]
        # a quantile is known to half a bin, 0.1 %, in which a few tasks may lie
        assert [each["late_share"].item() for each in late] == pytest.approx([share] * 3, abs=0.003)
    assert (serve(target=1e-300).measures["late_share"] == 1).all()
    assert "late_share" not in measures


@pytest.mark.parametrize("discipline", DISCIPLINES)
def test_tables_agree_with_each_other(discipline):
    outcome = serve(discipline=discipline, levels=4, failures=FAILURES)
    measures = outcome.measures.set_index("replicate")
    tails = outcome.tails.pivot(index="replicate", columns="at_least", values="share").fillna(0.0)
    assert tails[0].to_numpy() == pytest.approx(np.ones(3), rel=1e-12)
    assert tails.drop(columns=0).sum(axis=1).to_numpy() == pytest.approx(measures["queue_mean"], rel=1e-12)
    assert (np.diff(tails, axis=1) <= 0).all()
    servers = outcome.by_server.groupby("replicate")
    for level in range(1, 5):
        assert servers[f"share_at_least_{level}"].mean().to_numpy() == pytest.approx(tails[level], rel=1e-12)
    assert servers["queue_mean"].mean().to_numpy() == pytest.approx(measures["queue_mean"], rel=1e-12)
    assert (servers["max_load"].max() == measures["max_load"]).all()
    highest = (outcome.by_server["max_load"] / np.tile(FLEET.capacity, 3)).groupby(
        outcome.by_server["replicate"]
    )
    assert (highest.max() == measures["max_utilisation"]).all()
    shares = outcome.by_server.assign(work=outcome.by_server["utilisation"] * np.tile(FLEET.capacity, 3))
    used = shares.groupby("replicate")["work"].sum() / FLEET.total_capacity
    assert used.to_numpy() == pytest.approx(measures["utilisation"], rel=1e-12)
    sums = outcome.by_interval.groupby("replicate").sum(numeric_only=True)
    assert (sums[["arrivals", "completed", "lost", "requeued", "waited"]] == measures[
        ["arrivals", "completed", "lost", "requeued", "waited"]
    ]).all(axis=None)  # fmt: skip
    assert (sums["sojourn_sum"] / sums["completed"]).to_numpy() == pytest.approx(measures["sojourn_mean"])
    assert (sums["delayed"] / sums["completed"]).to_numpy() == pytest.approx(measures["waiting_share"])


def test_profile_shares_out_the_arrivals():
    """Counts are Poisson: 5 standard deviations, false alarms 6e-7 a count."""
    profile, parts = [3.0, 0.0, 1.0, 4.0], 4
    outcome = serve(
        profile=profile, period=2.0, horizon=1002.0, warmup=2.0, intervals=2000, replicates=1, load_factor=0.5
    )
    counts = outcome.by_interval["arrivals"].to_numpy().reshape(500, parts).sum(axis=0)
    expected = 0.5 * FLEET.total_capacity * 1000 * np.array(profile) / sum(profile)
    assert counts[1] == 0
    assert (np.abs(counts - expected) <= 5 * np.sqrt(expected)).all()
    # relative rates: their unit cancels, and a flat profile is no profile up to rounding
    scaled = serve(profile=[30, 0, 10, 40], period=2.0, horizon=102.0)
    given = serve(profile=profile, period=2.0, horizon=102.0)
    pd.testing.assert_frame_equal(scaled.measures, given.measures)
    flat, plain = serve(profile=[2, 2, 2], period=9.0).measures, serve().measures
    assert flat["sojourn_mean"].to_numpy() == pytest.approx(plain["sojourn_mean"].to_numpy(), rel=1e-9)


def test_limit_by_capacity():
    given = {"discipline": "sessions", "load_factor": 3.0}
    capacity = [1, 2, 1, 3, 2, 1, 2]
    ours, theirs = serve(limit="capacity", **given), serve(limit=capacity, **given)
    assert_same_tables(ours, theirs)
    assert (ours.by_server.groupby("server")["max_load"].max() == capacity).all()
    assert ours.measures["blocked_share"].min() > 0.3
    pd.testing.assert_frame_equal(serve(limit=3, **given).tails, serve(limit=np.full(7, 3), **given).tails)
    # a limit that is never met is no limit
    assert_same_tables(serve(limit=10_000), serve())
    # more finds a place where tasks may go to another option
    given = {"policy": "one-choice", "discipline": "sessions", "load_factor": 1.0, "limit": "capacity"}
    another, lost = (serve(on_full=word, **given).measures["blocked_share"] for word in ("another", "lost"))
    assert (lost > 1.2 * another).all()
    # where the least loaded option is at its capacity, all options are
    another, lost = (
        serve(on_full=word, **given | {"policy": "least-loaded"}).tails for word in ("another", "lost")
    )
    pd.testing.assert_frame_equal(another, lost, check_exact=True)


def test_no_failures_are_no_failures():
    never = pd.DataFrame({"time": [1e9], "server": ["a"], "state": ["down"]})
    for mode in MODES:
        assert_same_tables(serve(failures=lk.Failures(never), on_failure=mode), serve())
    assert_same_tables(serve(failures="random(up=1e12, down=1)"), serve())


@pytest.mark.parametrize("discipline", DISCIPLINES)
@pytest.mark.parametrize("mode", MODES)
def test_following_all_departures_changes_no_path(discipline, mode):
    """With a calendar of all departures, as rules that look far need, and without."""
    far = LeastLoaded()
    far.looks_far = True
    for failures, limit in itertools.product((None, FAILURES), (None, 2)):
        given = {
            "discipline": discipline,
            "failures": failures,
            "limit": limit,
            "on_failure": mode,
            "levels": 2,
        }
        theirs, ours = (serve(policy=rule, load_factor=0.5, **given) for rule in (far, "least-loaded"))
        pd.testing.assert_frame_equal(theirs.by_server, ours.by_server, check_exact=True)
        counts = ["arrivals", "completed", "blocked", "lost", "requeued", "waited", "delayed", "max_load"]
        pd.testing.assert_frame_equal(theirs.by_interval[counts], ours.by_interval[counts])
        quantiles = [f"{time}_p{share}" for time in ("sojourn", "waiting") for share in (50, 90, 99)]
        pd.testing.assert_frame_equal(theirs.measures[quantiles], ours.measures[quantiles], check_exact=True)
        # sums over all servers are added up in another order
        pd.testing.assert_frame_equal(theirs.measures, ours.measures, rtol=1e-12, atol=1e-12)
