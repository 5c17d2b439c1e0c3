"""The explorer in a real JupyterLab: a click, a name, a button, and the look in light and dark."""

import time

import nbformat
import pytest

import labkit as lk
from labkit.records.project import ROOT
from tests.journeys.test_browser import PATIENCE, jupyterlab, page, restart_and_run_all

__all__ = ["page"]  # a fixture

DEMO = ROOT / "experiments" / "demo"
ZOOMED = """() => {
    const [low, high] = document.querySelector(".js-plotly-plot").layout.xaxis2.range;
    return high - low < 1.5;
}"""
SCREENS = ROOT / "build" / "screenshots"
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


def in_theme(page, name):
    page.get_by_role("menuitem", name="Settings", exact=True).click()
    entries = page.locator(".lm-Menu-item")
    entries.filter(has_text="Theme").first.hover()
    entries.filter(has_text=name).first.click()
    page.wait_for_selector(f"body[data-jp-theme-name='{name}']", state="attached", timeout=1000 * PATIENCE)


def keep(page, name):
    SCREENS.mkdir(parents=True, exist_ok=True)
    page.mouse.move(5, 5)
    page.locator(".choice-explorer").scroll_into_view_if_needed()
    page.wait_for_timeout(500)
    page.screenshot(path=SCREENS / f"{name}.png")


@pytest.mark.browser
def test_the_explorer_answers_clicks_names_and_buttons(tmp_path, page):
    root = tmp_path / "root"
    root.mkdir()
    write_notebook(root / "look.ipynb")
    page.set_viewport_size({"width": 1280, "height": 800})
    with jupyterlab(root, tmp_path) as (address, token):
        page.goto(f"{address}/lab/tree/look.ipynb?token={token}&reset", wait_until="domcontentloaded")
        page.wait_for_selector(".jp-Notebook .jp-Cell", timeout=1000 * PATIENCE)
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
        keep(page, "explorer-server-light")

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
        in_theme(page, "JupyterLab Dark")
        keep(page, "explorer-bottleneck-dark")
        errors = page.locator(".jp-RenderedText[data-mime-type='application/vnd.jupyter.stderr']")
        assert errors.all_inner_texts() == []
