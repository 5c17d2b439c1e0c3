"""A small study with an answer, whose names are no friends of HTML, recorded without any kernel."""

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

import labkit as lk
from labkit.records.store import Store
from labkit.studies.model import read_study

HOSTILE = "<img src=x onerror=alert(1)>"
TITLE = "Kilns & <script>alert(2)</script>"
SERVERS = (HOSTILE, "kiln-2", "kiln-3")
REPLICATES = 60
CAPACITY, TASKS = 10, 24

STUDY = """title = "{title}"
question = '''
Which rule keeps the fullest kiln lowest?

</p><h1>No heading</h1>'''
notebook = "headroom"
replicates = {replicates}
entropy = 8

[parameters]
fleet = {fleet}
tasks = {tasks}
checkpoints = 2
policies = ["one-choice", "least-loaded"]

[grid]
report_every = [0, 6]

[answer]
notebook = "headroom_answer"
risk = 0.1
{more}
"""


def write_small(folder: Path, more: str = "") -> Path:
    """Write a ring of three equal servers, and a study of it; return the study's file."""
    fleet = folder / "kilns"
    fleet.mkdir()
    rows = [f"{one},{other},1" for one, other in zip(SERVERS, SERVERS[1:] + SERVERS[:1], strict=True)]
    (fleet / "servers.csv").write_text(
        "\n".join(["server,capacity", *(f"{name},{CAPACITY}" for name in SERVERS)])
    )
    (fleet / "choices.csv").write_text("\n".join(["option_1,option_2,demand", *rows]))
    path = folder / "kilns.toml"
    values = {"title": TITLE, "replicates": REPLICATES, "tasks": TASKS, "fleet": json.dumps(str(fleet))}
    path.write_text(STUDY.format(**values, more=more))
    return path


def record_small(path: Path, store: Path) -> Store:
    """Record each point of the study from loads that plain Python places, without any kernel or compiling."""
    study = read_study(str(path))
    for point in study.points:
        run = lk.begin_run("headroom", {**point.parameters, "study": study.name, "store": str(store)})
        rng = np.random.default_rng(run.seed)
        run.record(
            pd.DataFrame([row for at in range(REPLICATES) for row in _rows(at, rng, point.parameters)])
        )
    return Store(store)


def _rows(replicate: int, rng: np.random.Generator, asked: dict[str, Any]) -> Iterator[dict[str, Any]]:
    every = asked["report_every"] or 1
    options, coins = rng.integers(3, size=TASKS), rng.integers(2, size=TASKS)
    for policy in asked["policies"]:
        loads = seen = np.zeros(3)
        for task, (option, coin) in enumerate(zip(options, coins, strict=True), 1):
            pair = [option, (option + 1) % 3]
            least = min(pair, key=lambda server: seen[server])
            loads = loads + np.eye(3)[pair[coin] if policy == "one-choice" else least]
            seen = loads if task % every == 0 else seen
            if task in (TASKS // 2, TASKS):
                mean, top = loads.mean(), loads.max()
                yield {
                    "policy": policy,
                    "information": f"snapshot(every={every})" if every > 1 else "fresh",
                    "replicate": replicate,
                    "tasks": task,
                    "mean_load": mean,
                    "max_load": top,
                    "min_load": loads.min(),
                    "max_utilisation": top / CAPACITY,
                    "gap": (top - mean) / CAPACITY,
                    "excess": (top - mean) / CAPACITY,
                    "load_variance": loads.var(),
                    "edge_difference": 0.0,
                }
