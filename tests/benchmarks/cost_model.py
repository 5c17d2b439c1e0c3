"""What runs cost, measured and fitted: ``python -m tests.benchmarks.cost_model`` prints the laws.

Times are CPU seconds of this process, least of some repeats, so that others on the machine count little. Laws
are sums of terms with costs of at least 0, fitted to relative errors.
"""

import json
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from scipy.optimize import nnls

import labkit as lk

ROOT = Path(__file__).parents[2]
LABKIT = Path(sys.executable).with_name("labkit")
# Bytes that a core reaches at one speed: in its own caches, in the cache of all cores, in memory.
NEAR, SHARED = 1 << 20, 24 << 20
# A server's load is 8 bytes, a choice of two 8.
LOAD, CHOICE = 8, 8


@dataclass(frozen=True)
class Point:
    """One measured cost, and what it depends on."""

    value: float
    terms: dict[str, float]


@dataclass(frozen=True)
class Law:
    """A sum of terms, each with its cost."""

    name: str
    unit: str
    costs: dict[str, float]
    errors: tuple[float, ...]

    def __call__(self, terms: dict[str, float]) -> float:
        return sum(cost * terms.get(name, 0.0) for name, cost in self.costs.items())

    def __str__(self) -> str:
        parts = " + ".join(f"{cost:.3g} × {name}" for name, cost in self.costs.items() if cost > 0)
        worst = max(map(abs, self.errors), default=0.0)
        typical = float(np.median(np.abs(self.errors))) if self.errors else 0.0
        return (
            f"{self.name} [{self.unit}] = {parts}   (error {typical:.0%} in the middle, {worst:.0%} at most)"
        )


def fit(name: str, unit: str, points: Sequence[Point]) -> Law:
    """Fit costs of at least 0 to the relative errors of all points."""
    names = list(dict.fromkeys(term for point in points for term in point.terms))
    rows = np.array([[point.terms.get(term, 0.0) / point.value for term in names] for point in points])
    scale = np.maximum(rows.max(axis=0), 1e-300)  # else terms far apart in size are lost
    found = nnls(rows / scale, np.ones(len(points)))[0] / scale
    return Law(
        name, unit, dict(zip(names, map(float, found), strict=True)), tuple(map(float, rows @ found - 1))
    )


def cpu_seconds(work: Callable[[], object], repeats: int = 3) -> float:
    """Return the least CPU time of some calls, after one that warms up."""
    work()
    took = []
    for _ in range(repeats):
        begin = time.process_time()
        work()
        took.append(time.process_time() - begin)
    return min(took)


def torus_of(servers: int):
    """Return a torus of about so many servers, with two choices a server."""
    side = max(3, round(servers**0.5))
    return lk.torus(side, side)


def level(servers: int, choices: int) -> str:
    """Return where loads and choices lie, as a term of `place`."""
    room = LOAD * servers + CHOICE * choices
    return "tasks near" if room <= NEAR else "tasks shared" if room <= SHARED else "tasks far"


def place_terms(
    servers: int, choices: int, tasks: int, checkpoints: int, replicates: int
) -> dict[str, float]:
    """Return the terms of the time of one call of `place`."""
    return {
        "call": 1.0,
        "replicates": replicates,
        "replicates × servers": replicates * servers,
        level(servers, choices): replicates * tasks,
        "checkpoints × (servers + choices)": replicates * checkpoints * (servers + choices),
    }


PLACED = [
    # servers, tasks, checkpoints, replicates
    (100, 200_000, 1, 1),
    (100, 20_000, 1, 50),
    (100, 100, 1, 1_000),
    (100, 20_000, 1_000, 1),
    (2_500, 1_000_000, 1, 1),
    (10_000, 1_000_000, 1, 1),
    (10_000, 1_000_000, 100, 1),
    (40_000, 400_000, 1, 4),
    (160_000, 2_000_000, 1, 1),
    (360_000, 2_000_000, 1, 1),
    (360_000, 2_000_000, 20, 1),
    (4_000_000, 4_000_000, 1, 1),
    (4_000_000, 12_000_000, 1, 1),
    (4_000_000, 4_000_000, 4, 1),
]


def placed(
    policy: str, servers: int, tasks: int, checkpoints: int, replicates: int, repeats: int = 3
) -> Point:
    """Measure one call of `place` on a torus."""
    fleet = torus_of(servers)
    moments = sorted({round(tasks * (k + 1) / checkpoints) for k in range(checkpoints)})
    took = cpu_seconds(
        lambda: lk.place(fleet, policy, tasks=tasks, replicates=replicates, rng=1, checkpoints=moments),
        repeats,
    )
    return Point(took, place_terms(len(fleet), len(fleet.options), tasks, len(moments), replicates))


def place_law(policy: str, cases=PLACED) -> Law:
    """Measure and fit the time of `place`."""
    return fit(f"place, {policy}", "CPU s", [placed(policy, *case) for case in cases])


def options_law() -> Law:
    """Time a task by its number of options, on 2,000 random choices among 1,000 servers."""
    points, tasks, drawn = [], 200_000, np.random.default_rng(1)
    for options in (2, 3, 4, 6, 10):
        rows = [drawn.choice(1_000, options, replace=False) for _ in range(2_000)]
        columns = [f"option_{k + 1}" for k in range(options)]
        fleet = lk.Fleet(pd.DataFrame({"server": range(1_000)}), pd.DataFrame(rows, columns=columns))
        took = cpu_seconds(lambda fleet=fleet: lk.place(fleet, "least-loaded", tasks=tasks, rng=1))
        points.append(Point(1e9 * took / tasks, {"1": 1.0, "more than two": options > 2, "options": options}))
    return fit("a task by options", "ns", points)


SERVED = [(16, 2_000.0, 1), (16, 20_000.0, 1), (16, 200.0, 40), (1_024, 500.0, 1), (10_000, 50.0, 1)]


def served(servers: int, horizon: float, replicates: int, repeats: int = 3) -> Point:
    """Measure one call of `serve` at a load of 0.7."""
    fleet, found = torus_of(servers), []

    def work():
        found[:] = [
            lk.serve(
                fleet, "least-loaded", load_factor=0.7, service="exponential", horizon=horizon,
                warmup=0.1 * horizon, replicates=replicates, rng=1,
            ).measures
        ]  # fmt: skip

    took = cpu_seconds(work, repeats)
    # An arrival and a departure each; those of the warm-up are served as well.
    events = 2 * 0.7 * len(fleet) * horizon * replicates
    several = {"call": 1.0, "replicates": replicates, "replicates × servers": replicates * len(fleet)}
    return Point(took, {**several, "events": events})


def serve_law() -> Law:
    """Measure and fit the time of `serve`."""
    return fit("serve", "CPU s", [served(*case) for case in SERVED])


MEMORY = """
import json, resource, sys
from pathlib import Path
import labkit as lk
servers, tasks, checkpoints, replicates, workers = map(int, sys.argv[1:])
side = max(3, round(servers**0.5))
lk.place(lk.torus(3, 3), "least-loaded", tasks=9, rng=1)
def peak():
    status = Path("/proc/self/status")
    if status.exists():  # on Linux ru_maxrss begins with the memory of the process that started this one
        [line] = [line for line in status.read_text().splitlines() if line.startswith("VmHWM")]
        return 1024 * int(line.split()[1])
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
before = peak()
if servers:
    fleet = lk.torus(side, side)
    moments = sorted({round(tasks * (k + 1) / checkpoints) for k in range(checkpoints)})
    lk.place(fleet, "least-loaded", tasks=tasks, replicates=replicates, rng=1, checkpoints=moments,
             workers=workers).measures
print(json.dumps([before, peak()]))
"""

REMEMBERED = [
    # servers, tasks, checkpoints, replicates, threads
    (1_000_000, 1_000, 1, 1, 1),
    (4_000_000, 1_000, 1, 1, 1),
    (1_000_000, 1_000, 1, 64, 1),
    (4_000_000, 1_000, 1, 8, 2),
    (4_000_000, 1_000, 1, 24, 2),
    (100, 1_000, 1_000, 400, 1),
    (100, 1_000, 1_000, 1_600, 1),
]


def remembered(servers: int, tasks: int, checkpoints: int, replicates: int, threads: int) -> Point:
    """Measure the peak memory of a process with one call of `place`."""
    words = [sys.executable, "-c", MEMORY, *map(str, (servers, tasks, checkpoints, replicates, threads))]
    done = subprocess.run(words, check=True, capture_output=True, text=True, cwd=ROOT)
    return Point(json.loads(done.stdout)[1], memory_terms(servers, 2 * servers, checkpoints, replicates))


def memory_terms(servers: int, choices: int, checkpoints: int, replicates: int) -> dict[str, float]:
    """Return the terms of the peak memory of a process; choices are two a server on a torus."""
    return {
        "process": 1.0,
        "servers + choices": servers + choices,
        "replicates × servers": replicates * servers,
        "replicates × checkpoints": replicates * checkpoints,
    }


def memory_law() -> Law:
    """Measure and fit the peak memory of `place`."""
    return fit("memory of place", "bytes", [remembered(*case) for case in REMEMBERED])


RECORDED = [(1, 1), (100, 1), (1_000, 1), (10_000, 1), (100, 20), (1_000, 20)]


def recorded_bytes(replicates: int, checkpoints: int) -> Point:
    """Measure the bytes of a record of one rule on a torus of 900 servers."""
    from labkit.records.provenance import provenance
    from labkit.records.schema import measured_table, with_origin
    from labkit.records.store import Store

    moments = [997 * (k + 1) for k in range(checkpoints)]
    outcome = lk.place(
        lk.torus(30, 30), "least-loaded", tasks=moments[-1], replicates=replicates, rng=1, checkpoints=moments
    )
    table = measured_table(outcome.measures.assign(information=outcome.information))
    about = {
        **provenance(), "study": "cost", "run_id": "0" * 16, "entropy": "1", "spawn_key": "[1]",
        "notebook": "headroom", "notebook_digest": "0" * 64, "parameters": "{}", "inputs": "{}",
        "rules": "{}", "started": "2026-01-01T00:00:00.000000+00:00", "elapsed": 1.5,
    }  # fmt: skip
    with tempfile.TemporaryDirectory() as folder:
        store = Store(Path(folder))
        store.write("cost", about["run_id"], with_origin(table, about))
        [path] = list(store.files("cost"))
        size = path.stat().st_size
    return Point(size, {"record": 1.0, "rows": replicates * checkpoints})


def record_law() -> Law:
    """Measure and fit the bytes of a record."""
    return fit("a record", "bytes", [recorded_bytes(*case) for case in RECORDED])


def of_processes(*words: object, cwd: Path = ROOT) -> tuple[float, float, int]:
    """Return wall and CPU seconds and the peak memory of a command with its kernels."""
    script = (
        "import json, resource, subprocess, sys, time\n"
        "begin = time.perf_counter()\n"
        "subprocess.run(sys.argv[1:], check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)\n"
        "wall, used = time.perf_counter() - begin, resource.getrusage(resource.RUSAGE_CHILDREN)\n"
        "print(json.dumps([wall, used.ru_utime + used.ru_stime, 1024 * used.ru_maxrss]))"
    )
    done = subprocess.run(
        [sys.executable, "-c", script, *map(str, words)], check=True, capture_output=True, text=True, cwd=cwd
    )
    return tuple(json.loads(done.stdout))


def fixed_costs(runs: int = 4) -> dict[str, tuple[float, float, int]]:
    """Return what a command costs with no run, and a run more, of a tiny notebook and of headroom."""
    from tests.records.tiny import write_tiny

    found = {}
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write_tiny(folder / "tiny.ipynb")
        fleet = ROOT / "experiments" / "demo"
        heads = {
            "tiny": f'notebook = "{folder / "tiny.ipynb"}"\nreplicates = 1\nentropy = 1\n[grid]\n',
            "headroom": 'notebook = "headroom"\nreplicates = 2\nentropy = 1\n[parameters]\npolicies = '
            f'["least-loaded"]\nfleet = "{fleet}"\n[grid]\n',
        }
        found["labkit list"] = of_processes(LABKIT, "list", "--store", folder / "none")
        for kind, head in heads.items():
            costs = {}
            for count in (1, 1 + runs):
                path = folder / f"{kind}-{count}.toml"
                path.write_text(head + f"tasks = {[9_000 + 10 * k for k in range(count)]}\n")
                if count == 1:
                    of_processes(LABKIT, "run", path, "--jobs", 1, "--store", folder / f"warm-{kind}")
                store = folder / f"{kind}-{count}"
                costs[count] = of_processes(LABKIT, "run", path, "--jobs", 1, "--store", store)
            one, many = costs[1], costs[1 + runs]
            found[f"labkit run, one run of {kind}"] = one
            found[f"one more run of {kind}"] = ((many[0] - one[0]) / runs, (many[1] - one[1]) / runs, many[2])
    return found


def main() -> None:
    for policy in ("least-loaded", "one-choice", "mixed(beta=0.5)", "static-split"):
        print(place_law(policy), flush=True)
    print(options_law(), flush=True)
    print(serve_law(), flush=True)
    print(memory_law(), flush=True)
    print(record_law(), flush=True)
    for name, (wall, cpu, memory) in fixed_costs().items():
        print(f"{name}: {wall:.2f} s ({cpu:.2f} s CPU), {memory / 1e6:.0f} MB at most a process", flush=True)


if __name__ == "__main__":
    main()
