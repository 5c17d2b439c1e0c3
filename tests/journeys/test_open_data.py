"""The whole path, from two files to the answer, on open data: US counties and the network germany50.

County contiguity: the bokeh-sampledata package (public domain); 3,223 counties, 9,112 borders, 7 components.
germany50: a telecom demand matrix in the topohub package. Both are read from the installed packages.
"""

import csv
import json

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.cli import main
from tests.published.counties import county_graph
from tests.published.telecom import telecom_graph


def write_tables(fleet, folder):
    folder.mkdir()
    fleet.servers.to_csv(folder / "servers.csv", index=False)
    fleet.choices.to_csv(folder / "choices.csv", index=False)


@pytest.mark.parametrize(
    ("name", "graph", "tasks", "network"),
    [
        # The optimum for unit demand, 2.900744 (derived; tests/survey has it on its own), less the mean.
        ("counties", county_graph, 9_112, 2.900744 - 9_112 / 3_223),
        ("germany", lambda: telecom_graph("germany50"), 2_000, None),
    ],
)
def test_from_two_files_to_the_answer(name, graph, tasks, network, tmp_path, capsys):
    fleet = lk.fleet_from_graph(graph())
    write_tables(fleet, tmp_path / name)
    words = [
        "--tasks",
        str(tasks),
        "--risk",
        "0.05",
        "--policies",
        "one-choice",
        "least-loaded",
        "--entropy",
        "7",
    ]
    places = ["--store", str(tmp_path / "runs"), "--output", str(tmp_path / "answers")]
    assert main(["answer", str(tmp_path / name), *words, *places]) == 0
    assert "Use least-loaded" in capsys.readouterr().out
    with open(tmp_path / "answers" / name / "answer.csv", encoding="utf-8", newline="") as file:
        rows = {row["policy"]: row for row in csv.DictReader(file)}

    # The answer is what the library gives on the record, and the record what it gives on the fleet.
    record = lk.read_study_records(name, store=tmp_path / "runs")
    end = record[record["tasks"] == tasks]
    [entropy], [key] = end["entropy"].unique(), end["spawn_key"].unique()
    for policy, row in rows.items():
        again = lk.place(
            lk.read_fleet(tmp_path / name), policy, tasks=tasks, replicates=int(row["replicates"]),
            rng=np.random.SeedSequence(int(entropy), spawn_key=json.loads(key)),
        ).measures  # fmt: skip
        pd.testing.assert_series_equal(
            end.loc[end["policy"] == policy, "gap"], again["gap"], check_index=False
        )
        expected = lk.headroom(again, risk=0.05).iloc[0]
        for column in ("headroom", "lower", "upper"):
            assert float(row[column]) == pytest.approx(expected[column], rel=1e-9)
    assert float(rows["least-loaded"]["headroom"]) < float(rows["one-choice"]["headroom"])
    if network is not None:
        assert float(rows["least-loaded"]["network"]) == pytest.approx(network, abs=5e-7)
