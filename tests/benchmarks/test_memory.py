"""Memory of one large replicate beyond the caller's tables, measured in a process of its own."""

import json
import subprocess
import sys

import pytest

pytestmark = pytest.mark.benchmark

SCRIPT = """
import json, sys, threading
import numpy as np, pandas as pd
import labkit as lk

def resident(field):
    for line in open("/proc/self/status"):
        if line.startswith(field):
            return int(line.split()[1]) * 1024

case, servers = sys.argv[1], int(sys.argv[2])
lk.place(lk.ring(8), "least-loaded", tasks=8, rng=1)           # compiled code is in memory before we measure
if case != "torus":
    rng = np.random.default_rng(1)
    table = pd.DataFrame({"server": rng.permutation(servers)})
    ends = rng.integers(0, servers, size=(2, 2 * servers))
    ends[1] = np.where(ends[0] == ends[1], (ends[1] + 1) % servers, ends[1])
    choices = pd.DataFrame({"option_1": ends[0], "option_2": ends[1]})
    if case == "uneven":
        choices["demand"] = rng.random(2 * servers)
    del ends
    small = choices.head(500).assign(option_1=range(500), option_2=range(500, 1000))
    small = lk.Fleet(pd.DataFrame({"server": range(1000)}), small)
    lk.place(small, "least-loaded", tasks=8, rng=1)
with open("/proc/self/clear_refs", "w") as file:
    file.write("5")                                            # start the high-water mark afresh
before = resident("VmRSS")
if case == "torus":
    side = round(servers**0.5)
    fleet = lk.torus(side, side)
else:
    fleet = lk.Fleet(table, choices)
outcome = lk.place(fleet, "least-loaded", tasks=servers, rng=1)
outcome.measures
print(json.dumps({"bytes": resident("VmHWM") - before, "servers": len(fleet), "choices": len(fleet.options)}))
"""


@pytest.mark.parametrize("case", ["torus", "even", "uneven"])
def test_ten_million_servers(case, report):
    done = subprocess.run(
        [sys.executable, "-c", SCRIPT, case, "10000000"], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)
    allowed = 40 * found["servers"] + 16 * found["choices"]
    report(
        f"{case} fleet of {found['servers']} servers and {found['choices']} choices: "
        f"{found['bytes'] / 1e6:.0f} MB beyond the tables, {allowed / 1e6:.0f} MB allowed"
    )
    assert found["bytes"] <= allowed
