"""Spoilt inputs: each is read or refused in a sentence, soon; nothing is written.

``make fuzz`` tries ten thousand a reader; the ordinary tests the first of them, for they take minutes.
"""

import gc
import os
import signal
import warnings

import pytest

from labkit.errors import LONGEST, InputError
from tests.fuzz.readers import READERS

INPUTS = int(os.environ.get("FUZZ_INPUTS", "300"))
# A reader of two files is two entries in the list, each with a part of the inputs.
HALF = ("servers.parquet", "choices.parquet", "failures.csv", "failures.parquet")
PATIENCE = 5.0  # seconds for an input, on a machine with much else to do


def too_long(signum, frame):
    raise TimeoutError("a reader hangs")


@pytest.fixture
def alarm():
    before = signal.signal(signal.SIGALRM, too_long)
    yield lambda seconds: signal.setitimer(signal.ITIMER_REAL, seconds)
    signal.setitimer(signal.ITIMER_REAL, 0)
    signal.signal(signal.SIGALRM, before)


def listed(*folders):
    return sorted(str(path) for folder in folders for path in folder.rglob("*"))


@pytest.mark.parametrize("name", READERS)
def test_spoilt_inputs_are_read_or_refused(name, tmp_path, alarm, monkeypatch):
    elsewhere = tmp_path / "elsewhere"
    folder = tmp_path / "inputs"
    elsewhere.mkdir()
    folder.mkdir()
    monkeypatch.chdir(elsewhere)
    reader = READERS[name](folder)
    inputs = reader.inputs(20261202)
    reader.try_out(next(inputs))  # what is imported at first use takes its time once
    before = listed(folder)
    gc.disable()
    try:
        for at in range(INPUTS // 2 if name in HALF else INPUTS):
            content = next(inputs)
            alarm(PATIENCE)
            try:
                with warnings.catch_warnings(category=UserWarning, action="ignore"):
                    reader.read(content)
            except InputError as error:
                sentence = str(error)
                assert len(sentence) <= LONGEST, at
            except BaseException as error:
                error.add_note(f"input {at} of {name}: {content[:2000]!r}")
                raise
            if at % 500 == 0:
                gc.collect()
    finally:
        alarm(0)
        gc.enable()
    assert listed(folder) == before
    assert listed(elsewhere) == []
