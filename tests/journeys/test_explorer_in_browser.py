"""The explorer in a real JupyterLab: a click, a name, a button, and the look in light and dark."""

import time

import nbformat
import pytest

import labkit as lk
from labkit.records.project import ROOT
from tests.journeys.lab_in_browser import (
    ERRORS,
    PATIENCE,
    in_theme,
    jupyterlab,
    keep,
    open_notebook,
    page,
    restart_and_run_all,
)

__all__ = ["page"]  # a fixture

DEMO = ROOT / "experiments" / "demo"
ZOOMED = """() => {
    const [low, high] = document.querySelector(".js-plotly-plot").layout.xaxis2.range;
    return high - low < 1.5;
}"""
CELLS = (
    "import labkit as lk",
    f"""fleet = lk.read_fleet({str(DEMO)!r})
rules = ["one-choice", "least-loaded"]
explorer = lk.explore(fleet, [lk.place(fleet, rule, tasks=9600, replicates=20, rng=1) for rule in rules])
explorer""",
)


def write_notebook(path):
    cells = [nbformat.v4.new_code_cell(source) for source in CELLS]
    kernel = {"display_name": "Python 3", "language": "python", "name": "python3"}
    nbformat.write(nbformat.v4.new_notebook(cells=cells, metadata={"kernelspec": kernel}), path)


def heading(facts, other_than="Nothing is selected"):
    """Wait until something else is selected, and return what it is."""
    title = facts.locator("h4")
    deadline = time.monotonic() + PATIENCE
    while title.inner_text() == other_than and time.monotonic() < deadline:
        time.sleep(0.05)
    return title.inner_text()


def keep_explorer(page, name):
    page.locator(".choice-explorer").scroll_into_view_if_needed()
    keep(page, name)


@pytest.mark.browser
def test_the_explorer_answers_clicks_names_and_buttons(tmp_path, page):
    root = tmp_path / "root"
    root.mkdir()
    write_notebook(root / "look.ipynb")
    with jupyterlab(root, tmp_path) as lab:
        open_notebook(page, lab, "look")
        assert restart_and_run_all(page) == ["[1]:", "[2]:"]
        box = page.locator(".choice-explorer")
        box.locator(".js-plotly-plot .point").first.wait_for(timeout=1000 * PATIENCE)
        facts = box.locator(".choice-facts")
        assert "Nothing is selected" in facts.inner_text()

        box.locator(".subplot.x2y2 .points path.point").nth(30).click(force=True)
        first = heading(facts)
        box.locator(".subplot.xy .points path.point").nth(60).click(force=True)
        second = heading(facts, other_than=first)
        assert {first, second} <= set(lk.read_fleet(DEMO).names)
        assert "Capacity" in facts.inner_text()
        keep_explorer(page, "explorer-server-light")

        box.locator(".neighbour-button").first.focus()
        page.keyboard.press("Enter")
        third = heading(facts, other_than=second)
        typed = box.get_by_label("Server")
        typed.fill("Yarlorquay")
        typed.press("Enter")
        assert heading(facts, other_than=third) == "Yarlorquay"
        typed.fill("Yarlorquai")
        typed.press("Enter")
        box.get_by_text("did you mean 'Yarlorquay'?").wait_for(timeout=1000 * PATIENCE)

        box.get_by_role("button", name="+", exact=True).click()
        page.wait_for_function(ZOOMED, timeout=1000 * PATIENCE)

        box.locator(".bottleneck-button").click()
        assert heading(facts, other_than="Yarlorquay") == "The bottleneck: 6 servers"
        assert all(name in facts.inner_text() for name in lk.survey(lk.read_fleet(DEMO)).bottleneck)
        in_theme(page, "dark")
        keep_explorer(page, "explorer-bottleneck-dark")
        assert page.locator(ERRORS).all_inner_texts() == []
