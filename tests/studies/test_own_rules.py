"""One call makes a study of one's own rules: its two files, and everything that it refuses."""

import importlib.util
import json
import math
import os
import types
from math import floor as round_down

import numba
import numpy as np
import pytest
from numba import njit as fast

import labkit as lk
from labkit import policy as as_rule
from labkit.records.declared import read_notebook
from labkit.records.project import find_notebook
from labkit.studies.model import read_study
from labkit.studies.rule_cells import cell_of_rules
from tests.test_notebooks_clean import faults_of

FLEET = "experiments/demo"
LEAST = 2
TABLE = np.array([0.5, 1.5])
HUGE = np.zeros(1_001)
tasks = 3


@numba.njit
def more(number):
    return math.floor(number) + LEAST


@lk.policy
def stay_first(options, loads, capacity, coin):
    """Stay with the first option."""
    return 1 if loads[options[1]] + more(TABLE[1]) <= loads[options[0]] else 0


@lk.policy
def always_last(options, loads, capacity, coin):
    return len(options) - 1


def write(folder, rules=stay_first, name="mine", **values):
    return lk.write_study(name, rules, **{"fleet": FLEET, "folder": folder, **values})


def test_the_study_is_what_was_asked_for(tmp_path):
    made = write(tmp_path, [stay_first, always_last], against=["one-choice"], risk=0.05, report_every=[0, 50])
    assert made.new
    study = read_study(made.file)
    assert [path.name for path in (made.file, made.notebook)] == ["mine.toml", "mine.ipynb"]
    assert study.title == "stay-first and always-last against one-choice"
    assert study.parameters["policies"] == ["stay-first", "always-last", "one-choice"]
    assert study.parameters["tasks"] == 9_600
    assert study.parameters["replicates"] == 400
    assert study.grid == {"report_every": [0, 50]}
    assert study.answer_parameters == {"risk": 0.05, "baseline": "one-choice"}
    assert len(study.points) == 2
    assert faults_of(made.notebook) == []
    assert made.command == f"labkit run {made.file}"
    assert read_notebook(made.notebook).parameters["policies"].default == study.parameters["policies"]


def test_numbers_of_numpy_and_one_rule_alone_are_taken(tmp_path):
    study = read_study(
        write(tmp_path, always_last, against="one-choice", tasks=np.int64(300), entropy=np.int64(3)).file
    )
    assert study.parameters["tasks"] == 300
    assert study.parameters["entropy"] == 3
    assert study.parameters["policies"] == ["always-last", "one-choice"]


def test_a_name_that_needs_care_stays_what_it_is(tmp_path):
    made = write(tmp_path, always_last, title='A "title"\twith \\ and \x7f')
    assert read_study(made.file).title == 'A "title"\twith \\ and \x7f'


def test_the_rules_cell_stands_alone(tmp_path):
    text, lines = cell_of_rules([stay_first, always_last])
    assert text.startswith(
        "import math\n\nimport numba\nimport numpy as np\n\nimport labkit as lk\n\nTABLE = "
    )
    assert lines["TABLE"] == 'TABLE = np.array([0.5, 1.5], dtype="float64")'
    alone = as_module(text, tmp_path)
    rng = np.random.default_rng(1)
    for _ in range(50):
        case = (np.array([0, 1]), rng.integers(0, 9, 2), np.ones(2), rng.random())
        assert alone.stay_first(*case) == stay_first(*case)
        assert alone.always_last(*case) == 1


def make(factor):
    @fast
    def inner(number, by=factor):
        return number * factor + by - factor

    return inner


def make_twice(factor):
    compiled = fast

    @compiled
    def inner(number, by=factor):
        return number * by

    return inner


def by_hand(number):
    return number


triple, double, early = make(3), make(2), make_twice(2)
called_otherwise = more
by_call = numba.njit(by_hand)
own_module = types.ModuleType("own_module")
own_module.LIMIT = 3


@as_rule
def of_aliases(options, loads, capacity, coin):
    return triple(called_otherwise(round_down(loads[0])))


@lk.policy
def of_double(options, loads, capacity, coin):
    return double(1)


@lk.policy
def of_early(options, loads, capacity, coin):
    return early(1)


@lk.policy
def of_module(options, loads, capacity, coin):
    return 1 if loads[0] > own_module.LIMIT else 0


@lk.policy
def of_call(options, loads, capacity, coin):
    return by_call(0)


if True:

    @lk.policy
    def spaced (options, loads, capacity, coin):  # fmt: skip
        """Begin further left

in the second line."""  # fmt: skip
        return 0


def test_names_that_a_cell_gave_itself_stay_what_they_are(tmp_path):
    text, lines = cell_of_rules([of_aliases, spaced])
    assert lines["as_rule"] == "from labkit import policy as as_rule"
    assert lines["fast"] == "from numba import njit as fast"
    assert lines["round_down"] == "from math import floor as round_down"
    alone = as_module(text, tmp_path)
    case = (np.array([0, 1]), np.array([1, 2]), np.ones(2), 0.5)
    assert alone.of_aliases(*case) == of_aliases(*case) == 9
    assert alone.spaced(*case) == 0
    assert alone.spaced.name == "spaced"


def as_module(text, folder):
    file = folder / "alone.py"
    file.write_text(text)
    spec = importlib.util.spec_from_file_location("alone", file)
    alone = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(alone)
    return alone


@pytest.mark.parametrize(
    ("rules", "sentence"),
    [
        ([of_aliases, of_double], "name factor means one thing to one rule and another to another"),
        ([of_early], "inner, whose decorators, defaults or annotations name compiled, which means nothing"),
        ([of_module], "takes own_module from outside, a module that is not installed"),
        ([of_call], "takes by_call from outside, compiled by a call; write @numba.njit above def by_hand"),
    ],
)
def test_what_a_cell_cannot_say_is_refused(rules, sentence):
    with pytest.raises(lk.InputError, match=sentence):
        cell_of_rules(rules)


def test_a_rule_made_by_a_call_is_refused():
    with pytest.raises(
        lk.InputError, match=r"policy bare was not made by writing @lk\.policy above def bare"
    ):
        cell_of_rules([lk.policy(bare)])


def test_nothing_is_written_over_silently(tmp_path):
    made = write(tmp_path)
    texts = {path: path.read_bytes() for path in (made.file, made.notebook)}
    again = write(tmp_path)
    assert not again.new
    assert "there already, unchanged" in repr(again)
    with pytest.raises(lk.InputError, match=r"study mine is there already and differs .*mine\.ipynb"):
        write(tmp_path, always_last)
    assert {path: path.read_bytes() for path in texts} == texts
    assert write(tmp_path, always_last, replace=True).new
    assert "always_last" in made.notebook.read_text()
    # somebody else's study of that name
    (tmp_path / "theirs.toml").write_text('notebook = "headroom"\nreplicates = 400\nentropy = 1\n')
    for replace in (False, True):
        with pytest.raises(lk.InputError, match=r"study theirs .*choose another name"):
            write(tmp_path, name="theirs", replace=replace)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["mine.ipynb", "mine.toml", "theirs.toml"]


def test_what_was_not_made_here_is_never_written_over(tmp_path):
    shipped = find_notebook("headroom").read_text(encoding="utf-8")
    (tmp_path / "lone.ipynb").write_text(shipped)
    (tmp_path / "pair.ipynb").write_text(shipped)
    (tmp_path / "pair.toml").write_text('notebook = "pair.ipynb"\nreplicates = 400\nentropy = 1\n')
    (tmp_path / "half.toml").symlink_to(tmp_path / "nowhere" / "half.toml")
    before = {path: path.read_bytes() for path in tmp_path.iterdir() if path.exists()}
    for name in ("lone", "pair", "half"):
        with pytest.raises(lk.InputError, match=f"study {name} .* was not made from rules of your own"):
            write(tmp_path, always_last, name, replace=True)
    assert {path: path.read_bytes() for path in tmp_path.iterdir() if path.exists()} == before


@lk.policy
def of_parameter(options, loads, capacity, coin):
    return 1 if loads[options[0]] > tasks else 0


@lk.policy
def of_huge(options, loads, capacity, coin):
    return 1 if HUGE[0] > 0 else 0


@lk.policy
def network(options, loads, capacity, coin):
    return 0


@lk.policy
def faulty(options, loads, capacity, coin):
    return 2


@lk.policy
def broken(options, loads, capacity, coin):
    return unknown_thing  # noqa: F821


def bare(options, loads, capacity, coin):
    return 0


@pytest.mark.parametrize(
    ("values", "sentence"),
    [
        ({"name": "../mine"}, "study is '../mine'; a study's name begins with"),
        ({"rules": bare}, "rules is <function bare"),
        ({"rules": []}, r"rules is \[\]; give a rule made with @lk.policy"),
        ({"rules": [always_last, always_last]}, "rules holds always-last twice"),
        ({"rules": faulty}, r"policy faulty picks outside the options, as lk.check_policy\(faulty\) shows"),
        ({"rules": broken}, "policy broken cannot be compiled, as lk.check_policy"),
        ({"rules": of_parameter}, "name tasks, which your rules use, has a meaning of its own"),
        ({"rules": network}, "name network, which your rules use, has a meaning of its own"),
        ({"rules": of_huge}, "policy of-huge takes HUGE from outside, an array of 1,001 numbers"),
        ({"against": []}, "against is empty"),
        ({"against": ["fastest"]}, "policies: policy is 'fastest'"),
        ({"fleet": lk.ring(4)}, "fleet is a Fleet; give the folder of its two tables"),
        ({"fleet": "nowhere"}, "nowhere"),
        ({"replicates": 10**12, "tasks": 5}, "replicates is 1,000,000,000,000; with 100 servers"),
        ({"against": None}, "against is None; give a list of built-in rules"),
        ({"against": [3]}, "policies: policy is 3"),
        ({"tasks": math.nan}, "tasks is nan; give a whole number of at least 1"),
        ({"tasks": math.inf}, "tasks is inf; give a whole number of at least 1"),
        ({"replicates": 400.5}, "replicates is 400.5; give a whole number of at least 1"),
        ({"entropy": None}, "entropy is None; give a whole number of at least 0"),
        ({"title": "\ud800"}, "title is '.ud800'; give a text of ordinary characters"),
        ({"folder": 5}, "folder is 5; give a folder that exists"),
        ({"folder": "a\0b"}, "path is 'a.x00b', which can be none"),
        ({"report_every": 5}, "report_every is 5; give a list of whole numbers"),
        ({"tasks": 0}, "tasks is 0; give a whole number of at least 1"),
        ({"replicates": 10}, "replicates is 10; a risk of 0.01"),
        ({"risk": 2}, "risk is 2; give a number above 0 and below 1"),
        ({"entropy": -1}, "entropy is -1"),
        ({"report_every": [0, 0]}, "grid of study mine has a point twice"),
        ({"folder": "no/such/folder"}, "folder is 'no/such/folder'; give a folder that exists"),
    ],
)
def test_what_cannot_be_meant_is_refused_and_nothing_written(tmp_path, values, sentence):
    given = {"name": "mine", "rules": always_last, "folder": tmp_path, **values}
    with pytest.raises(lk.InputError, match=sentence):
        write(**given)
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be_written_is_told(tmp_path, monkeypatch):
    def refuse(new, path):
        if path.suffix == ".toml":
            raise OSError(30, "Read-only file system")
        link(new, path)

    link = os.link
    monkeypatch.setattr("labkit.studies.own_rules.os.link", refuse)
    with pytest.raises(lk.InputError, match=r"study mine cannot be written to .* \(Read-only file system\)"):
        write(tmp_path, always_last)
    assert list(tmp_path.iterdir()) == []


def test_a_changed_template_is_told(tmp_path, monkeypatch):
    home = tmp_path / "headroom.ipynb"
    content = json.loads(find_notebook("headroom").read_text(encoding="utf-8"))
    for cell in content["cells"]:
        cell["source"] = [
            line.replace("parse_policy(policy) for", "parse_policy(p) for") for line in cell["source"]
        ]
    home.write_text(json.dumps(content))
    monkeypatch.setattr("labkit.studies.own_rules.find_notebook", lambda name: home)
    with pytest.raises(lk.InputError, match="notebook headroom no longer holds the line"):
        write(tmp_path, always_last)
