import pickle

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk
from labkit.fleet.model import ABSENT
from tests.fleet.strategies import tables


def simple(**changes):
    servers = {"server": ["a", "b", "c"], "capacity": [1.0, 2.0, 3.0]}
    choices = {"option_1": ["a", "b"], "option_2": ["b", "c"], "demand": [1.0, 2.0]}
    for label, values in changes.items():
        (servers if label in ("server", "capacity", "capcity") else choices)[label] = values
    drop = [label for label, values in changes.items() if values is None]
    return (
        pd.DataFrame({label: values for label, values in servers.items() if label not in drop}),
        pd.DataFrame({label: values for label, values in choices.items() if label not in drop}),
    )


@given(tables())
def test_positions_name_what_the_tables_name(drawn):
    servers, choices, names, chosen = drawn
    fleet = lk.Fleet(servers, choices)
    assert [(type(name), name) for name in fleet.names.tolist()] == [(type(name), name) for name in names]
    assert len(fleet) == len(names)
    held = [[fleet.names[place] for place in row if place != ABSENT] for row in fleet.options]
    assert held == chosen


@given(tables())
def test_the_checked_tables_make_the_same_fleet(drawn):
    fleet = lk.Fleet(drawn[0], drawn[1])
    again = lk.Fleet(fleet.servers, fleet.choices)
    assert again.digest == fleet.digest
    assert repr(again) == repr(fleet)


@given(tables(), st.randoms(use_true_random=False))
def test_blanks_may_stand_anywhere_in_a_row(drawn, random):
    servers, choices, _, chosen = drawn
    width = max(len(row) for row in chosen) + 1
    rows = []
    for row in chosen:
        gaps = sorted(random.sample(range(width), len(row)))
        rows.append(
            [
                row[gaps.index(place)] if place in gaps else random.choice([None, "", " ", np.nan])
                for place in range(width)
            ]
        )
    spread = pd.DataFrame(rows, columns=[f"option_{place + 1}" for place in range(width)], dtype=object)
    if "demand" in choices:
        spread["demand"] = choices["demand"]
    assert lk.Fleet(servers, spread).digest == lk.Fleet(servers, choices).digest


def test_totals_and_defaults():
    fleet = lk.Fleet(*simple())
    assert fleet.total_capacity == 6.0
    assert fleet.capacity.tolist() == [1, 2, 3]
    assert fleet.demand.tolist() == [1, 2]
    plain = lk.Fleet(*simple(capacity=None, demand=None))
    assert plain.capacity is None
    assert plain.demand is None
    assert plain.equal_demand == 1.0
    assert plain.total_capacity == 3.0
    assert plain.servers["capacity"].tolist() == [1, 1, 1]
    assert plain.choices["demand"].tolist() == [1, 1]


def test_equal_demands_keep_their_amount():
    fleet = lk.Fleet(*simple(demand=[5, 5]))
    assert fleet.demand is None
    assert fleet.choices["demand"].tolist() == [5.0, 5.0]
    assert fleet.digest != lk.Fleet(*simple(demand=[1, 1])).digest


def test_a_whole_number_and_its_text_are_two_servers():
    servers = pd.DataFrame({"server": pd.Series([7, "7", "b"], dtype=object)})
    choices = pd.DataFrame(
        {"option_1": pd.Series([7, "7"], dtype=object), "option_2": pd.Series(["b", 7], dtype=object)}
    )
    fleet = lk.Fleet(servers, choices)
    assert fleet.options.tolist() == [[0, 2], [1, 0]]
    assert fleet.choices["option_1"].tolist() == [7, "7"]


def test_blanks_that_made_an_integer_column_float_are_understood():
    servers = pd.DataFrame({"server": [7, 8, 9]})
    choices = pd.DataFrame({"option_1": [7, 8], "option_2": [8, 9], "option_3": [9, None]})
    assert choices["option_3"].dtype == np.float64
    fleet = lk.Fleet(servers, choices)
    assert fleet.options.tolist() == [[0, 1, 2], [1, 2, ABSENT]]
    assert repr(fleet) == "Fleet(3 servers, 2 choices of 2 to 3 options, capacity 1 each, demand 1 each)"


def test_a_blank_third_option_throughout_is_no_option():
    fleet = lk.Fleet(*simple(option_3=[None, None]))
    assert fleet.options.shape == (2, 2)
    assert fleet.digest == lk.Fleet(*simple()).digest


def test_parallel_choices_isolated_servers_and_several_parts_stay():
    servers = pd.DataFrame({"server": range(6)})
    choices = pd.DataFrame({"option_1": [0, 1, 0, 3], "option_2": [1, 0, 1, 4]})
    fleet = lk.Fleet(servers, choices)
    assert fleet.choices[["option_1", "option_2"]].to_numpy().tolist() == [[0, 1], [1, 0], [0, 1], [3, 4]]
    assert len(fleet) == 6


@pytest.mark.parametrize("column", ["server", "capacity", "option_1", "demand"])
def test_changing_a_table_does_not_change_the_fleet(column):
    given_tables = simple()
    fleet = lk.Fleet(*given_tables)
    before = fleet.digest
    names, shown = fleet.names.tolist(), fleet.choices["option_1"].tolist()
    for table in [*given_tables, fleet.servers, fleet.choices]:
        if column in table:
            table.loc[0, column] = "zz" if column in ("server", "option_1") else 77.0
    assert lk.Fleet(fleet.servers, fleet.choices).digest == before
    assert (fleet.names.tolist(), fleet.choices["option_1"].tolist()) == (names, shown)
    assert fleet.capacity.tolist() == [1, 2, 3]
    assert fleet.demand.tolist() == [1, 2]


def test_the_arrays_are_contiguous_and_cannot_be_written_even_after_pickling():
    fleet = lk.Fleet(*simple())
    for one in (fleet, pickle.loads(pickle.dumps(fleet))):
        assert one.options.dtype == np.uint32
        for values in (one.options, one.capacity, one.demand):
            assert values.flags.c_contiguous
            assert not values.flags.writeable


def test_row_labels_do_not_matter():
    servers, choices = simple()
    fleet = lk.Fleet(servers.set_axis([9, 9, 4]), choices.set_axis(["x", "y"]))
    assert fleet.digest == lk.Fleet(servers, choices).digest


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"server": None}, r"servers has no column 'server'; its columns are 'capacity'"),
        ({"option_2": None}, r"choices has no column 'option_2'"),
        ({"capcity": [1, 2, 3]}, r"servers has an unknown column 'capcity'; did you mean 'capacity'"),
        ({"option_4": ["a", "a"]}, r"unknown column 'option_4'.*: option_3 is missing"),
        ({"weight": [1, 2]}, r"choices has an unknown column 'weight'"),
        ({"server": ["a", "b", "a"]}, r"servers row 3: server 'a' was named before, at servers row 1"),
        ({"server": ["a", "b", None]}, r"servers row 3: server is blank"),
        ({"server": ["a", "b", " "]}, r"servers row 3: server is blank"),
        ({"server": [1.0, 2.0, 3.0]}, r"servers row 1: server is 1\.0; name servers by text"),
        ({"server": [1, 2, None]}, r"servers row 1: server is 1\.0|servers row 3: server is blank"),
        ({"server": [True, False, True]}, r"servers row 1: server is True"),
        ({"server": ["a", "b", True]}, r"servers row 3: server is True"),
        ({"server": ["a", "b", ("c",)]}, r"servers row 3: server is \('c',\)"),
        ({"server": ["a", "b", 2**63]}, r"servers row 3: server is 9223372036854775808; "),
        ({"server": [1, 2, 2**63]}, r"servers row 3: server is 9223372036854775808; "),
        ({"capacity": [1, 0, 1]}, r"servers row 2: capacity is 0; give a finite number above 0"),
        ({"capacity": [1, -1, 1]}, r"servers row 2: capacity is -1; "),
        ({"capacity": [1, 1, np.nan]}, r"servers row 3: capacity is blank; "),
        ({"capacity": [1, np.inf, 1]}, r"servers row 2: capacity is inf; "),
        ({"capacity": ["1", "2", "3"]}, r"servers row 1: capacity is '1'; "),
        ({"capacity": [True, True, True]}, r"servers row 1: capacity is True; "),
        ({"capacity": [1, 1j, 1]}, r"servers row 1: capacity is \(1\+0j\); "),
        ({"capacity": [1e308, 1e308, 1e308]}, r"servers row 1: capacity is 1e\+308; .* to 1e\+150\)"),
        ({"demand": [1, -2]}, r"choices row 2: demand is -2; give a finite number of at least 0"),
        ({"demand": [np.nan, 1]}, r"choices row 1: demand is blank; "),
        ({"demand": [np.inf, 1]}, r"choices row 1: demand is inf; "),
        ({"demand": [0, 0]}, r"choices: every demand is 0; "),
        ({"demand": [1e308, 1.1e308]}, r"choices row 1: demand is 1e\+308"),
        ({"option_2": ["b", "x"]}, r"choices row 2: option_2 is 'x', which names no server; "),
        ({"server": ["east", "b", "c"], "option_1": ["eats", "b"]}, r"is 'eats'.*did you mean 'east'\?"),
        ({"option_2": ["b", None]}, r"choices row 2: the choice has 1 option \('b'\); give at least two"),
        ({"option_1": [None, "b"], "option_2": [None, "c"]}, r"row 1: the choice has 0 options \(none\)"),
        ({"option_2": ["b", "b"]}, r"choices row 2: server 'b' is an option twice"),
        ({"option_3": [None, "b"]}, r"choices row 2: server 'b' is an option twice"),
        ({"option_2": [1, 2]}, r"choices row 1: option_2 is 1, which names no server"),
        ({"option_2": [1.5, 2]}, r"choices row 1: option_2 is 1\.5, which names no server"),
        ({"option_2": [True, False]}, r"choices row 1: option_2 is True, which names no server"),
    ],
)  # fmt: skip
def test_a_wrong_table_is_refused_in_one_sentence(changes, words):
    with pytest.raises(lk.InputError, match=words):
        lk.Fleet(*simple(**changes))


@pytest.mark.parametrize(
    ("option", "words"),
    [
        (
            "7",
            r"option_2 is '7', which names no server; there is a server 7: text and whole numbers",
        ),
        (True, r"option_2 is True, which names no server"),
        (7.5, r"option_2 is 7\.5, which names no server"),
        (2**64, r"option_2 is 18446744073709551616, which names no server"),
        (np.inf, r"option_2 is inf, which names no server"),
    ],
)
def test_among_whole_numbers_other_kinds_name_no_server(option, words):
    servers = pd.DataFrame({"server": [1, 7, 8]})
    choices = pd.DataFrame({"option_1": [7, 8], "option_2": pd.Series([8, option], dtype=object)})
    with pytest.raises(lk.InputError, match=r"choices row 2: " + words):
        lk.Fleet(servers, choices)


def test_empty_tables_and_other_objects_are_refused():
    servers, choices = simple()
    with pytest.raises(lk.InputError, match="servers has no rows"):
        lk.Fleet(servers[:0], choices)
    with pytest.raises(lk.InputError, match="choices has no rows"):
        lk.Fleet(servers, choices[:0])
    with pytest.raises(lk.InputError, match="choices is a dict; give a pandas DataFrame"):
        lk.Fleet(servers, {"option_1": []})
    with pytest.raises(lk.InputError, match="two columns named 'server'"):
        lk.Fleet(pd.concat([servers, servers], axis=1), choices)


def test_the_shown_line_names_sizes_and_amounts():
    assert (
        repr(lk.Fleet(*simple()))
        == "Fleet(3 servers, 2 choices of 2 options, capacity 1 to 3, demand 1 to 2)"
    )
