"""Compiled code is kept: a second process compiles nothing, an edited source compiles afresh."""

import os
import subprocess
import sys

SCRIPT = """
import sys
import labkit as lk
from labkit.engine.placement import loop_of
from labkit.policies.naming import parse_policy
for name in sys.argv[1:]:
    lk.place(lk.ring(5), name, tasks=20, rng=1)
    stats = loop_of(parse_policy(name)).stats
    print(sum(stats.cache_hits.values()), sum(stats.cache_misses.values()))
"""


# Compiled as all loops are, but quickly.
SMALL = """
import numpy as np
from labkit.compiled import kept
def total(numbers):
    found = 0.0
    for number in numbers:
        found += number
    return found
print(kept(total)(np.arange(5.0)), len(kept(total).signatures))
"""


def run_with(cache, *rules, script=SCRIPT):
    done = subprocess.run(
        [sys.executable, "-c", script, *rules],
        env={**os.environ, "NUMBA_CACHE_DIR": str(cache)},
        capture_output=True,
        text=True,
        check=True,
    )
    return done.stdout.split()


def test_a_second_process_compiles_nothing(tmp_path):
    rules = ("least-loaded", "one-choice")
    assert run_with(tmp_path, *rules) == ["0", "1", "0", "1"]
    assert run_with(tmp_path, *rules) == ["1", "0", "1", "0"]


def test_a_cache_folder_that_cannot_be_made_is_no_obstacle(tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("not a folder")
    assert run_with(blocked / "below", script=SMALL) == ["10.0", "1"]


def test_the_cache_folder_follows_every_source(tmp_path):
    from labkit.sources import source_digest

    (tmp_path / "room").mkdir()
    helper = tmp_path / "room" / "helper.py"
    helper.write_text("ONE = 1\n")
    before = source_digest(tmp_path)
    assert source_digest(tmp_path) == before
    helper.write_text("ONE = 2\n")
    assert source_digest(tmp_path) != before
