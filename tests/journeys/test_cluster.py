"""A study on a real scheduler with real workers: same bits, whoever is killed."""

import contextlib
import json
import os
import re
import shutil
import signal
import subprocess
import sys
import termios
import time
from threading import Thread

import numpy as np
import pytest

import labkit as lk
from labkit.errors import SchedulerLost
from labkit.records.project import ROOT
from labkit.records.schema import first_difference, measured_part
from labkit.records.store import Store
from labkit.sharing import cluster as sharing
from labkit.sharing import facts, scheduler
from labkit.studies.model import read_study
from tests.journeys.cluster import LocalCluster
from tests.records.tiny import write_notebook

REPLICATES = 30
PARAMETERS = """
tasks: int = 1000
policies: list = ["least-loaded"]
replicates: int = 8
entropy: int = 1
study: str = "by-hand"
store: str = ""
workers: int = 1
"""
PLACING = """
import pandas as pd
import labkit as lk
run = lk.begin_run({path!r}, globals())
placed = [
    lk.place(lk.ring(40), rule, tasks=tasks, replicates=replicates, rng=run.seed, workers=workers)
    for rule in policies
]
run.record(pd.concat([outcome.measures for outcome in placed]))
"""


@pytest.fixture(scope="module")
def local(tmp_path_factory):
    with LocalCluster(tmp_path_factory.mktemp("cluster")) as running:
        wait_for_workers(running, 2)
        yield running


@pytest.fixture
def study(tmp_path):
    notebook = tmp_path / "placing.ipynb"
    write_notebook(notebook, PLACING.format(path=str(notebook)), parameters=PARAMETERS)

    def write(tasks, replicates=REPLICATES):
        path = tmp_path / "s.toml"
        path.write_text(
            f'notebook = "placing.ipynb"\nreplicates = {replicates}\nentropy = 1\n[grid]\ntasks = {tasks}\n'
        )
        return str(path)

    return write


@pytest.fixture
def expected(tmp_path):
    """Return what the runs of a study measure here, without kernels."""

    def record(path):
        for point in read_study(path).points:
            given = {**point.parameters, "study": "s", "store": str(tmp_path / "here")}
            run = lk.begin_run(str(tmp_path / "placing.ipynb"), given)
            tasks, replicates = run.parameters["tasks"], run.parameters["replicates"]
            placed = lk.place(
                lk.ring(40), "least-loaded", tasks=tasks, replicates=replicates, rng=run.seed, workers=2
            )
            run.record(placed.measures)
        return measured(tmp_path / "here")

    return record


@pytest.fixture
def used(local):
    """The cluster, in use by this process."""
    lk.use_scheduler(local.address)
    yield local
    lk.use_scheduler(None)


class Command:
    """A command of labkit under way, whose error stream is a terminal: there the bar moves."""

    def __init__(self, *words):
        ours, theirs = os.openpty()
        termios.tcsetwinsize(ours, (24, 100))
        self.process = subprocess.Popen(
            [sys.executable, "-P", "-m", "labkit.cli", *words],
            env={**os.environ, "PYTHONPATH": str(ROOT)},
            stdout=subprocess.PIPE,
            stderr=theirs,
            text=True,
        )
        os.close(theirs)
        self.said = b""
        self.reader = Thread(target=self._read, args=[ours])
        self.reader.start()

    def _read(self, stream):
        with contextlib.suppress(OSError):  # the other end is closed
            while some := os.read(stream, 4096):
                self.said += some
        os.close(stream)

    def wait_for(self, replicates):
        """Wait until so many replicates have been computed."""
        end = time.monotonic() + 120
        while time.monotonic() < end and self.process.poll() is None:
            found = re.findall(rb"([\d,]+) replicates", self.said)
            if found and int(found[-1].replace(b",", b"")) >= replicates:
                return
            time.sleep(0.05)
        raise AssertionError(f"no progress: {self.process.poll()} {self.said!r}")

    def end(self):
        """Return the status, and what was said on both streams."""
        out, _ = self.process.communicate(timeout=300)
        self.reader.join()
        return self.process.returncode, out, self.said.decode().replace("\r\n", "\n")


def command(*words):
    return Command(*words).end()


def measured(folder):
    store = Store(folder)
    return {run: measured_part(store.read(path)) for run, path in store.runs("s").items()}


def same(one, other):
    assert one.keys() == other.keys()
    assert one
    assert [first_difference(one[run], other[run]) for run in one] == [""] * len(one)


class TestCalls:
    """Each kind of call gives the same bits on the workers and here."""

    def test_every_kind_of_call(self, local):
        @lk.policy
        def last_if_lower(options, loads, capacity, coin):
            return 1 if loads[options[1]] + 1 <= loads[options[0]] else 0

        fleet = lk.ring(12)

        def calls():
            rng = np.random.SeedSequence(3, spawn_key=(5,))
            yield lk.place(fleet, "least-loaded", tasks=500, replicates=40, rng=rng, first_replicate=7)
            yield lk.place(fleet, last_if_lower, tasks=50, replicates=3, rng=rng, start=np.arange(12))
            large = lk.ring(200_000)  # loads of more than a megabyte travel as memory that cannot be written
            yield lk.place(large, "least-loaded", tasks=50, rng=rng, start=np.arange(200_000))
            yield lk.place(
                fleet, "least-loaded", tasks=60, replicates=5, rng=rng, checkpoints=[7, 60],
                sizes=lambda generator, count: generator.random(count), information=lk.Snapshot(every=3),
            )  # fmt: skip
            given = np.random.default_rng(1).random((4, 30))
            yield lk.place(fleet, "least-loaded", tasks=30, replicates=4, rng=rng, sizes=given)
            yield lk.serve(fleet, "least-loaded", load_factor=0.6, horizon=200.0, replicates=3, rng=rng)

        here = list(calls())
        lk.use_scheduler(local.address)
        try:
            there = list(calls())
        finally:
            lk.use_scheduler(None)
        for ours, theirs in zip(here, there, strict=True):
            assert ours.measures.equals(theirs.measures)
            if isinstance(ours, lk.Outcome):
                assert ours.loads.dtype == theirs.loads.dtype
                assert np.array_equal(ours.loads, theirs.loads)

    def test_what_a_rule_refuses_is_told_here(self, used):
        @lk.policy
        def beyond(options, loads, capacity, coin):
            return 2

        with pytest.raises(lk.InputError, match="policy beyond picked a position outside the options"):
            lk.place(lk.ring(5), beyond, tasks=10, replicates=3, rng=1)

    def test_a_rule_is_what_it_was_at_its_first_use(self, used):
        lk.use_scheduler(None)
        before = lk.place(lk.ring(8), late, tasks=300, rng=5).loads
        monkey = pytest.MonkeyPatch()
        monkey.setitem(globals(), "LEAST", 6)
        try:
            lk.use_scheduler(used.address)
            assert np.array_equal(lk.place(lk.ring(8), late, tasks=300, rng=5).loads, before)
        finally:
            monkey.undo()
        assert late.source.endswith("# LEAST = 2\n")

    @pytest.mark.parametrize(
        ("error", "sentence"),
        [
            (
                OSError(28, "No space left on device"),
                "replicate 4 failed on a worker: OSError: .*No space left",
            ),
            (TimeoutError("mine"), "replicate 4 failed on a worker: TimeoutError: mine"),
            (SystemExit(3), "SystemExit: 3"),
            (lk.InputError("x is 1."), "x is 1."),
        ],
    )
    def test_what_fails_on_a_worker_is_no_lost_scheduler(self, local, error, sentence):
        with pytest.raises((RuntimeError, lk.InputError), match=sentence) as raised:
            sharing.connected(local.address).run(Failing(error), range(4, 5), None)
        assert not isinstance(raised.value, SchedulerLost)

    def test_a_worker_of_another_version_that_comes_late_ends_the_study(self, local, monkeypatch):
        monkeypatch.setattr(sharing, "facts", lambda: {**facts.facts(), "numpy": "0.1"})
        with pytest.raises(
            SchedulerLost, match=r"worker tcp://.* has numpy .*It came while work was under way"
        ):
            sharing.connected(local.address).run(Failing(None), range(4, 5), None)

    def test_a_package_beside_the_notebook_goes_along(self, local, tmp_path, monkeypatch):
        (tmp_path / "beside").mkdir()
        (tmp_path / "beside" / "__init__.py").write_text("def twice(number):\n    return 2 * number\n")
        monkeypatch.chdir(tmp_path)
        monkeypatch.syspath_prepend(tmp_path)
        from beside import twice

        found = sharing.connected(local.address).run(Calling(twice), range(3), None)
        assert found == [0, 2, 4]

    def test_certificates_are_asked_for(self):
        with pytest.raises(lk.InputError, match="no certificates are named"):
            sharing.connected("tls://127.0.0.1:9")

    def test_a_task_that_ends_every_worker_is_told_in_a_sentence(self, tmp_path):
        with LocalCluster(tmp_path, workers=0) as running:
            cluster = sharing.connected(running.address)
            for _ in range(5):
                running.add_worker()
            with pytest.raises(RuntimeError, match=r"replicate 4 ended 4 workers one after the other"):
                cluster.run(Deadly(), range(4, 5), None)
            sharing._clusters.clear()
            cluster.client.close()


class Failing:
    """A job that raises an error."""

    def __init__(self, error):
        self.error = error

    def compile(self):
        pass

    def run(self, replicate, given):
        raise self.error


class Calling(Failing):
    def run(self, replicate, given):
        return self.error(replicate)


LEAST = 2


@lk.policy
def late(options, loads, capacity, coin):
    return 1 if loads[options[1]] + LEAST <= loads[options[0]] else 0


class Deadly:
    """A job that takes more memory than there is, as the kernel of the system would see it."""

    def compile(self):
        pass

    def run(self, replicate, given):
        os.kill(os.getpid(), signal.SIGKILL)


class TestParts:
    """Replicates are cut into tasks of about a minute, and all of them are sent once."""

    @pytest.mark.parametrize(
        ("left", "seconds", "parts", "size"),
        [
            (range(100), float("inf"), 4, 1),
            (range(10_000), 0.5, 4, 120),  # a minute
            (range(100), 0.5, 4, 25),  # shared
            (range(100), 100.0, 4, 1),
            (range(100), 1e-6, 4, 100),  # too little work to share
            (range(3, 4), 0.01, 4, 1),
        ],
    )
    def test_sizes(self, left, seconds, parts, size):
        part, rest = sharing._cut(left, seconds, parts)
        assert (part, rest) == (left[:size], left[size:])


class TestRefusals:
    """What does not fit is refused in one sentence, before anything is computed."""

    @pytest.mark.parametrize("address", ["10.0.0.5:8786", "http://a:1", "tcp://a", "tcp://a b:1", 5])
    def test_addresses(self, address):
        with pytest.raises(lk.InputError, match=r"scheduler is .*; give its address, such as tcp://"):
            scheduler.check_address(address)

    def test_nobody_answers(self, study, tmp_path):
        words = ["run", study([10]), "--store", str(tmp_path / "runs")]
        status, out, err = command(*words, "--scheduler", "tcp://127.0.0.1:9")
        assert (status, out) == (2, "")
        assert err.startswith("labkit: scheduler tcp://127.0.0.1:9 does not answer (")
        assert err.count("\n") == 1
        assert not (tmp_path / "runs").exists()

    def test_a_worker_of_another_version_or_lock_is_refused_by_name(self, study, tmp_path):
        other = tmp_path / "other"
        shutil.copytree(ROOT / "labkit", other / "labkit", ignore=shutil.ignore_patterns("__pycache__"))
        (other / facts.LOCK).write_bytes((ROOT / facts.LOCK).read_bytes() + b"# another\n")
        words = ["run", study([10]), "--store", str(tmp_path / "runs"), "--scheduler"]
        with LocalCluster(tmp_path, workers=0) as running:
            worker = running.add_worker(PYTHONPATH=str(other))
            wait_for_workers(running, 1)
            status, out, err = command(*words, running.address)
            assert (status, out, err.count("\n")) == (2, "", 1)
            assert re.match(
                r"labkit: worker tcp://127\.0\.0\.1:\d+ has requirements\.lock [0-9a-f]+, and", err
            )
            worker.kill()
            wait_for_workers(running, 0)
            with (other / "labkit" / "randomness.py").open("a") as stream:
                stream.write("# another\n")
            running.add_worker(PYTHONPATH=str(other))
            wait_for_workers(running, 1)
            status, out, err = command(*words, running.address)
            assert (status, out, err.count("\n")) == (2, "", 1)
            assert re.match(
                r"labkit: worker tcp://127\.0\.0\.1:\d+ has labkit 0\.1\.0\+[0-9a-f]+, and this", err
            )
        assert not (tmp_path / "runs").exists()

    @pytest.mark.parametrize("name", ["numpy", "python", "labkit", "machine", "distributed"])
    def test_every_difference_is_named(self, name):
        ours = facts.facts()
        assert facts.mismatch(ours, dict(ours)) == ""
        assert facts.mismatch(ours, {**ours, name: "0"}).startswith(f"has {name} 0, and this process ")
        assert "missing" in facts.mismatch(ours, {key: ours[key] for key in ours if key != name})
        assert facts.mismatch(ours, {**ours, facts.LOCK: ""}) == ""  # installed, not a checkout


def wait_for_workers(running, count):
    import distributed

    with distributed.Client(running.address, set_as_default=False) as client:
        for _ in range(600):
            if len(client.nthreads()) == count:
                return
            time.sleep(0.1)
    raise AssertionError("the worker did not come")


class TestStudies:
    """A study goes on when a worker dies, and can be taken up again when the scheduler does."""

    LONG = 10_000_000  # tasks: some hundredths of a second a replicate

    def test_a_worker_is_killed(self, local, study, expected, tmp_path):
        path = study([self.LONG, self.LONG // 2])
        spare = local.add_worker()
        running = Command(
            "run", path, "--store", str(tmp_path / "runs"), "--scheduler", local.address, "--json"
        )
        running.wait_for(1)
        spare.kill()
        status, out, err = running.end()
        assert status == 0, err
        assert len(json.loads(out)["recorded"]) == 2
        same(expected(path), measured(tmp_path / "runs"))
        assert sorted(file.suffix for file in (tmp_path / "runs" / "s").iterdir()) == [".parquet"] * 2

    def test_the_scheduler_is_killed(self, study, expected, tmp_path):
        path = study([1000, self.LONG])
        words = ["run", path, "--store", str(tmp_path / "runs"), "--jobs", "1", "--scheduler"]
        with LocalCluster(tmp_path) as running:
            process = Command(*words, running.address)
            process.wait_for(REPLICATES + 1)
            running.scheduler.kill()
            status, out, err = process.end()
            assert (status, out) == (1, "")
            last = err.splitlines()[-1]
            assert last.startswith(f"labkit: scheduler {running.address} does not answer any more")
            assert "the same command" in last
            assert len(measured(tmp_path / "runs")) == 1
            assert not (tmp_path / "runs" / "s" / "failed").exists()
            running.start_scheduler()
            running.add_worker()
            status, out, err = command(*words, running.address, "--json")
        assert status == 0, err
        assert [len(json.loads(out)[key]) for key in ("recorded", "skipped", "failed")] == [1, 1, 0]
        same(expected(path), measured(tmp_path / "runs"))

    def test_an_interrupted_study_tells_how_to_go_on(self, local, study, tmp_path):
        path = study([1000, self.LONG])
        words = ["run", path, "--store", str(tmp_path / "runs"), "--jobs", "1", "--scheduler", local.address]
        running = Command(*words)
        running.wait_for(REPLICATES + 1)
        running.process.send_signal(signal.SIGINT)
        status, out, err = running.end()
        assert (status, out) == (130, "")
        assert err.splitlines()[-1] == (
            "labkit: interrupted; 1 of 2 runs are recorded; the same command goes on with the rest."
        )
        status, out, err = command(*words, "--json")
        assert status == 0, err
        assert [len(json.loads(out)[key]) for key in ("recorded", "skipped")] == [1, 1]
