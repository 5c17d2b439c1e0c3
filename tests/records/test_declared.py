"""A parameters cell declares names and types; anything else is refused in one sentence."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk
from labkit.records.declared import Parameter, read_notebook, split_list
from tests.records.tiny import write_notebook


@pytest.mark.parametrize(
    ("kind", "value", "wanted"),
    [
        ("int", 1.0, "a whole number"),
        ("int", True, "a whole number"),
        ("int", "1", "a whole number"),
        ("int", None, "a whole number"),
        ("float", "1", "a number"),
        ("float", True, "a number"),
        ("float", float("nan"), "a finite number"),
        ("float", float("inf"), "a finite number"),
        ("str", 1, "a text"),
        ("bool", 1, "true or false"),
        ("list", 1, "a list"),
        ("list", {}, "a list"),
    ],
)
def test_a_value_of_another_type_is_refused(kind, value, wanted):
    with pytest.raises(lk.InputError, match=f"size is .*; give {wanted}"):
        Parameter("size", kind, False, None).checked(value)


@pytest.mark.parametrize(
    ("kind", "value", "taken"),
    [("int", 2, 2), ("float", 2, 2.0), ("str", "", ""), ("bool", False, False), ("list", ["a"], ["a"])],
)
def test_a_value_of_its_type_is_taken(kind, value, taken):
    found = Parameter("size", kind, False, None).checked(value)
    assert (found, type(found)) == (taken, type(taken))


def test_none_is_taken_where_declared():
    assert Parameter("limit", "float", True, None).checked(None) is None
    with pytest.raises(lk.InputError, match="limit is None"):
        Parameter("limit", "float", False, 1.0).checked(None)


@given(st.lists(st.text("abc=.0-()", min_size=1).filter(lambda text: "(" not in text and ")" not in text)))
def test_a_text_splits_at_its_commas(items):
    assert split_list(", ".join(items)) == items


def test_commas_in_parentheses_belong_to_the_item():
    assert split_list("a, tree(x=1, y=2) ,b") == ["a", "tree(x=1, y=2)", "b"]


def test_an_empty_list_is_refused_unless_it_is_the_default():
    with pytest.raises(lk.InputError, match="policies is an empty list; give at least one item"):
        Parameter("policies", "list", False, ["a"]).checked([])
    assert Parameter("runs", "list", False, []).checked([]) == []


def test_a_path_must_exist(tmp_path):
    assert Parameter("fleet", "str", False, "x").checked(str(tmp_path)) == str(tmp_path)
    with pytest.raises(lk.InputError, match=r"fleet is .*absent.*; nothing is there"):
        Parameter("fleet", "str", False, "x").checked(str(tmp_path / "absent"))
    with pytest.raises(lk.InputError, match="trace_path is ''; nothing is there"):
        Parameter("trace_path", "str", False, "x").checked("")


@pytest.mark.parametrize(
    "line", ["tasks = 5", "tasks: int", "tasks: dict = {}", "tasks: int = f()", "print()"]
)
def test_a_parameters_cell_holds_declarations_only(tmp_path, line):
    path = write_notebook(tmp_path / "n.ipynb", "x = 1", parameters=f"a: int = 1\n{line}")
    with pytest.raises(lk.InputError, match=r"parameters cell, line 2: .*; write name: type = literal"):
        read_notebook(path)


def test_exactly_one_cell_is_tagged(tmp_path):
    path = write_notebook(tmp_path / "n.ipynb", "x = 1")
    path.write_text(path.read_text().replace('"parameters"', '"others"'))
    with pytest.raises(lk.InputError, match="has 0 cells tagged 'parameters'; give the tag to exactly one"):
        read_notebook(path)


def test_what_is_no_notebook_is_refused_by_name(tmp_path):
    (tmp_path / "n.ipynb").write_text("{")
    with pytest.raises(lk.InputError, match=r"notebook .*n\.ipynb cannot be read as a notebook"):
        read_notebook(tmp_path / "n.ipynb")


def test_modules_beside_a_notebook_are_part_of_its_digest(tmp_path):
    """What it imports from its own folder can change its results; prose and other files there cannot."""
    path = write_notebook(tmp_path / "n.ipynb", "%matplotlib inline\nimport helper\nfrom parts.one import f")
    digests = [read_notebook(path).digest]
    (tmp_path / "other.py").write_text("x = 1")
    assert read_notebook(path).digest == digests[0]
    (tmp_path / "parts").mkdir()
    for name, text in (
        ("helper.py", "import deeper"),
        ("helper.py", "import deeper  # changed"),
        ("deeper.py", "x = 1"),
        ("deeper.py", "x = 2"),
        ("parts/one.py", "def f(): pass"),
    ):
        (tmp_path / name).write_text(text)
        digests.append(read_notebook(path).digest)
    assert len(set(digests)) == len(digests)
