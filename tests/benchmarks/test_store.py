"""The store with 100,000 runs: listing, a filtered read, and what writing a run costs besides its work."""

import json
import statistics
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

import labkit as lk
from labkit.records.pack_writing import write_pack
from labkit.records.packs import MOST
from labkit.records.provenance import provenance
from labkit.records.schema import SCHEMA, measured_table, with_origin
from labkit.records.store import Store

pytestmark = pytest.mark.benchmark
LABKIT = Path(sys.executable).with_name("labkit")
RUNS, LOOSE = 100_000, 3_000


def measures():
    """Ten rows of the columns that `place` measures."""
    import pandas as pd

    names = ("mean_load", "max_load", "min_load", "max_utilisation", "gap", "excess", "load_variance")
    draws = np.random.default_rng(1).random((10, len(names)))
    labels = {"policy": ["one-choice", "least-loaded"] * 5, "information": "fresh", "tasks": 9600}
    return measured_table(
        pd.DataFrame({**labels, "replicate": np.arange(10) // 2, **dict(zip(names, draws.T, strict=True))})
    )


def origin(number, facts):
    parameters = {
        "entropy": 1,
        "fleet": "experiments/demo",
        "policies": ["one-choice", "least-loaded"],
        "replicates": 5,
        "report_every": number % 50,
        "tasks": number,
    }
    return {
        **facts,
        "study": "large",
        "run_id": f"{number * 0x9E3779B97F4A7C15 % 2**64:016x}",
        "entropy": "1",
        "spawn_key": f"[{number}]",
        "notebook": "headroom",
        "notebook_digest": "0" * 64,
        "parameters": json.dumps(parameters),
        "inputs": '{"fleet":"' + "0" * 64 + '"}',
        "rules": "{}",
        "started": f"2026-01-01T00:00:00.{number:06d}+00:00",
        "elapsed": 1.5,
    }


@pytest.fixture(scope="module")
def store(tmp_path_factory):
    """A store of packs and a few thousand files."""
    store, facts, rows = Store(tmp_path_factory.mktemp("large")), provenance(), measures()
    for start in range(0, RUNS, MOST):
        records = []
        for number in range(start, min(start + MOST, RUNS)):
            about = origin(number, facts)
            records.append((f"{about['run_id']}-{number:032x}.parquet", with_origin(rows, about), SCHEMA))
        write_pack(store.folder / "large", records)
    return store


def seconds(work):
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def test_a_list_of_all_runs(store, report):
    def listing():
        words = [LABKIT, "list", "--store", store.folder]
        out = subprocess.run(words, check=True, capture_output=True, text=True).stdout
        assert out.count("\n") == RUNS + 1

    took = statistics.median(seconds(listing) for _ in range(3))
    report(f"labkit list of {RUNS:,} runs in packs: {took:.2f} s")
    assert took <= 2


def test_a_filtered_read(store, report):
    def read():
        frame = lk.read_study_records("large", store=store.folder, where={"report_every": 7, "entropy": 1})
        assert len(frame) == RUNS // 50 * 10

    took = statistics.median(seconds(read) for _ in range(3))
    report(f"rows of {RUNS // 50:,} among {RUNS:,} runs by their parameters: {took:.2f} s")
    assert took <= 1


def test_writing_a_run(store, report):
    """Beside all packs and a few thousand files, the process that writes having opened nothing before."""
    facts, rows = provenance(), measures()
    took = []
    for number in range(RUNS, RUNS + LOOSE):
        about = origin(number, facts)
        table = with_origin(rows, about)
        took.append(seconds(lambda about=about, table=table: store.write("large", about["run_id"], table)))
    script = (
        "import sys, time; from pathlib import Path; import pandas, pyarrow.parquet  # as in a notebook\n"
        "from labkit.records.store import Store; from labkit.records.record_files import read_file\n"
        "from labkit.records.schema import *\n"
        "store, path = Store(Path(sys.argv[1])), Path(sys.argv[2])\n"
        "table = read_file(path)[0]; path.unlink(); start = time.perf_counter()\n"
        "store.write('large', path.name[:16], table); print(time.perf_counter() - start)"
    )
    alone = []
    for path in list(store.files("large"))[:2000]:
        if path.parent.name == "large" and len(alone) < 5:
            words = [sys.executable, "-c", script, str(store.folder), str(path)]
            alone.append(float(subprocess.run(words, check=True, capture_output=True, text=True).stdout))
    late = statistics.median(took[-500:])
    report(
        f"writing a run beside {RUNS:,} in packs and {LOOSE:,} files: {1e3 * late:.1f} ms, "
        f"as the first of a process {1e3 * statistics.median(alone):.1f} ms"
    )
    assert late <= 0.02
    assert statistics.median(alone) <= 0.02
    once = seconds(lambda: store.runs("large"))
    report(f"all runs of that study by id: {once:.2f} s")
