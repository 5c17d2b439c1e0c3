import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk
from tests.fleet.strategies import tables

SERVERS = pd.DataFrame({"server": [3, 1, 2], "capacity": [1.0, 2.0, 1.0]})
CHOICES = pd.DataFrame({"option_1": [3, 1], "option_2": [1, 2], "demand": [1.0, 0.0]})
DIGEST = lk.Fleet(SERVERS, CHOICES).digest


@pytest.mark.parametrize("names", ["int8", "uint32", "Int64", "int64[pyarrow]", "object", "category"])
@pytest.mark.parametrize("amounts", ["float32", "int64", "Float64", "object", "double[pyarrow]"])
def test_the_type_of_a_column_does_not_show(names, amounts):
    servers = SERVERS.astype({"server": names, "capacity": amounts})
    choices = CHOICES.astype({"option_1": names, "option_2": names, "demand": amounts})
    assert lk.Fleet(servers, choices).digest == DIGEST


@pytest.mark.parametrize("dtype", ["str", "object", "string[python]", "string[pyarrow]", "category"])
def test_the_type_of_text_does_not_show(dtype):
    def text(table, *columns):
        return table.assign(**{label: table[label].astype(str).astype(dtype) for label in columns})

    fleet = lk.Fleet(text(SERVERS, "server"), text(CHOICES, "option_1", "option_2"))
    plain = lk.Fleet(SERVERS.astype({"server": str}), CHOICES.astype({"option_1": str, "option_2": str}))
    assert fleet.digest == plain.digest
    assert fleet.digest != DIGEST


@pytest.mark.parametrize(
    ("servers", "choices"),
    [
        (SERVERS.assign(server=[3, 1, 20]), CHOICES.assign(option_2=[1, 20])),
        (SERVERS.assign(capacity=[1.0, 2.0, np.nextafter(1, 2)]), CHOICES),
        (SERVERS, CHOICES.assign(demand=[1.0, 1e-100])),
        (SERVERS, CHOICES.assign(demand=[2.0, 0.0])),
        (SERVERS, CHOICES.assign(option_2=[2, 2])),
        (SERVERS[::-1], CHOICES),
        (SERVERS, CHOICES[::-1]),
        (SERVERS, CHOICES.rename(columns={"option_1": "option_2", "option_2": "option_1"})),
        (SERVERS.drop(columns="capacity"), CHOICES),
        (SERVERS, CHOICES.drop(columns="demand")),
    ],
)
def test_every_change_shows(servers, choices):
    assert lk.Fleet(servers, choices).digest != DIGEST


@given(tables(), tables())
def test_equal_digests_mean_equal_fleets(one, other):
    first, second = lk.Fleet(*one[:2]), lk.Fleet(*other[:2])
    same = (
        [(type(name), name) for name in one[2]] == [(type(name), name) for name in other[2]]
        and one[3] == other[3]
        and first.servers["capacity"].equals(second.servers["capacity"])
        and first.choices["demand"].equals(second.choices["demand"])
    )
    assert (first.digest == second.digest) == same


@given(st.lists(st.text(max_size=3).filter(str.strip), min_size=3, max_size=6, unique=True))
def test_where_one_name_ends_and_the_next_begins_shows(names):
    choices = pd.DataFrame(
        {"option_1": pd.Series(names[:1], dtype=object), "option_2": pd.Series(names[-1:], dtype=object)}
    )
    fleet = lk.Fleet(pd.DataFrame({"server": pd.Series(names, dtype=object)}), choices)
    moved = [names[0] + names[1][:1], names[1][1:] or "?", *names[2:]]
    if len(set(moved)) == len(moved) and moved != names and all(name.strip() for name in moved):
        choices = choices.assign(option_1=pd.Series(moved[:1], dtype=object))
        assert (
            lk.Fleet(pd.DataFrame({"server": pd.Series(moved, dtype=object)}), choices).digest != fleet.digest
        )


def test_complete_fleets_differ_by_their_law():
    fleets = [
        lk.complete(9),
        lk.complete(8),
        lk.complete(9, options=3),
        lk.complete(9, distinct=False),
        lk.ring(9),
    ]
    assert len({fleet.digest for fleet in fleets}) == len(fleets)
    assert lk.complete(9).digest == lk.complete(9, 2, True).digest
    assert len(DIGEST) == 64
