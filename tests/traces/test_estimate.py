import warnings
from collections import Counter, defaultdict

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import labkit as lk


def table(rows, **columns):
    log = pd.DataFrame({"time": np.arange(len(rows), dtype=float), **columns})
    for place in range(max(2, *map(len, rows))):
        log[f"option_{place + 1}"] = [row[place] if place < len(row) else None for row in rows]
    return log


def sets_of(fleet):
    """Return demand by set of names."""
    choices = fleet.choices
    names = choices.drop(columns="demand").astype(object).to_numpy().tolist()
    keys = [frozenset(name for name in row if not pd.isna(name)) for row in names]
    assert len(set(keys)) == len(keys)
    return dict(zip(keys, choices["demand"], strict=True))


LOG = table(
    [("b", "a"), ("c", "b", "a"), ("a", "b"), ("b", "d"), ("b", "a", "c")],
    size=[1, 2, 3, 4, 0],
    duration=[0.5, 2, 1, 0, 9],
    placed=["a", "e", "a", "b", "c"],
)


def test_servers_choices_and_demands_of_a_small_log():
    fleet = lk.fleet_from_trace(LOG)
    assert fleet.names.tolist() == ["b", "a", "c", "e", "d"]
    assert fleet.options[:, :2].tolist() == [[0, 1], [2, 0], [0, 4]]
    assert fleet.choices["demand"].tolist() == [2, 2, 1]
    assert fleet.capacity is None
    assert lk.fleet_from_trace(LOG, demand="size").choices["demand"].tolist() == [4, 2, 4]
    assert lk.fleet_from_trace(LOG, demand="work").choices["demand"].tolist() == [3.5, 4, 0]
    unsized = LOG.drop(columns="size")
    assert lk.fleet_from_trace(unsized, demand="size").choices["demand"].tolist() == [2, 2, 1]
    assert lk.fleet_from_trace(unsized, demand="work").choices["demand"].tolist() == [1.5, 11, 0]


def test_whole_numbers_are_sorted_and_text_is_not(tmp_path):
    log = table([(10, -2), (7, 10)])
    assert lk.fleet_from_trace(log).names.tolist() == [-2, 7, 10]
    assert lk.fleet_from_trace(log).options.tolist() == [[2, 0], [1, 2]]
    log.to_csv(tmp_path / "log.csv", index=False)
    assert lk.fleet_from_trace(tmp_path / "log.csv").digest == lk.fleet_from_trace(log).digest
    text = log.astype({"option_1": str, "option_2": str})
    assert lk.fleet_from_trace(text).names.tolist() == ["10", "-2", "7"]
    text.replace("7", "07").to_csv(tmp_path / "log.csv", index=False)
    assert lk.fleet_from_trace(tmp_path / "log.csv").names.tolist() == ["10", "-2", "07"]
    mixed = table([("a", 7), (7, "b")])
    assert lk.fleet_from_trace(mixed).names.tolist() == ["a", 7, "b"]


@given(
    st.lists(
        st.lists(st.sampled_from("abcdef"), min_size=1, max_size=4, unique=True), min_size=1, max_size=30
    ),
    st.randoms(use_true_random=False),
)
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=25, deadline=None)
def test_it_agrees_with_counting_by_hand_in_every_format(tmp_path, rows, random):
    rows = [tuple(row) for row in [*rows, "ab"]]
    size = [random.choice([0.1, 0.7, 3]) for _ in rows]
    log = table(rows, size=size, placed=[random.choice("abcdefg") for _ in rows])
    order, tasks, work = [], Counter(), defaultdict(float)
    for row, amount, placed in zip(rows, size, log["placed"], strict=True):
        order += [name for name in dict.fromkeys((*row, placed)) if name not in order]
        if len(row) > 1:
            tasks[frozenset(row)] += 1
            work[frozenset(row)] += amount
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        fleets = [lk.fleet_from_trace(log, demand=demand) for demand in ("tasks", "size")]
        log.to_csv(tmp_path / "log.csv", index=False)
        log.to_parquet(tmp_path / "log.parquet")
        for name in ("log.csv", "log.parquet"):
            assert lk.fleet_from_trace(tmp_path / name, demand="size").digest == fleets[1].digest
    assert fleets[0].names.tolist() == order
    assert sets_of(fleets[0]) == tasks
    assert sets_of(fleets[1]) == work  # to the bit: summed in the order of the rows
    assert list(sets_of(fleets[0])) == list(tasks)
    single = sum(len(row) == 1 for row in rows)
    assert len(caught) == 4 * (single > 0)
    if single:
        words = f"trace: {single} of {len(rows)} tasks have a single option and are left out of the demand."
        assert str(caught[0].message) == words


def test_a_long_log_in_many_pieces():
    rows, draw = 200_000, np.random.default_rng(3)
    first = np.sort(draw.integers(0, 3_000, rows))  # new servers and choices all along
    other = (first + draw.integers(1, 4, rows)) % 3_000
    swap = draw.random(rows) < 0.5
    log = pd.DataFrame({
        "time": np.arange(rows), "size": draw.random(rows),
        "option_1": np.where(swap, other, first), "option_2": np.where(swap, first, other),
    })  # fmt: skip
    fleet = lk.fleet_from_trace(log, demand="size")
    low, high = np.minimum(first, other), np.maximum(first, other)
    expected = log["size"].groupby([low, high]).agg(lambda sizes: sum(sizes.tolist(), 0.0))
    held = np.sort(fleet.names.to_numpy()[fleet.options.astype(np.int64)], axis=1)
    index = pd.MultiIndex.from_arrays(held.T)
    np.testing.assert_array_equal(expected.reindex(index).to_numpy(), fleet.demand)
    assert len(fleet) == 3_000
    assert len(fleet.demand) == len(expected)


def test_capacities():
    assert lk.fleet_from_trace(LOG, capacity=3).capacity.tolist() == [3] * 5
    by_name = {"a": 1, "b": 2, "c": 3, "d": 4, "e": 5.5}
    for given_as in (by_name, pd.Series(by_name), pd.Series(by_name)[::-1]):
        assert lk.fleet_from_trace(LOG, capacity=given_as).capacity.tolist() == [2, 1, 3, 5.5, 4]


BY_NAME = pd.Series({"a": 1, "b": 2, "c": 3, "d": 4, "e": 5})


@pytest.mark.parametrize(
    ("log", "options", "words"),
    [
        (LOG, {"demand": "sizes"}, r"demand is 'sizes'; did you mean 'size'"),
        (
            LOG.drop(columns="duration"),
            {"demand": "work"},
            r"demand is 'work' and trace has no column 'durat",
        ),
        (table([("a",), ("b",)]), {}, r"trace has no row of two options or more; there is no choice"),
        (table([("a", "b"), (None, None)]), {}, r"trace row 2: the choice has 0 options"),
        (table([("a", "b"), ("a", "a")]), {}, r"trace row 2: server 'a' is an option twice"),
        (
            table([("a", "b"), ("a", 2.5)]),
            {},
            r"trace row 2: option_2 is 2\.5; name servers by text or whole",
        ),
        (
            table([("a", "b"), ("a", True)]),
            {},
            r"trace row 2: option_2 is True; name servers by text or whole",
        ),
        (table([("a", "b")], placed=[None]), {}, r"trace row 1: placed is blank"),
        (LOG.assign(size=0), {"demand": "size"}, r"every demand is 0"),
        (LOG, {"capacity": 0}, r"capacity is 0; give a number above 0"),
        (LOG, {"capacity": "much"}, r"capacity is 'much'; give a finite number"),
        (LOG, {"capacity": BY_NAME[1:]}, r"capacity has no number for server 'a' of the trace; add it"),
        (LOG, {"capacity": {**BY_NAME, "x": 1}}, r"capacity names 'x', which is no server of the trace"),
        (LOG, {"capacity": {**BY_NAME, "d": -1}}, r"capacity of server 'd' is -1; give a number above 0"),
        (LOG, {"capacity": pd.concat([BY_NAME, BY_NAME[:1]])}, r"capacity has two numbers for server 'a'"),
    ],
)
def test_what_cannot_be_a_fleet_is_refused(log, options, words):
    with pytest.raises(lk.InputError, match=words):
        lk.fleet_from_trace(log, **options)
