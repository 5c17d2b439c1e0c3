"""A run notebook of a few lines: its measures are draws from the seed of the run."""

import json
from pathlib import Path

PARAMETERS = """
tasks: int = 5  # rows are measured at this many tasks
share: float = 0.5
policies: list = ["one-choice", "least-loaded"]
mode: str = "good"
replicates: int = 3
entropy: int = 1
study: str = "by-hand"
store: str = ""
workers: int = 1
"""
BEGIN = """
import os, signal, sys, time
import numpy as np, pandas as pd
import labkit as lk
run = lk.begin_run({path!r}, globals())
"""
MEASURE = """
draws = np.random.default_rng(run.seed).random(replicates)
if mode == "noise":
    draws = np.random.default_rng().random(replicates)
if mode == "broken":
    raise RuntimeError("the well is dry")
if mode == "exit":
    sys.exit(0)
if mode == "killed":
    os.kill(os.getpid(), signal.SIGKILL)
if mode == "stopped":
    os.kill(os.getpid(), signal.SIGSTOP)
if mode == "slow":
    time.sleep(60)
if mode == "refused":
    raise lk.InputError("mode is 'refused'; give another.")
tables = [
    pd.DataFrame({"policy": name, "replicate": range(replicates), "tasks": tasks, "gap": draws + share})
    for name in policies
]
"""
RECORD = """
if mode != "silent":
    run.record(pd.concat(tables))
"""


def write_notebook(path: Path, *code: str, parameters: str = PARAMETERS) -> Path:
    cells = [
        {
            "cell_type": "code",
            "id": f"cell-{at}",
            "metadata": {"tags": ["parameters"]} if at == 0 else {},
            "source": source.strip(),
            "outputs": [],
            "execution_count": None,
        }
        for at, source in enumerate([parameters, *code])
    ]
    kernel = {"name": "python3", "display_name": "Python 3", "language": "python"}
    content = {"cells": cells, "metadata": {"kernelspec": kernel}, "nbformat": 4, "nbformat_minor": 5}
    path.write_text(json.dumps(content), encoding="utf-8")
    return path


def write_tiny(path: Path, *, measure: str = MEASURE) -> Path:
    return write_notebook(path, BEGIN.format(path=str(path)), measure, RECORD)


def snapshot(folder: Path) -> dict[str, bytes]:
    """Everything in a folder, hidden files included."""
    return {str(path): path.read_bytes() for path in folder.rglob("*") if path.is_file()}
