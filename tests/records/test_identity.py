"""A run is its code, parameters, entropy and computing sources; nothing else makes it another run."""

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from labkit.records.declared import read_notebook
from labkit.records.identity import canonical, content_digest, identify
from labkit.studies.model import read_study
from tests.records.tiny import PARAMETERS, write_notebook, write_tiny

VALUES = st.fixed_dictionaries(
    {
        "tasks": st.integers(1, 10**9),
        "share": st.floats(allow_nan=False, allow_infinity=False),
        "policies": st.lists(st.text(max_size=8), min_size=1, max_size=3),
        "mode": st.text(max_size=8),
        "replicates": st.integers(1, 10**6),
        "entropy": st.integers(0, 2**128),
    }
)


@pytest.fixture(scope="module")
def tiny(tmp_path_factory):
    return read_notebook(write_tiny(tmp_path_factory.mktemp("tiny") / "tiny.ipynb"))


@given(VALUES)
def test_the_canonical_text_gives_the_values_back(values):
    assert json.loads(canonical(values)) == values


@given(VALUES, st.randoms(use_true_random=False))
def test_the_order_of_parameters_does_not_matter(values, random):
    names = list(values)
    random.shuffle(names)
    assert canonical({name: values[name] for name in names}) == canonical(values)


@given(VALUES, st.text(max_size=8), st.integers(1, 8))
def test_study_store_and_workers_are_no_part_of_a_run(tiny, values, text, workers):
    one = identify(tiny, tiny.checked(values))
    other = identify(tiny, tiny.checked(values | {"study": text, "store": text, "workers": workers}))
    assert one == other


@given(VALUES, VALUES)
def test_different_values_are_different_runs(tiny, values, others):
    same = identify(tiny, tiny.checked(values)).run_id == identify(tiny, tiny.checked(others)).run_id
    assert same == (canonical(values) == canonical(others))


@given(VALUES, st.lists(st.text(max_size=8), min_size=1), st.integers(1, 10**6))
def test_policies_and_replicates_share_the_arrivals(tiny, values, policies, replicates):
    one = identify(tiny, tiny.checked(values))
    other = identify(tiny, tiny.checked(values | {"policies": policies, "replicates": replicates}))
    assert one.seed.spawn_key == other.seed.spawn_key
    assert one.seed.entropy == other.seed.entropy


@given(VALUES)
def test_the_key_is_one_word_of_the_spawn_key(tiny, values):
    found = identify(tiny, tiny.checked(values))
    assert 0 <= found.key < 2**32
    assert found.seed.spawn_key == (found.key,)
    assert np.random.default_rng(found.seed).random() != np.random.default_rng(found.entropy).random()


def test_other_tasks_are_other_arrivals(tiny):
    keys = {identify(tiny, tiny.checked({"tasks": tasks})).key for tasks in range(1, 50)}
    assert len(keys) == 49


def test_a_whole_number_for_a_float_is_the_same_run(tiny):
    assert identify(tiny, tiny.checked({"share": 1})) == identify(tiny, tiny.checked({"share": 1.0}))


def test_code_counts_but_defaults_prose_and_outputs_do_not(tmp_path):
    plain = read_notebook(write_notebook(tmp_path / "a.ipynb", "x = 1"))
    content = json.loads(plain.path.read_text())
    content["cells"].insert(1, {"cell_type": "markdown", "metadata": {}, "source": "Prose."})
    injected = {"tags": ["injected-parameters"]}
    content["cells"].insert(
        2, {"cell_type": "code", "metadata": injected, "source": "# Parameters\ntasks = 9", "outputs": []}
    )
    content["cells"][-1]["outputs"] = [{"output_type": "stream", "name": "stdout", "text": "1"}]
    content["cells"][0]["source"] = PARAMETERS.replace("tasks: int = 5", "tasks: int = 6")
    (tmp_path / "b.ipynb").write_text(json.dumps(content))
    assert read_notebook(tmp_path / "b.ipynb").digest == plain.digest
    assert read_notebook(write_notebook(tmp_path / "c.ipynb", "x = 2")).digest != plain.digest
    retyped = PARAMETERS.replace("tasks: int", "tasks: float")
    assert (
        read_notebook(write_notebook(tmp_path / "d.ipynb", "x = 1", parameters=retyped)).digest
        != plain.digest
    )


def test_a_folder_counts_by_the_names_and_content_of_its_tables(tmp_path):
    one, other = tmp_path / "one", tmp_path / "other"
    for folder in (one, other):
        folder.mkdir()
        (folder / "servers.csv").write_text("server\na\n")
    (other / "README.md").write_text("About.")
    assert content_digest(one) == content_digest(other)
    (other / "servers.csv").write_text("server\nb\n")
    assert content_digest(one) != content_digest(other)
    (one / "servers.csv").rename(one / "choices.csv")
    (other / "servers.csv").write_text("server\na\n")
    assert content_digest(one) != content_digest(other)


def test_a_path_counts_by_its_content_wherever_it_is(tmp_path):
    cells = "fleet: str = ''\nentropy: int = 1"
    notebook = read_notebook(write_notebook(tmp_path / "n.ipynb", "x = 1", parameters=cells))
    found = []
    for name in ("here", "there"):
        folder = tmp_path / name
        folder.mkdir()
        (folder / "servers.csv").write_text("server\na\n")
        found.append(identify(notebook, notebook.checked({"fleet": str(folder)})))
    assert found[0].run_id == found[1].run_id
    (folder / "servers.csv").write_text("server\nab\n")
    assert identify(notebook, notebook.checked({"fleet": str(folder)})).run_id != found[0].run_id


def test_a_notebook_without_entropy_has_nothing_random(tmp_path):
    notebook = read_notebook(write_notebook(tmp_path / "n.ipynb", "x = 1", parameters="links: int = 1"))
    one, other = identify(notebook, {"links": 1}), identify(notebook, {"links": 2})
    assert one.entropy == other.entropy == 0
    assert one.run_id != other.run_id


@given(VALUES, st.one_of(st.none(), st.floats(0.01, 0.5)), st.integers(1, 10**6))
def test_how_replicates_are_stopped_does_not_change_the_arrivals(tmp_path_factory, values, precision, most):
    added = "precision: float = None\nmost_replicates: int = 10000"
    folder = tmp_path_factory.getbasetemp()
    before = read_notebook(write_notebook(folder / "before.ipynb", "x = 1"))
    after = read_notebook(write_notebook(folder / "after.ipynb", "x = 1", parameters=PARAMETERS + added))
    stopped = after.checked(values | {"precision": precision, "most_replicates": most})
    assert identify(after, stopped).key == identify(before, before.checked(values)).key


def test_the_demo_keeps_its_arrivals():
    assert {point.identity.key for point in read_study("demo").points} == {910636980}
