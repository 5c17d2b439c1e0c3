"""Loads beside fair utilisations, server by server, and the headroom that each server needs for itself."""

import numpy as np
import pandas as pd
import pytest

import labkit as lk


def path_of_three(**capacity):
    servers = pd.DataFrame({"server": ["a", "b", "c"], **capacity})
    choices = pd.DataFrame({"option_1": ["a", "b"], "option_2": ["b", "c"], "demand": [3.0, 1.0]})
    return lk.Fleet(servers, choices)


def test_each_row_is_a_server_of_a_replicate():
    # {a, b} holds 3 of 4 units of demand: 1.5 each; c gets the fourth.
    outcome = lk.place(path_of_three(), "least-loaded", tasks=40, replicates=3, rng=1, checkpoints=[10, 20])
    table = outcome.by_server
    assert table["replicate"].tolist() == [0, 0, 0, 1, 1, 1, 2, 2, 2]
    assert table["server"].tolist() == ["a", "b", "c"] * 3
    assert (table["tasks"] == 40).all()
    assert np.array_equal(table["load"].to_numpy().reshape(3, 3), outcome.loads)
    assert table["fair_utilisation"].to_numpy()[:3] == pytest.approx([15, 15, 10])
    assert (table["excess"] == table["utilisation"] - table["fair_utilisation"]).all()


def test_fair_loads_add_up_to_the_work_that_is_there():
    fleet = path_of_three(capacity=[2.0, 1.0, 5.0])
    outcome = lk.place(
        fleet, "one-choice", tasks=50, replicates=2, rng=1, start=[7.0, 0, 0], sizes=np.full(50, 0.5)
    )
    table = outcome.by_server
    fair = (table["fair_utilisation"].to_numpy().reshape(2, 3) * fleet.capacity).sum(axis=1)
    assert fair == pytest.approx([32, 32])


def test_the_highest_excess_of_a_bottleneck_server_is_the_excess():
    # Where the fullest server lies in the bottleneck, both notions agree.
    outcome = lk.place(path_of_three(), "static-split", tasks=4_000, replicates=20, rng=2)
    rows = outcome.by_server.sort_values("utilisation").groupby("replicate").tail(1)
    fullest = rows.sort_values("replicate")
    assert set(fullest["server"]) <= {"a", "b"}
    assert fullest["excess"].to_numpy() == pytest.approx(outcome.measures["excess"].to_numpy())


def test_headroom_of_each_server():
    outcome = lk.place(path_of_three(), "one-choice", tasks=400, replicates=400, rng=3)
    table = lk.headroom(outcome.by_server, risk=0.05, of="excess")
    assert table["server"].tolist() == ["a", "b", "c"]
    for _, row in table.iterrows():
        values = np.sort(outcome.by_server.query("server == @row.server")["excess"].to_numpy())
        assert row["headroom"] == values[379]
    # A coin sends 150 to a, 200 to b and 50 to c; fair are 150, 150 and 100.
    assert table["fair_utilisation"].tolist() == pytest.approx([150, 150, 100])
    assert table["headroom"].iloc[1] > 50
    assert table["headroom"].iloc[2] < 0


def test_numbered_servers_are_told_apart():
    outcome = lk.place(lk.complete(4), "least-loaded", tasks=40, replicates=100, rng=3)
    assert lk.headroom(outcome.by_server, risk=0.1, of="excess")["server"].tolist() == [0, 1, 2, 3]
