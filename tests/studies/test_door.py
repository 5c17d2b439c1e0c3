"""What the headroom notebooks would refuse is refused before any kernel; nothing is written."""

import pytest

import labkit as lk
from labkit import memory
from labkit.cli import main
from labkit.records.project import EXPERIMENTS
from labkit.studies import door
from labkit.studies.model import make_study
from labkit.studies.own_fleet import default_tasks
from tests.records.tiny import snapshot


@pytest.fixture
def ask(tmp_path, monkeypatch, capsys):
    """Run a headroom study in which no kernel may start; return status and the error stream."""

    def no_kernel(*arguments):
        raise AssertionError("a kernel was started")

    monkeypatch.setattr("labkit.studies.kernels.start_kernel", no_kernel)

    def run(parameters="", grid="", answer="", replicates=400):
        fleet = (EXPERIMENTS / "demo").as_posix()
        path = tmp_path / "asked.toml"
        path.write_text(
            f'notebook = "headroom"\nreplicates = {replicates}\nentropy = 1\n'
            f'[parameters]\nfleet = "{fleet}"\n{parameters}\n[grid]\n{grid}\n'
            f'[answer]\nnotebook = "headroom_answer"\n{answer}'
        )
        before = snapshot(tmp_path)
        places = ["--store", str(tmp_path / "runs"), "--output", str(tmp_path / "answers")]
        status = main(["run", str(path), *places])
        assert snapshot(tmp_path) == before
        out, err = capsys.readouterr()
        assert out == ""
        return status, err

    return run


def test_the_most_replicates_must_fit_into_memory_too(ask):
    status, err = ask(replicates="400\nprecision = 0.05\nmost_replicates = 1000000000000")
    assert status == 2
    assert "most_replicates is 1,000,000,000,000; with 100 servers, 12 checkpoints and 2 pol" in err


@pytest.mark.parametrize(
    ("asked", "sentence"),
    [
        ({"parameters": "tasks = 0"}, "tasks is 0; give a whole number of at least 1"),
        ({"grid": "tasks = [5, 0]"}, "tasks is 0; give a whole number of at least 1"),
        ({"grid": "checkpoints = [5, -1]"}, "checkpoints is -1; give"),
        ({"grid": "report_every = [0, -1]"}, "report_every is -1; give a whole number of at least 0"),
        ({"parameters": 'policies = ["one-choice", "best"]'}, "policies: policy is 'best'; allowed"),
        ({"grid": 'policies = [["one-choice"], ["mixed"]]'}, "policies: policy is 'mixed'; it needs beta"),
        (
            {"parameters": 'policies = ["one-choice", "one-choice()"]'},
            "policies names 'one-choice' twice; give each policy once",
        ),
        ({"answer": 'baseline = "on-choice"'}, "answer: baseline is 'on-choice', which is not run; did you"),
        (
            {"parameters": 'policies = ["least-loaded"]'},
            "answer: baseline is 'one-choice' by default, which is not run; allowed: least-loaded",
        ),
        ({"answer": 'policy = "mixed(beta=0.5)"'}, "answer: policy is 'mixed(beta=0.5)', which is not run"),
        (
            {
                "parameters": 'policies = ["one-choice", "mixed(beta=.5)"]',
                "answer": 'policy = "mixed(beta=.5)"',
            },
            "which is not run; did you mean 'mixed(beta=0.5)'",
        ),
        ({"answer": "max_headroom = -0.5"}, "max_headroom is -0.5; give a number of at least 0"),
        (
            {"replicates": 10**12},
            "replicates is 1,000,000,000,000; with 100 servers, 12 checkpoints and 2 pol",
        ),
    ],
)
def test_a_value_is_refused_in_one_sentence(ask, asked, sentence):
    status, err = ask(**asked)
    assert status == 2
    assert sentence in err
    assert err.count("\n") == 1


def test_more_than_the_memory_is_refused_and_less_is_not(monkeypatch):
    monkeypatch.setattr(memory, "memory", lambda: 8 * 2 * 10 * (100 + 120))
    door._check_memory("replicates", 10, 100, 12, 2)
    with pytest.raises(lk.InputError, match=r"replicates is 11; .* would take about .* GB of memory"):
        door._check_memory("replicates", 11, 100, 12, 2)
    monkeypatch.setattr(memory, "memory", lambda: None)
    door._check_memory("replicates", 11, 100, 12, 2)


def test_the_memory_of_this_machine_is_known():
    assert memory.memory() > 2**20


def fleet(*capacities):
    plain = lk.ring(len(capacities))
    return lk.Fleet(plain.servers.assign(capacity=list(capacities)), plain.choices)


def test_tasks_fill_the_fleet_unless_capacities_are_no_amounts_of_work():
    assert default_tasks(fleet(120.0, 80.0, 100.0)) == (240, "80 % of the total capacity of 300 work units")
    tasks, why = default_tasks(fleet(1.0, 1.0, 1.0))
    assert (tasks, "no capacities" in why) == (300, True)
    tasks, why = default_tasks(fleet(0.5, 0.25, 0.25))
    assert (tasks, "no amount of work" in why) == (300, True)
    with pytest.raises(lk.InputError, match=r"total capacity of 3e\+12 tasks, too many .* or give --tasks N"):
        default_tasks(fleet(1e12, 1e12, 1e12))


@pytest.mark.parametrize(
    ("grid", "answer", "sentence"),
    [
        ('family = ["ring", "rings"]', "", "family is 'rings'; did you mean 'ring'"),
        (
            'family = ["ladder"]\nservers = [16, 25]',
            "",
            "servers is 25; a ladder has an even number: give 26",
        ),
        ("servers = [1]", "", "servers is 1; give a whole number of at least 2"),
        ('policies = [["least-loded"]]', "", "policies: policy is 'least-loded'; did you mean"),
        ('policies = [["pairwise-averaging"]]', "", "policies names 'pairwise-averaging' twice"),
        ("horizon = [0]", "", "horizon is 0; give"),
        ("servers = [100000000]", "", "with 100,000,000 servers, 1 checkpoints"),
        ("servers = [16]", "ahead = 0", "ahead is 0.0; give a number from 1 to 16"),
        ("servers = [16]", "confidence = 1.5", "confidence is 1.5; give"),
        (
            "servers = [16]",
            'notebook = "headroom_answer"',
            "reads runs of the notebook headroom, not of long_run",
        ),
    ],
)
def test_what_the_growth_notebooks_would_refuse(tmp_path, monkeypatch, capsys, grid, answer, sentence):
    monkeypatch.setattr("labkit.studies.kernels.start_kernel", None)
    path = tmp_path / "asked.toml"
    named = "" if "notebook" in answer else 'notebook = "growth"\n'
    path.write_text(
        f'notebook = "long_run"\nreplicates = 10\nentropy = 1\n[grid]\n{grid}\n[answer]\n{named}{answer}\n'
    )
    before = snapshot(tmp_path)
    assert main(["run", str(path), "--store", str(tmp_path / "runs"), "--output", str(tmp_path)]) == 2
    assert snapshot(tmp_path) == before
    out, err = capsys.readouterr()
    assert out == ""
    assert sentence in err
    assert err.count("\n") == 1


def test_the_growth_answer_reads_no_other_notebooks_runs():
    content = {
        "notebook": "headroom",
        "replicates": 400,
        "entropy": 1,
        "parameters": {"fleet": "demo"},
        "answer": {"notebook": "growth"},
    }
    with pytest.raises(
        lk.InputError, match="growth reads runs of the notebook long_run, not of headroom; name"
    ):
        make_study("s", content, folder=EXPERIMENTS)
