"""`labkit plan`: a plan is written, checks itself without labkit, and is held against its fleet."""

import json
import re
import shutil
import subprocess
import sys

import pytest

from labkit.cli import main
from labkit.records.project import ROOT
from tests.records.tiny import snapshot

DEMO = ROOT / "experiments" / "demo"


@pytest.mark.parametrize("policy", ["smooth-feedback", "tree-flow", "static-split"])
def test_a_plan_checks_itself_with_plain_python(tmp_path, capsys, policy):
    folder = tmp_path / "plan"
    assert main(["plan", str(DEMO), "--policy", policy, "--output", str(folder), "--decisions", "200"]) == 0
    assert re.search(
        rf"plan of {policy}: 100 servers, \d+ choices, 200 test decisions", capsys.readouterr().out
    )
    alone = tmp_path / "elsewhere"
    shutil.copytree(folder, alone)
    done = subprocess.run(
        [sys.executable, "-I", str(alone / "dispatcher.py"), str(alone)],
        capture_output=True,
        text=True,
        check=False,
        cwd=tmp_path,
    )
    assert done.returncode == 0, done.stderr
    assert "all 200 decisions are made as the plan says" in done.stdout
    assert main(["plan", str(DEMO), "--check", str(alone)]) == 0
    assert "whole, and made for this fleet" in capsys.readouterr().out


def test_json_says_where_and_what(tmp_path, capsys):
    given = ["plan", str(DEMO), "--policy", "least-loaded", "--output", str(tmp_path / "plan"), "--json"]
    assert main(given) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["plan"] == str(tmp_path / "plan")
    assert told["header"]["policy"]["name"] == "least-loaded"
    assert main(["plan", str(DEMO), "--check", told["plan"], "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["header"] == told["header"]


@pytest.mark.parametrize(
    ("words", "refusal"),
    [
        (["--policy", "fastest"], "policy is 'fastest'"),
        (["--policy", "pairwise-averaging"], "moves work already placed"),
        (["--decisions", "0"], "decisions is 0; give a whole number of at least 1"),
        (["--decisions", "many"], "--decisions is 'many'; give a whole number"),
        (["--check", "nowhere"], "nowhere"),
        (["--check", "nowhere", "--policy", "least-loaded"], "leave out --policy"),
    ],
)
def test_wrong_words_are_refused_and_nothing_is_written(tmp_path, capsys, monkeypatch, words, refusal):
    monkeypatch.chdir(tmp_path)
    before = snapshot(tmp_path)
    output = [] if "--check" in words else ["--output", str(tmp_path / "plan")]
    assert main(["plan", str(DEMO), *words, *output]) == 2
    said = capsys.readouterr().err
    assert said.count("\n") == 1
    assert refusal in said
    assert snapshot(tmp_path) == before


def test_plans_that_do_not_fit_are_refused(tmp_path, capsys):
    fleet, plan = tmp_path / "fleet", tmp_path / "plan"
    fleet.mkdir()
    (fleet / "servers.csv").write_text("server\na\nb\nc\n")
    (fleet / "choices.csv").write_text("option_1,option_2\na,b\nb,c\n")
    written = ["plan", str(fleet), "--policy", "least-loaded", "--output", str(plan)]
    assert main(written) == 0
    capsys.readouterr()

    def told(folder):
        assert main(["plan", str(folder), "--check", str(plan)]) == 2
        return capsys.readouterr().err

    assert "another fleet" in told(DEMO)
    header = json.loads((plan / "plan.json").read_text())
    (plan / "plan.json").write_text(json.dumps({**header, "schema_version": 99}))
    assert "schema version 99" in told(fleet)
    (plan / "plan.json").write_text(json.dumps(header))
    choices = (plan / "choices.csv").read_bytes()
    (plan / "choices.csv").write_bytes(choices.replace(b"1", b"2", 1))
    assert "torn or altered" in told(fleet)
    # The folder is not written over.
    before = snapshot(plan)
    assert main(written) == 2
    assert snapshot(plan) == before
