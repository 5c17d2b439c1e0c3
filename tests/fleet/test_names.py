import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk
from labkit.fleet import names as module
from labkit.fleet.names import ABSENT, UNKNOWN, NameMap, checked_names
from labkit.fleet.tables import table_source
from tests.fleet.strategies import plain_text, whole

SOURCE = table_source("servers")
near = st.integers(-30, 30)


def map_of(names, dtype=None):
    return NameMap(checked_names(pd.Series(names, dtype=dtype), SOURCE), SOURCE)


@pytest.mark.parametrize("hashed", [1, 10**9])
@given(data=st.data())
def test_every_way_of_looking_up_agrees_with_a_dictionary(hashed, data):
    kind = data.draw(st.sampled_from([near, whole, plain_text, plain_text | near]))
    names = data.draw(st.lists(kind, min_size=1, max_size=20, unique_by=lambda name: (type(name), name)))
    asked = data.draw(st.lists(kind | st.sampled_from(names) | st.sampled_from([None, "", " "]), max_size=20))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "HASHED", hashed)
        found = map_of(names, object).positions(pd.Series(asked, dtype=object))
    place = {name: row for row, name in enumerate(names)}
    expected = [
        ABSENT if one is None or (isinstance(one, str) and not one.strip()) else place.get(one, UNKNOWN)
        for one in asked
    ]
    assert found.tolist() == expected


@pytest.mark.parametrize(
    "names", [range(5), [3, 1, 2, 0, 4], [-7, -9, -8], [10**12, 5, -(10**12)], [2**63 - 1, -(2**63)]]
)
@pytest.mark.parametrize("dtype", ["int64", "Int64", "object", "category"])
def test_integer_columns_of_any_type_find_the_same_servers(names, dtype):
    servers = map_of(list(names), "int64")
    found = servers.positions(pd.Series(list(names)[::-1], dtype=dtype))
    assert found.tolist() == list(range(len(found)))[::-1]
    assert map_of(list(names), dtype).names.tolist() == list(names)


@pytest.mark.parametrize(
    "dtype", ["int8", "uint8", "int16", "uint32", "uint64", "Int32", "float64", "float32"]
)
def test_narrow_and_float_columns_find_the_same_servers(dtype):
    servers = map_of([0, 1, 5, 100])
    assert servers.positions(pd.Series([100, 5, 2, 0], dtype=dtype)).tolist() == [3, 2, UNKNOWN, 0]


def test_numbers_that_do_not_fit_name_no_server():
    servers = map_of([-1, 0, 1])
    assert servers.positions(pd.Series([2**64 - 1, 1], dtype="uint64")).tolist() == [UNKNOWN, 2]
    large = map_of([2**53, 2**53 + 1])
    assert large.positions(pd.Series([2.0**53, 2.0**54])).tolist() == [0, UNKNOWN]


@pytest.mark.parametrize("hashed", [1, 10**9])
def test_doubled_text_is_found_either_way(hashed, monkeypatch):
    monkeypatch.setattr(module, "HASHED", hashed)
    with pytest.raises(lk.InputError, match="servers row 4: server 'b' was named before, at servers row 2"):
        map_of(["a", "b", "c", "b"])


@pytest.mark.parametrize("names", [[5, 6, 5], [5, 10**9, 5], [5, 5, 5, 5]])
def test_doubled_numbers_are_found_either_way(names):
    with pytest.raises(lk.InputError, match=r"server 5 was named before, at servers row 1"):
        map_of(names)


def test_hashes_that_collide_do_not_mix_servers_up(monkeypatch):
    monkeypatch.setattr(module, "HASHED", 1)
    monkeypatch.setattr(
        pd.util,
        "hash_array",
        lambda values, categorize: np.array([len(str(value)) for value in values], dtype=np.uint64),
    )
    assert map_of(["ab", "cd"]).positions(pd.Series(["cd", "ab", "xy"])).tolist() == [1, 0, UNKNOWN]
    assert map_of(["ab", "c"]).positions(pd.Series(["c", "xy", "ab", None])).tolist() == [
        1,
        UNKNOWN,
        0,
        ABSENT,
    ]
