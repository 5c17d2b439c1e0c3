"""Memory beyond the caller's tables, measured as resident pages in a process of its own."""

import subprocess
import sys
from pathlib import Path

import pytest

PROGRAM = """
import ctypes, gc, threading, time
import numpy as np, pandas as pd
import labkit as lk

def resident():
    return int(open("/proc/self/statm").read().split()[1]) * 4096

def tables(servers, kind):
    rng = np.random.default_rng(1)
    names = rng.permutation(servers) * (1 if kind == "near" else 1_000_003)
    row = np.arange(2 * servers)
    first, second = names[row % servers], names[(row + 1 + row // servers) % servers]
    return (
        pd.DataFrame({"server": names, "capacity": rng.random(servers) + 1}),
        pd.DataFrame({"option_1": first, "option_2": second, "demand": rng.random(len(row))}),
    )

def build(kind, servers):
    given = () if kind == "torus" else tables(servers, kind)
    gc.collect()
    ctypes.CDLL(None).malloc_trim(0)
    before, peak, done = resident(), [0], threading.Event()
    def watch():
        while not done.wait(0.001):
            peak[0] = max(peak[0], resident())
    watcher = threading.Thread(target=watch)
    watcher.start()
    fleet = lk.Fleet(*given) if given else lk.torus(1000, servers // 1000)
    peak[0] = max(peak[0], resident())
    done.set()
    watcher.join()
    assert len(fleet.options) == 2 * servers
    ctypes.CDLL(None).malloc_trim(0)
    return max(0, peak[0] - before), max(0, resident() - before)

for kind in ("near", "far", "torus"):
    build(kind, 10_000)
    print(kind, *build(kind, 500_000))
"""


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="reads resident pages from /proc")
def test_a_fleet_takes_less_than_half_of_its_allowance():
    root = Path(__file__).parents[2]
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM], cwd=root, capture_output=True, text=True, check=True
    )
    # 40 bytes a server and 16 a choice are allowed for construction and placement together.
    allowance = 500_000 * 40 + 1_000_000 * 16
    for line in done.stdout.splitlines():
        kind, peak, kept = line.split()
        assert int(peak) < (0.9 if kind == "far" else 0.5) * allowance, line
        assert int(kept) < 0.5 * allowance, line
    assert len(done.stdout.splitlines()) == 3
