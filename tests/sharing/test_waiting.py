"""What is seen while work takes its time: in a terminal, a pipe, a notebook with a reader and one without."""

import io
import os
import re
import subprocess
import sys
import time
from pathlib import Path

import nbformat
import pytest
from nbclient import NotebookClient

from labkit.sharing import waiting
from labkit.sharing.waiting import Waiting
from tests.journeys.ways import environment

SLOW = """
import time
from labkit.sharing import waiting
waiting.PATIENCE, waiting.LOOK = 0.2, 0.1
with waiting.Waiting("stones counted", 4, "stone") as work:
    for _ in range(4):
        time.sleep(0.15)
        work.add()
"""
LAST = "stones counted: 4 in 1 s"


def in_terminal(script, **variables):
    """Run a script whose error stream is a terminal; return what stdout and the terminal got."""
    import pty

    ours, theirs = pty.openpty()
    command = [sys.executable, "-c", script]
    with subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=theirs, env=environment() | variables, text=True
    ) as process:
        os.close(theirs)
        seen = b""
        while True:
            try:
                piece = os.read(ours, 4096)
            except OSError:  # the other end is closed
                break
            if not piece:
                break
            seen += piece
        printed = process.stdout.read()
    os.close(ours)
    assert process.returncode == 0, seen
    return printed, seen.decode()


def test_a_terminal_has_one_line_that_is_written_over():
    printed, seen = in_terminal(SLOW + "print('the result')")
    assert printed == "the result\n"
    assert seen.count("\n") == 1
    lines = [line.strip() for line in seen.strip().split("\r")]
    assert lines[-1] == LAST
    assert any(re.match(r"stones counted: +(25|50|75)%\|.*\d/4 ", line) for line in lines[:-1]), lines
    assert "\x1b" not in seen
    assert max(map(len, lines)) <= waiting.COLUMNS


def test_it_can_be_turned_off_and_is_silent_where_a_study_counts(tmp_path):
    script = "import os\n" + SLOW + "os.environ.pop('LABKIT_WAITING')\n"
    script += f"os.environ['LABKIT_PROGRESS'] = {str(tmp_path / 'told')!r}\n" + SLOW
    assert in_terminal(script, LABKIT_WAITING="off") == ("", "")


def test_a_pipe_gets_nothing():
    done = subprocess.run(
        [sys.executable, "-c", SLOW], env=environment(), capture_output=True, check=True, text=True
    )
    assert (done.stdout, done.stderr) == ("", "")


def test_a_command_that_asks_for_it_logs_a_line_each_tenth():
    script = SLOW.replace('"stone")', '"stone", first=2, logged=True)').replace('counted", 4', 'counted", 6')
    done = subprocess.run(
        [sys.executable, "-c", script], env=environment(), capture_output=True, check=True, text=True
    )
    *lines, last = done.stderr.splitlines()
    assert last == "stones counted: 6 of 6 in 1 s"
    assert set(lines) <= {f"stones counted: {at} of 6" for at in (3, 4, 5)}
    assert len(lines) == len(set(lines)) >= 2


class Reader(NotebookClient):
    """Executes cells as a front end with a person does: it takes questions."""

    async def async_start_new_kernel_client(self):
        client = await super().async_start_new_kernel_client()
        client.allow_stdin = True
        return client


@pytest.fixture(scope="module")
def outputs():
    """Outputs of the cells of one notebook, with a reader and without."""
    found = {}
    for kind in (Reader, NotebookClient):
        cells = [nbformat.v4.new_code_cell(source) for source in ("1", SLOW, SLOW + "'the result'")]
        notebook = nbformat.v4.new_notebook(cells=cells)
        kind(notebook, timeout=60, kernel_name="python3").execute(env=environment())
        found[kind] = [cell["outputs"] for cell in notebook.cells]
    return found


def test_a_notebook_keeps_one_tidy_line_in_its_own_cell(outputs):
    for kind in (Reader, NotebookClient):
        _, first, second = outputs[kind]
        assert [each["output_type"] for each in first] == ["display_data"]
        assert first[0]["data"] == {"text/plain": LAST}
        assert [each["output_type"] for each in second] == ["display_data", "execute_result"]
        assert second[0]["data"] == {"text/plain": LAST}


def test_a_single_long_step_is_seen(monkeypatch):
    lines = []
    place = type(
        "Place",
        (),
        {
            "__init__": lambda *_: None,
            "line": lambda self, words: lines.append(words),
            "last": lambda *_: None,
        },
    )
    monkeypatch.setattr(waiting, "PATIENCE", 0.1)
    monkeypatch.setattr(waiting, "LOOK", 0.05)
    monkeypatch.setattr(waiting, "_place", place)
    with Waiting("one", 1, "replicate") as outer, Waiting("inner", 9, "replicate"):
        time.sleep(0.5)
        outer.add()
    assert len(lines) >= 3
    assert all("0/1 [" in line for line in lines)


def test_work_that_fails_says_so_and_leaves_nothing_behind(monkeypatch):
    ends = []
    place = type(
        "Place",
        (),
        {
            "__init__": lambda *_: None,
            "line": lambda *_: None,
            "last": lambda self, words: ends.append(words),
        },
    )
    monkeypatch.setattr(waiting, "PATIENCE", 0.0)
    monkeypatch.setattr(waiting, "LOOK", 0.05)
    monkeypatch.setattr(waiting, "_place", place)

    def fail():
        with Waiting("doomed", 3, "step") as work:
            work.add()
            time.sleep(0.3)
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        fail()
    assert ends == ["doomed: 1 in 0 s, then ended"]
    assert waiting._watch.under_way == []


@pytest.mark.parametrize("error", [BrokenPipeError, ValueError("I/O operation on closed file")])
@pytest.mark.parametrize("place", [waiting._Log, lambda _: waiting._Terminal()])
def test_work_goes_on_where_nothing_can_be_shown(monkeypatch, place, error):
    tries = []

    class Gone(io.StringIO):
        def write(self, words):
            tries.append(words)
            raise error

    monkeypatch.setattr(sys, "stderr", Gone())
    monkeypatch.setattr(waiting, "_place", place)
    with Waiting("stones counted", 9, "stone") as work:
        work.add(5)
        with waiting._watch.changed:
            work.draw()
            work.draw()
        assert len(tries) == 1
    with Waiting("shells counted", 9, "shell") as work:
        work._show = place(work)  # what fails only at the end
    assert len(tries) == 2


def test_short_work_shows_nothing_and_costs_next_to_nothing(monkeypatch):
    monkeypatch.setattr(waiting, "_place", lambda _: pytest.fail("something was shown"))
    begun = time.process_time()
    for _ in range(1_000):
        with Waiting("quick", 10, "step") as work:
            for _ in range(10):
                work.add()
    assert time.process_time() - begun < 0.5  # a call of place takes 0.4 ms at least; this, some 0.02 ms


def test_papermill_log_has_a_line_and_no_control_characters(tmp_path: Path):
    cells = [nbformat.v4.new_code_cell(SLOW)]
    kernel = {"display_name": "Python 3", "language": "python", "name": "python3"}
    notebook = nbformat.v4.new_notebook(cells=cells, metadata={"kernelspec": kernel})
    nbformat.write(notebook, tmp_path / "slow.ipynb")
    words = ["slow.ipynb", "out.ipynb", "--log-output", "--no-progress-bar"]
    done = subprocess.run(
        [sys.executable, "-m", "papermill", *words],
        cwd=tmp_path, env=environment(), capture_output=True, check=True, text=True,
    )  # fmt: skip
    log = done.stdout + done.stderr
    assert log.count("stones counted") == log.count(LAST) == 1, log
    assert "\r" not in log
    assert "\x1b" not in log
