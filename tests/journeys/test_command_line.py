"""The command line as a user meets it: quick help, quiet ends, and no kernel left when it is interrupted."""

import json
import os
import shutil
import signal
import subprocess
import sys
import time

import pytest

from labkit.cli import main
from tests.journeys.ways import environment, finish, start
from tests.records.tiny import snapshot, write_tiny

LABKIT = (sys.executable, "-m", "labkit")


def test_help_imports_nothing_heavy():
    code = (
        "import sys, contextlib\nfrom labkit.cli import main\n"
        "with contextlib.suppress(SystemExit):\n    main(['--help'])\n"
        "print([name for name in ('numpy', 'pandas', 'numba', 'jupyter_client') if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], env=environment(), capture_output=True, text=True)
    assert done.stdout.endswith("\n[]\n"), done.stderr
    for command in ("run", "answer", "survey", "list", "show", "rerun", "freeze", "verify"):
        assert f"    {command} " in done.stdout


def test_a_reader_that_stops_reading_is_no_error(tmp_path):
    process = start(*LABKIT, "list", "--store", str(tmp_path), cwd=tmp_path)
    process.stdout.close()
    assert process.wait(30) == 0
    assert process.stderr.read() == ""
    process.stderr.close()


@pytest.mark.parametrize(("number", "status"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
def test_an_interrupted_study_leaves_no_kernel_and_no_file(tmp_path, number, status):
    write_tiny(tmp_path / "tiny.ipynb")
    study = tmp_path / "s.toml"
    study.write_text('notebook = "tiny.ipynb"\nreplicates = 1\nentropy = 1\nparameters.mode = "slow"\n')
    scratch = tmp_path / "scratch"
    scratch.mkdir()
    process = subprocess.Popen(
        [*LABKIT, "run", str(study), "--store", str(tmp_path / "runs")],
        env={**environment(), "TMPDIR": str(scratch)},
        stderr=subprocess.PIPE,
        text=True,
    )
    deadline = time.monotonic() + 60
    while (
        not any("draws" in path.read_text() for path in scratch.rglob("*.ipynb"))
        and time.monotonic() < deadline
    ):
        time.sleep(0.05)
    kernels = children(process.pid)
    assert kernels
    process.send_signal(number)
    _, err = process.communicate(timeout=30)
    assert process.returncode == status
    assert "Traceback" not in err
    assert not [pid for pid in kernels if os.path.exists(f"/proc/{pid}")]
    assert list(scratch.iterdir()) == []
    assert not (tmp_path / "runs").exists()


def children(pid: int) -> list[int]:
    found = []
    for task in os.listdir(f"/proc/{pid}/task"):
        with open(f"/proc/{pid}/task/{task}/children") as stream:
            found += [int(each) for each in stream.read().split()]
    return found


class TestOwnFleet:
    """Two tables in a folder are enough for an answer."""

    @pytest.fixture
    def fleet(self, tmp_path):
        folder = tmp_path / "my sites"
        folder.mkdir()
        (folder / "servers.csv").write_text(
            "server,capacity\n" + "".join(f"s{i},{4 + i % 3}\n" for i in range(8))
        )
        rows = "".join(f"s{i},s{(i + 1) % 8},{1 + i % 2}\n" for i in range(8))
        (folder / "choices.csv").write_text("option_1,option_2,demand\n" + rows)
        return folder

    def run(self, folder, *words):
        place = folder.parent
        return finish(
            start(*LABKIT, "answer", folder.name, "--store", "runs", "--output", "answers", *words, cwd=place)
        )

    def test_a_folder_gives_an_answer(self, fleet):
        status, out, err = self.run(fleet, "--risk", "0.1", "--replicates", "60", "--json")
        assert status == 0, err
        report = json.loads(out)
        assert report["study"] == "my-sites"
        assert len(report["recorded"]) == 1
        page = fleet.parent / "answers" / "my-sites" / "my-sites.html"
        assert report["answer"]["page"] == str(page)
        assert "least-loaded" in page.read_text()
        record = next((fleet.parent / "runs" / "my-sites").glob("*.parquet"))
        shown = finish(start(*LABKIT, "show", record.name[:8], "--store", "runs", "--json", cwd=fleet.parent))
        assert json.loads(shown[1])["parameters"]["tasks"] == 31
        assert "labkit: tasks is 31: 80 % of the total capacity of 39 work units (--tasks N for " in err

    @pytest.mark.parametrize(
        ("words", "sentence"),
        [
            (["--risk", "1.5"], "risk is 1.5; give a number above 0 and below 1"),
            (
                ["--risk", "0.01", "--replicates", "10"],
                "replicates is 10; a risk of 0.01 with 95 % limits needs",
            ),
            (["--replicates", "0"], "replicates is 0; give a whole number of at least 1"),
            (["--name", "a/b"], "study is 'a/b'; a study's name"),
            (
                ["--name", "demo"],
                "study is 'demo', as one of experiments/ is called; give another with --name",
            ),
            (
                ["--policies", "pairwise-averaging"],
                "which moves work already placed, as no placement rule can",
            ),
            (["--tasks", "0"], "tasks is 0; give a whole number of at least 1"),
            (["--tasks", "1" + "0" * 22], "tasks is 1e+22; give a whole number of at most"),
            (["--tasks", "1.5"], "--tasks is '1.5'; give a whole number."),
            (["--risk", "x"], "--risk is 'x'; give a number."),
            (["--risk"], "argument --risk: expected one argument; see labkit answer --help."),
            (["--risk", "1e-320"], "risk is 1e-320; give a number of at least 1e-15"),
            (["--risk", "1e-12"], "GB of memory and this machine has"),
            (["--report-every", "0", "-5"], "report_every is -5; give a whole number of at least 0"),
            (
                ["--policies", "leest-loaded"],
                "policies: policy is 'leest-loaded'; did you mean 'least-loaded'",
            ),
            (["--policies", "mixed"], "policies: policy is 'mixed'; it needs beta"),
            (
                ["--policies", "mixed(beta=0.5)", "mixed(beta=.50)"],
                "policies names 'mixed(beta=0.5)' twice; give each policy once",
            ),
            (["--jobs", "0"], "jobs is 0; give a whole number of at least 1"),
            (["--taks", "3"], "unrecognized arguments: --taks 3; see labkit --help."),
        ],
    )
    def test_a_refused_value_is_one_sentence(self, fleet, words, sentence, capsys):
        before = snapshot(fleet.parent)
        assert main(["answer", str(fleet), "--store", str(fleet.parent / "runs"), *words]) == 2
        err = capsys.readouterr().err
        assert sentence in err
        assert err.startswith("labkit: ")
        assert err.count("\n") == 1
        assert snapshot(fleet.parent) == before

    def test_two_folders_of_one_name_are_not_mixed(self, fleet, tmp_path, capsys):
        other = tmp_path / "elsewhere" / fleet.name
        shutil.copytree(fleet, other)
        places = ["--store", str(tmp_path / "runs"), "--output", str(tmp_path / "answers")]
        words = [*places, "--risk", "0.2", "--replicates", "20"]
        assert main(["answer", str(fleet), *words]) == 0
        before = snapshot(tmp_path)
        capsys.readouterr()
        assert main(["answer", str(other), *words]) == 2
        err = capsys.readouterr().err
        assert err == (
            f"labkit: study is 'my-sites', which has records of another fleet, {fleet.as_posix()}; "
            "give another with --name NAME.\n"
        )
        assert main(["list", "my-site", "--store", str(tmp_path / "runs")]) == 2
        assert "which has no records; did you mean 'my-sites'" in capsys.readouterr().err
        assert snapshot(tmp_path) == before

    def test_a_refused_table_is_one_sentence(self, fleet, capsys):
        (fleet / "choices.csv").write_text("option_1,option_2\ns0,elsewhere\n")
        assert main(["answer", str(fleet), "--store", str(fleet.parent / "runs")]) == 2
        err = capsys.readouterr().err
        assert "elsewhere" in err
        assert err.count("\n") == 1
        assert not (fleet.parent / "runs").exists()
