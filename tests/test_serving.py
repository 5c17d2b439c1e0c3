"""What `serve` refuses, each in one sentence, and before anything is computed."""

import re

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.engine import service

RING = lk.ring(6)
DEMO = "experiments/demo"


def bottleneck_fleet():
    """Return four servers, of which the first two must bear three quarters of the work."""
    return lk.Fleet(
        pd.DataFrame({"server": ["quay", "mill", "ford", "weir"]}),
        pd.DataFrame(
            {
                "option_1": ["quay", "mill", "ford"],
                "option_2": ["mill", "ford", "weir"],
                "demand": [6.0, 1.0, 1.0],
            }
        ),
    )


def serve(**changed):
    """Serve a small ring, with some arguments changed."""
    arguments = {"fleet": RING, "policy": "least-loaded", "load_factor": 0.5, "horizon": 50.0, "warmup": 5.0}
    arguments |= {"rng": 1, **changed}
    return lk.serve(arguments.pop("fleet"), arguments.pop("policy"), **arguments)


@pytest.fixture
def no_runs(monkeypatch):
    """Let no replicate start."""

    def refuse(*_):
        raise AssertionError("a replicate was started")

    monkeypatch.setattr(service, "Progress", refuse)


SCHEDULE = pd.DataFrame({"time": [1.0], "server": ["nowhere"], "state": ["down"]})


@pytest.mark.usefixtures("no_runs")
@pytest.mark.parametrize(
    ("changed", "sentence"),
    [
        ({"fleet": "ring"}, "fleet is str; give a labkit Fleet"),
        ({"policy": "least-loded"}, "policy is 'least-loded'; did you mean 'least-loaded'"),
        ({"policy": "pairwise-averaging"}, "policy pairwise-averaging moves work already placed"),
        ({"fleet": lk.complete(6), "policy": "smooth-feedback"}, "policy smooth-feedback"),
        ({"fleet": lk.complete(6), "policy": "tree-flow"}, "policy tree-flow"),
        ({"load_factor": 0}, "load_factor is 0; give a number above 0"),
        ({"load_factor": -0.5}, "load_factor is -0.5; give a number above 0"),
        ({"load_factor": np.nan}, "load_factor is nan; give a finite number"),
        ({"load_factor": "0.5"}, "load_factor is '0.5'; give a finite number"),
        ({"load_factor": True}, "load_factor is True; give a finite number"),
        (
            {"load_factor": 1.0},
            "load_factor is 1; the fleet's stability limit is 1, its whole capacity, set by all",
        ),
        ({"load_factor": 3, "discipline": "ps"}, "load_factor is 3; the fleet's stability limit is 1"),
        ({"horizon": 0}, "horizon is 0; give a number above 0"),
        ({"horizon": np.inf}, "horizon is inf; give a finite number"),
        ({"warmup": 50.0}, "warmup is 50 and horizon 50; give a warm-up of at least 0 and a later horizon"),
        ({"warmup": 70}, "warmup is 70 and horizon 50"),
        ({"warmup": -1}, "warmup is -1 and horizon 50"),
        ({"warmup": np.nan}, "warmup is nan; give a finite number"),
        ({"service": "exponentail"}, "service is 'exponentail'; did you mean 'exponential'"),
        ({"service": "lognormal"}, "it needs cv"),
        ({"service": 1.0}, "service is 1.0"),
        ({"service": "empirical"}, "a text holds no sample, so give lk.Empirical(sample)"),
        ({"discipline": "lifo"}, "discipline is 'lifo'; allowed: fcfs, ps, sessions"),
        ({"discipline": "session"}, "did you mean 'sessions'"),
        ({"discipline": None}, "discipline is None; allowed: fcfs, ps, sessions"),
        ({"replicates": 0}, "replicates is 0; give a whole number of at least 1"),
        ({"replicates": 2.5}, "replicates is 2.5; give a whole number"),
        ({"first_replicate": -1}, "first_replicate is -1; give a whole number of at least 0"),
        ({"rng": None}, "rng is None; give a whole number"),
        ({"information": "fresh"}, "information is 'fresh'; give lk.Fresh()"),
        ({"profile": [1, 2]}, "profile needs a period; give its length in units of time"),
        ({"period": 24.0}, "period is 24.0 but there is no profile; give both or neither"),
        ({"profile": [1, -2], "period": 24}, "profile is [1, -2]; give relative rates of at least 0"),
        ({"profile": [], "period": 24}, "profile is []; give relative rates"),
        ({"profile": "day", "period": 24}, "profile is 'day'; give relative rates"),
        ({"profile": [1, np.inf], "period": 24}, "give relative rates"),
        ({"profile": [1, np.nan], "period": 24}, "give relative rates"),
        ({"profile": [[1, 2]], "period": 24}, "give relative rates"),
        ({"profile": [0, 0], "period": 24}, "profile holds only zeros; give at least one rate above 0"),
        ({"profile": [1, 2], "period": 0}, "period is 0; give a number above 0"),
        ({"limit": 0}, "limit is 0 for server 0; give whole numbers from 1 to"),
        ({"limit": 2.5}, "limit is 2.5 for server 0; give whole numbers from 1 to"),
        ({"limit": [1, 2, 3]}, "limit is [1, 2, 3]; give a whole number, one for each of the 6 servers"),
        ({"limit": [3, 3, 0, 3, 3, 3]}, "limit is 0 for server 2"),
        ({"limit": "capacities"}, "limit is 'capacities'; did you mean 'capacity'"),
        ({"limit": np.nan}, "limit is nan for server 0"),
        ({"limit": True}, "limit is True; give a whole number, one for each"),
        (
            {"limit": 2**60},
            "limit is 1.15292e+18 for server 0; give whole numbers from 1 to 9007199254740992",
        ),
        (
            {
                "limit": "capacity",
                "fleet": lk.Fleet(
                    pd.DataFrame({"server": [7, 8], "capacity": [1.0, 0.5]}),
                    pd.DataFrame({"option_1": [7], "option_2": [8]}),
                ),
            },
            "limit is 0 for server 8; give whole numbers from 1 to 9007199254740992 (a capacity below",
        ),
        (
            {"failures": lk.RandomFailures(up=1, down=3), "on_failure": "requeue"},
            "the fleet's stability limit with servers up 25 % of the time is 0.25",
        ),
        ({"on_full": "queue"}, "on_full is 'queue'; allowed: another, lost"),
        ({"profile": [1.0, 2.0], "period": 1e-300}, "which makes more than 1e+08 parts"),
        ({"horizon": 1e13}, "tasks arrive; give a shorter one (at most 1e+12 tasks)"),
        ({"intervals": 10**12}, "intervals is 1000000000000; give at most 100,000"),
        ({"failures": 0.1}, "failures is 0.1; give lk.Failures(schedule), lk.RandomFailures(up=, down=)"),
        ({"failures": "random(up=9)"}, "it needs down"),
        ({"failures": lk.Failures(SCHEDULE)}, "nowhere"),
        ({"on_failure": "drop"}, "on_failure is 'drop'; allowed: wait, requeue, lost"),
        ({"target": 0}, "target is 0; give a number above 0"),
        ({"target": "late"}, "target is 'late'; give a finite number"),
        ({"levels": -1}, "levels is -1; give a whole number of at least 0"),
        ({"levels": 1.5}, "levels is 1.5; give a whole number"),
        ({"levels": 1024}, "levels is 1024; give at most 1023"),
        ({"load_factor": 1e-320}, "load_factor gives 5.99993e-320 tasks a unit of time"),
        ({"load_factor": 1e300, "limit": 3}, "load_factor gives 6e+300 tasks a unit of time"),
        ({"intervals": 0}, "intervals is 0; give a whole number of at least 1"),
        ({"workers": 0}, "workers is 0; give a whole number of at least 1"),
        (
            {"warmup": None, "profile": [1, 2], "period": 10.0, "horizon": 120.0},
            "warmup is not given, and the horizon holds 12 periods of the profile",
        ),
    ],
    ids=lambda value: value if isinstance(value, str) else "-".join(value),
)
def test_bad_arguments_get_one_sentence(changed, sentence):
    with pytest.raises(lk.InputError, match=re.escape(sentence)) as refusal:
        serve(**changed)
    told = str(refusal.value)
    assert "\n" not in told
    assert told.endswith(".")


@pytest.mark.usefixtures("no_runs")
def test_more_than_the_bottleneck_can_serve():
    fleet = bottleneck_fleet()
    # 6/8 of the work of 4 servers on 2 of them
    assert lk.stability_limit(fleet) == pytest.approx(2 / 3)
    with pytest.raises(
        lk.InputError,
        match=r"load_factor is 0\.7; the fleet's stability limit is 0\.666667, 1 ÷ the optimum utilisation, "
        r"set by 'quay', 'mill'; give less, add capacity there, or give a limit of places\.$",
    ):
        serve(fleet=fleet, load_factor=0.7)
    with pytest.raises(
        lk.InputError,
        match=r"load_factor is 0\.5; the fleet's stability limit with servers up 60 % of the time is 0\.4, ",
    ):
        serve(fleet=fleet, load_factor=0.5, failures=lk.RandomFailures(up=60, down=40))
    with pytest.raises(
        lk.InputError,
        match=r"load_factor is 0\.65; one-choice overloads server 'mill' from 0\.571429 on \(other r",
    ):
        serve(fleet=fleet, load_factor=0.65, policy="one-choice")


@pytest.mark.usefixtures("no_runs")
def test_more_than_the_demo_fleet_can_serve():
    fleet = lk.read_fleet(DEMO)
    limit = lk.stability_limit(fleet)
    assert 0 < limit < 1
    names = list(lk.survey(fleet).bottleneck)
    with pytest.raises(lk.InputError, match=f"stability limit is {limit:.6g}, .*, set by '") as refusal:
        serve(fleet=fleet, load_factor=limit)
    assert all(repr(name) in str(refusal.value) for name in names[:4])


def test_the_stand_in_stops_what_is_not_refused(no_runs):
    with pytest.raises(AssertionError, match="a replicate was started"):
        serve()


@pytest.mark.parametrize(
    "changed",
    [
        {"load_factor": 1.5, "limit": 3},
        {"load_factor": 1.5, "discipline": "sessions"},
        # work is lost, or goes elsewhere, and is not waited for
        {"load_factor": 0.9, "failures": "random(up=60, down=40)", "on_failure": "lost"},
    ],
)
def test_loads_that_need_no_limit(changed):
    assert serve(**changed).measures["completed"].item() > 50


def test_a_horizon_too_short_for_the_warm_up():
    # the number of tasks still grows when it ends
    with pytest.raises(
        lk.NotStationary, match="the number of tasks in the pilot run still changes"
    ) as refusal:
        serve(load_factor=0.99, horizon=30.0, warmup=None, replicates=8, fleet=lk.complete(2000))
    assert "the horizon is too short to tell where the start is forgotten" in str(refusal.value)


def test_the_warm_up_that_is_found():
    given = {"warmup": None, "horizon": 400.0, "replicates": 3, "fleet": lk.complete(200)}
    found = serve(**given)
    assert found.warmup_found_by == "MSER-5"
    assert 0 < found.warmup < 200
    assert (found.measures["warmup"] == found.warmup).all()
    told = serve(**given | {"warmup": found.warmup})
    assert told.warmup_found_by == "given"
    pd.testing.assert_frame_equal(told.measures, found.measures, check_exact=True)
    # in whole periods of a profile
    daily = serve(**given | {"profile": [1.0, 3.0], "period": 4.0})
    assert daily.warmup % 4.0 == 0


def test_where_nothing_happens():
    """No task arrives, or none leaves: counts are 0 and means are not there, but nothing fails."""
    row = serve(load_factor=1e-9, target=1.0).measures.iloc[0]
    assert (
        row[["arrivals", "completed", "queue_mean", "max_load", "lost", "little_error"]].tolist() == [0] * 6
    )
    assert row[["sojourn_mean", "sojourn_p99", "sojourn_max", "blocked_share", "late_share"]].isna().all()
    row = serve(fleet=lk.ring(60), service="deterministic(mean=1000)", horizon=900.0).measures.iloc[0]
    assert row["arrivals"] > 0
    assert row["completed"] == 0
    assert np.isnan(row["sojourn_mean"])
    assert abs(row["little_error"]) < 1e-9


def test_huge_relative_rates_are_as_good_as_others():
    given = {"profile": [1e308, 0.5e308], "period": 4.0, "horizon": 60.0}
    pd.testing.assert_frame_equal(
        serve(**given).measures, serve(**given | {"profile": [2.0, 1.0]}).measures, check_exact=True
    )
    with np.errstate(all="raise"):
        serve(profile=[5e-324, 0.0], period=1.0)


@pytest.mark.parametrize("mean", [1e18, 1e-14, 1e60])
def test_the_unit_of_time_does_not_matter(mean):
    given = {"warmup": 0.0, "replicates": 2}
    units = serve(horizon=200.0, **given).measures
    other = serve(horizon=200.0 * mean, service=f"exponential(mean={mean})", **given).measures
    for name in ("sojourn_mean", "sojourn_p50", "sojourn_p99", "waiting_p90"):
        assert other[name].to_numpy() / mean == pytest.approx(units[name].to_numpy(), rel=2e-3)


def test_reports_without_a_pause_are_as_good_as_fresh_loads():
    fresh = serve(horizon=100.0).by_server.drop(columns="information")
    for every in (1e-310, 1e-300, 1e-12):
        late = serve(horizon=100.0, information=lk.Snapshot(every=every)).by_server
        pd.testing.assert_frame_equal(late.drop(columns="information"), fresh)


def test_hardly_any_task_in_many_short_days():
    row = serve(load_factor=1e-9, profile=[1.0, 2.0], period=1.0, horizon=100.0).measures.iloc[0]
    assert row["arrivals"] == 0
