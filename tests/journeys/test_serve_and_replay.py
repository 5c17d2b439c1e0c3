"""The serve and replay notebooks: recorded like any run, repeatable, and refusing what cannot be meant."""

import re

import pandas as pd
import pytest

import labkit as lk
from labkit.cli import main
from labkit.records.project import NOTEBOOKS
from labkit.studies.execution import execute
from labkit.traces.invented import invented_trace

SERVING = {
    "policies": ["one-choice", "least-loaded"],
    "load_factors": [0.5, 0.7],
    "service": "exponential",
    "horizon": 60.0,
    "warmup": 10.0,
    "report_ages": [4.0],
    "target": 8.0,
    "risk": 0.05,
    "failures": "",
    "replicates": 2,
}


@pytest.fixture(scope="module")
def place(tmp_path_factory):
    """A folder with the tables of a ring of 12 and a log of its work."""
    folder = tmp_path_factory.mktemp("own")
    fleet = lk.ring(12)
    fleet.servers.assign(server=[f"s{k}" for k in range(12)], capacity=30.0).to_csv(
        folder / "servers.csv", index=False
    )
    names = {k: f"s{k}" for k in range(12)}
    choices = fleet.choices[["option_1", "option_2"]].replace(names)
    choices.to_csv(folder / "choices.csv", index=False)
    log = folder / "log"
    log.mkdir()
    trace = invented_trace(lk.read_fleet(folder), days=14, tasks_per_day=60, rng=1)
    trace.to_csv(log / "trace.csv", index=False)
    return folder


def replaying(place):
    return {
        "fleet": str(place),
        "trace_path": str(place / "log" / "trace.csv"),
        "policies": ["one-choice", "least-loaded"],
        "replicates": 2,
    }


def study_file(folder, notebook, values, grid=""):
    """Write a study of these values and return its path."""
    top = {name: value for name, value in values.items() if name in ("replicates",)}
    lines = [f'notebook = "{notebook}"', "entropy = 3"]
    lines += [f"{name} = {value}" for name, value in top.items()] + ["[parameters]"]
    lines += [f"{name} = {value!r}".replace("'", '"') for name, value in values.items() if name not in top]
    path = folder / f"{notebook}-study.toml"
    path.write_text("\n".join([*lines, grid]))
    return path


def test_a_study_of_serving_is_recorded_and_repeats_to_the_bit(place, tmp_path, capsys):
    store = tmp_path / "runs"
    values = SERVING | {"fleet": str(place), "failures": "random(up=40, down=2)"}
    path = study_file(tmp_path, "serve", values)
    assert main(["run", str(path), "--store", str(store)]) == 0
    assert "1 recorded now" in capsys.readouterr().out
    records = lk.read_study_records("serve-study", store=store)
    kinds = records.groupby(["network", "failures", "policy"])["information"].unique().map(list).to_dict()
    none, broken = "none", "random(up=40, down=2), wait"
    assert kinds == {
        ("your fleet", none, "one-choice"): ["fresh"],
        ("your fleet", none, "least-loaded"): ["fresh", "snapshot(every=4.0)"],
        ("your fleet", broken, "one-choice"): ["fresh"],
        ("your fleet", broken, "least-loaded"): ["fresh"],
        ("a ring", none, "one-choice"): ["fresh"],
        ("a ring", none, "least-loaded"): ["snapshot(every=4.0)"],
        ("a complete network", none, "one-choice"): ["fresh"],
        ("a complete network", none, "least-loaded"): ["snapshot(every=4.0)"],
    }
    here = records[(records["network"] == "your fleet") & (records["failures"] == none)]
    assert set(here["load_factor"]) == {0.5, 0.7}
    assert records["little_error"].abs().max() < 1e-9
    found = lk.service_limits(here[here["information"] == "fresh"], of="sojourn_mean")
    assert len(found) == 4
    [run] = set(records["run_id"])
    assert main(["list", "--store", str(store)]) == 0
    assert run in capsys.readouterr().out
    assert main(["show", run, "--store", str(store)]) == 0
    assert "sojourn_mean" in capsys.readouterr().out
    assert main(["rerun", run, "--store", str(store)]) == 0
    assert "identical to the bit" in capsys.readouterr().out


def test_a_log_is_replayed_beside_what_happened_on_a_fleet_made_of_it(place, tmp_path):
    store = tmp_path / "runs"
    given = replaying(place) | {"fleet": str(place / "log" / "trace.csv"), "capacity": 30.0}
    given |= {"study": "replayed", "store": str(store)}
    done = execute(NOTEBOOKS / "replay.ipynb", given, tmp_path / "out.ipynb")
    assert done.error == ""
    records = lk.read_study_records("replayed", store=store)
    assert records.groupby("policy").size().to_dict() == {"as-placed": 1, "one-choice": 2, "least-loaded": 2}
    assert records["arrivals"].nunique() == 1
    text = (tmp_path / "out.ipynb").read_text(encoding="utf-8")
    assert text.count('"image/png": "') == 3
    assert "less that of as-placed" in text
    assert "capacity 30 each" in text


@pytest.mark.parametrize(
    ("notebook", "values", "refusal"),
    [
        ("serve", {"load_factors": [0.5, 1.0]}, r"load_factor is 1; the fleet's stability limit is 1"),
        ("serve", {"policies": ["fastest"]}, "policy is 'fastest'"),
        ("serve", {"service": "normal"}, "service is 'normal'"),
        ("serve", {"discipline": "lifo"}, "discipline is 'lifo'"),
        ("serve", {"warmup": 60.0}, "warmup is 60 and horizon 60"),
        ("serve", {"failures": "often"}, "failures is 'often'"),
        ("serve", {"report_ages": [0.0]}, "report_ages is 0"),
        ("serve", {"load_factors": [0.5, 0.5]}, "load_factors holds 0.5 more than once"),
        ("serve", {"discipline": "sessions"}, r"there are 2 replicates; limits at a risk of 0.05 need 7\d"),
        ("replay", {"policies": ["fastest"]}, "policy is 'fastest'"),
        ("replay", {"trace_path": "no-such-log.csv"}, "trace_path is '.*no-such-log.csv'"),
        ("replay", {"warmup": 5000.0}, "block is 24, of which .* holds 0 after the warm-up"),
        ("replay", {"risk": 0.01}, "there are 1[12] whole blocks.*need 368"),
        ("replay", {"block": 100.0}, "block is 100, of which .* holds 2"),
    ],
)  # fmt: skip
def test_what_cannot_be_meant_is_refused_before_anything_runs(
    place, tmp_path, capsys, notebook, values, refusal
):
    base = SERVING | {"fleet": str(place)} if notebook == "serve" else replaying(place)
    path = study_file(tmp_path, notebook, base | values)
    assert main(["run", str(path), "--store", str(tmp_path / "runs")]) == 2
    said = capsys.readouterr().err
    assert re.search(refusal, said)
    assert len(said.strip().splitlines()) == 1
    assert not list((tmp_path / "runs").rglob("*.parquet"))


def test_a_log_of_work_that_stays_is_sent_elsewhere(place, tmp_path, capsys):
    log = pd.read_csv(place / "log" / "trace.csv").drop(columns="duration")
    log.to_csv(tmp_path / "stays.csv", index=False)
    path = study_file(tmp_path, "replay", replaying(place) | {"trace_path": str(tmp_path / "stays.csv")})
    assert main(["run", str(path), "--store", str(tmp_path / "runs")]) == 2
    assert "no column 'duration', so that its work stays" in capsys.readouterr().err


def test_a_log_with_dates_is_in_seconds(place, tmp_path, capsys):
    log = pd.read_csv(place / "log" / "trace.csv")
    log["time"] = pd.Timestamp("2031-03-01") + pd.to_timedelta(log["time"], unit="h")
    log.to_csv(tmp_path / "dated.csv", index=False)
    path = study_file(tmp_path, "replay", replaying(place) | {"trace_path": str(tmp_path / "dated.csv")})
    assert main(["run", str(path), "--store", str(tmp_path / "runs")]) == 2
    assert "are dates, which become seconds" in capsys.readouterr().err


def test_the_notebook_itself_refuses_too(place, tmp_path):
    given = SERVING | {"fleet": str(place), "load_factors": [1.2], "store": str(tmp_path / "runs")}
    done = execute(NOTEBOOKS / "serve.ipynb", given, tmp_path / "out.ipynb")
    assert done.refused
    assert re.search("stability limit is 1", done.error)
    assert not list((tmp_path / "runs").rglob("*.parquet"))
