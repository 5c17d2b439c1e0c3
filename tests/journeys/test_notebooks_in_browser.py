"""Each notebook in a real JupyterLab: opened, run from top to bottom kept as a picture."""

import json
import re
import shutil

import pytest

from labkit.cli import main
from labkit.records.project import NOTEBOOKS, ROOT
from tests.journeys.lab_in_browser import (
    ERRORS,
    in_theme,
    jupyterlab,
    keep,
    open_notebook,
    page,
    restart_and_run_all,
    wait_for_kernel,
)
from tests.journeys.ways import a_record, assert_same

__all__ = ["page"]  # a fixture

DEMO = ROOT / "experiments" / "demo"
# Sizes at which a notebook shows all that it has in less time; tests/benchmarks executes them as they are.
SMALL = {
    "rules": {"report_ages": [25, 1600], "forecast_rounds": 1000},
    "serve": {
        "load_factors": [0.3, 0.6],
        "horizon": 5000.0,
        "report_ages": [2.5, 20.0, 80.0],
        "replicates": 4,
    },
}
# More than any notebook takes, also on a busy machine that has compiled nothing yet.
LONGEST = 300
TALLEST = 16_000  # dots that a browser still draws in one piece

RULE = (
    "@lk.policy",
    "def emptier_first(options, loads, capacity, coin):",
    "first, second = options[0], options[1]",
    "return 1 if loads[second] < loads[first] else 0",
)


def set_parameters(path, **values):
    """Write values into the first cell of a notebook, as a user would, where it has their names."""
    content = json.loads(path.read_text(encoding="utf-8"))
    (cell,) = [each for each in content["cells"] if "parameters" in each["metadata"].get("tags", [])]
    source = "".join(cell["source"])
    for name, value in values.items():
        source = re.sub(
            rf"(?m)^({name}: \w+ = ).*?(?=  #)", lambda found, value=value: f"{found[1]}{value!r}", source
        )
    cell["source"] = source
    path.write_text(json.dumps(content), encoding="utf-8")


@pytest.fixture(scope="module")
def lab(tmp_path_factory):
    """Serve copies of all notebooks whose records and answers go to a folder of the test's own."""
    scratch = tmp_path_factory.mktemp("lab")
    root = scratch / "root"
    shutil.copytree(NOTEBOOKS, root)
    for path in root.glob("*.ipynb"):
        places = {"store": str(scratch / "store"), "output": str(scratch / "answers")}
        set_parameters(path, **places, **SMALL.get(path.stem, {}))
    with jupyterlab(root, scratch) as served:
        yield served


def run_all(lab, page, name):
    """Run a notebook that is open, and assert that every cell ended without a word of error."""
    done = restart_and_run_all(page, LONGEST)
    assert page.locator(ERRORS).all_inner_texts() == []
    assert done == [f"[{at}]:" for at in range(1, len(done) + 1)]
    for scheme in ("light", "dark"):
        in_theme(page, scheme)
        keep_whole(page, f"{name}-{scheme}")
    for session in page.request.get(f"{lab.address}/api/sessions?token={lab.token}").json():
        page.request.delete(f"{lab.address}/api/sessions/{session['id']}?token={lab.token}")


def keep_whole(page, name):
    """Keep the notebook from top to bottom; nothing in it may be wider than a page of 1280 has room for."""
    wide = "all => all.filter(each => each.scrollWidth > each.clientWidth + 1).map(each => each.innerText)"
    assert page.locator(".jp-OutputArea-output").evaluate_all(wide) == []
    size = page.viewport_size
    inside = page.locator(".jp-WindowedPanel-viewport").evaluate("box => box.scrollHeight")
    page.set_viewport_size({**size, "height": min(inside + 150, TALLEST)})
    page.locator(".jp-WindowedPanel-outer").evaluate("box => { box.scrollTop = 0; }")
    keep(page, name)
    page.set_viewport_size(size)


@pytest.mark.browser
@pytest.mark.parametrize("name", ["start", "survey", "rules", "long_run", "growth", "serve", "replay"])
def test_a_notebook_runs_from_top_to_bottom(lab, page, name):
    open_notebook(page, lab, name)
    run_all(lab, page, name)


def listed(lab, notebook, capsys):
    """Return the only run of a notebook that `labkit list` names, and what `labkit show` says of it."""
    store = ("--store", str(lab.root.parent / "store"), "--json")
    assert main(["list", *store]) == 0
    (run,) = [each["run_id"] for each in json.loads(capsys.readouterr().out) if each["notebook"] == notebook]
    assert main(["show", run, *store]) == 0
    return run, json.loads(capsys.readouterr().out)


def record_of_a_study(folder, run):
    """Record what the headroom notebook says by itself, as a study."""
    study = folder / "s.toml"
    study.write_text(
        f'notebook = "headroom"\nreplicates = 400\nentropy = 1\n[parameters]\nfleet = "{DEMO.as_posix()}"\n'
    )
    assert main(["run", str(study), "--store", str(folder / "runs")]) == 0
    return a_record(folder / "runs", run)


@pytest.mark.browser
def test_a_run_by_hand_is_that_of_a_study_and_becomes_an_answer(lab, page, tmp_path, capsys):
    open_notebook(page, lab, "headroom")
    run_all(lab, page, "headroom")
    run, about = listed(lab, "headroom", capsys)
    assert run in page.locator(".jp-OutputArea").last.inner_text()
    assert about["study"] == "by-hand"
    assert_same(a_record(lab.root.parent / "store", run), record_of_a_study(tmp_path, run))
    set_parameters(lab.root / "headroom_answer.ipynb", study="by-hand", runs=[run])
    open_notebook(page, lab, "headroom_answer")
    run_all(lab, page, "headroom_answer")
    assert "Use least-loaded: it needs a headroom of" in page.locator(".jp-Notebook").inner_text()


def type_cell_below(page, text, lines):
    """Click the cell that holds a text, make a new one below, and type lines into it."""
    wait_for_kernel(page)  # before, the editor does not know the language
    page.locator(".jp-CodeCell", has_text=text).first.locator(".cm-content").click()
    for key in ("Escape", "b", "Enter"):
        page.keyboard.press(key)
    for line in lines:
        page.keyboard.type(line)
        page.keyboard.press("Enter")  # the editor indents by itself
    page.keyboard.press("Control+s")  # a record names the notebook's file, so it must hold what is executed


@pytest.mark.browser
def test_a_rule_typed_into_a_new_cell_is_checked_compared_and_recorded(lab, page, capsys):
    path = lab.root / "own_rule.ipynb"
    text = path.read_text(encoding="utf-8")  # a copy gives its own name, as notebooks say
    path.write_text(
        text.replace(r"begin_run(\"own_rule", rf"begin_run(\"{path.as_posix()}"), encoding="utf-8"
    )
    open_notebook(page, lab, "own_rule")
    type_cell_below(page, "def stay_first", RULE)
    run_all(lab, page, "own_rule")
    _, about = listed(lab, path.as_posix(), capsys)
    assert "return 1 if loads[second] < loads[first] else 0" in about["rules"]["emptier-first"]
    assert {row["policy"] for row in about["measures"]} >= {"stay-first", "emptier-first", "least-loaded"}
