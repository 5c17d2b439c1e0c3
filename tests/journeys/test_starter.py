"""The recipe for a CI service: within its limit at first, above it after a change of the network."""

import os
import subprocess

from labkit.records.project import ROOT
from labkit.studies.starting import write_starter


def recipe(study, **variables):
    variables = {"LABKIT": str(ROOT), "LABKIT_SOURCE": "", **variables}
    return subprocess.run(
        ["sh", study.with_name("check-headroom.sh"), "--jobs", "1"],
        cwd="/",
        env={**os.environ, **variables},
        capture_output=True,
        text=True,
        timeout=300,
    )


def test_the_recipe_fails_above_the_limit_after_a_change_of_the_network(tmp_path):
    study, *_ = write_starter(tmp_path / "lockers")
    text = study.read_text().replace("report_every = [0, 20]", "report_every = [0]")
    study.write_text(text.replace(', "static-split"', ""))
    done = recipe(study)
    assert done.returncode == 0, done.stderr
    assert "Use least-loaded" in done.stdout
    choices = study.parent / "fleet" / "choices.csv"
    rows = choices.read_text().splitlines()
    # most of the work now has only these two servers
    choices.write_text("\n".join([rows[0], *rows[1:3], "Dellmorrin,Eskerwold,370"]))
    done = recipe(study)
    assert done.returncode == 1, done.stderr
    assert "max_headroom" in done.stderr
    assert sorted(os.listdir(study.parent / "records" / "lockers"))


def test_the_recipe_names_the_variable_that_is_missing_or_wrong(tmp_path):
    study, *_ = write_starter(tmp_path / "lockers")
    done = recipe(study, LABKIT=str(tmp_path))
    assert (done.returncode, done.stderr.count("\n")) == (2, 1)
    assert "no checkout of labkit; name one in LABKIT" in done.stderr
    done = recipe(study, LABKIT="", LABKIT_SOURCE=str(tmp_path / "nowhere"))
    assert done.returncode == 2
    assert "git could not clone it" in done.stderr
    for _ in range(2):  # a clone at another commit must not be taken the next time
        done = recipe(study, LABKIT="", LABKIT_SOURCE=str(ROOT), LABKIT_COMMIT="nowhere")
        assert done.returncode == 2
        assert "LABKIT_COMMIT is 'nowhere'; the clone has no such commit" in done.stderr
