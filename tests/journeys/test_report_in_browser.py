"""The report as a reader gets it: one file, opened in light and dark, checked by axe, and printed."""

import json
import shutil

import pytest
from axe_playwright_python.sync_playwright import Axe

from labkit.cli import main
from labkit.records.project import ROOT
from tests.journeys.lab_in_browser import SCREENS, page
from tests.reports.small import HOSTILE

__all__ = ["page"]  # a fixture

NAME = "Vreckethwick"  # one of those that are fullest whatever the rule, so that the report names it
STUDY = """title = "Vaults <b>next</b> year"
question = "Which <i>rule</i>?"
notebook = "headroom"
replicates = 80
entropy = 5
[parameters]
fleet = {fleet}
tasks = 960
checkpoints = 4
[answer]
notebook = "headroom_answer"
risk = 0.05
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A study of the demo's fleet in which one server is named by an attack, run and reported."""
    folder = tmp_path_factory.mktemp("report")
    shutil.copytree(ROOT / "experiments" / "demo", folder / "fleet")
    for table in (folder / "fleet").glob("*.csv"):
        table.write_text(table.read_text(encoding="utf-8").replace(NAME, HOSTILE), encoding="utf-8")
    study = folder / "vaults.toml"
    study.write_text(STUDY.format(fleet=json.dumps(str(folder / "fleet"))))
    where = ["--store", str(folder / "runs"), "--output", str(folder / "answers")]
    assert main(["run", str(study), *where]) == 0
    assert main(["report", str(study), *where, "--to", str(folder / "out.html"), "--pdf"]) == 0
    return folder


@pytest.mark.browser
def test_the_report_is_read_in_light_in_dark_and_on_paper(folder, page):
    asked, dialogs = [], []
    page.on("request", lambda request: asked.append(request.url))
    page.on("dialog", lambda dialog: (dialogs.append(dialog.message), dialog.dismiss()))
    SCREENS.mkdir(parents=True, exist_ok=True)
    address = (folder / "out.html").as_uri()
    for scheme in ("light", "dark"):
        page.emulate_media(color_scheme=scheme)
        page.goto(address)
        page.screenshot(path=SCREENS / f"report-{scheme}.png", full_page=True)
        found = Axe().run(page).response
        assert [(each["id"], each["nodes"][0]["html"]) for each in found["violations"]] == []
        passed = {each["id"] for each in found["passes"]}
        assert {"color-contrast", "heading-order", "image-alt"} <= passed  # they had something to check
        assert page.evaluate("document.documentElement.scrollWidth") == 1280
    assert {url for url in asked if not url.startswith("data:")} == {address}
    assert dialogs == []
    assert (folder / "out.pdf").read_bytes().startswith(b"%PDF-")

    assert page.locator("h1").inner_text() == "Vaults <b>next</b> year"
    assert page.locator("h2").all_inner_texts() == [
        "Recommendation",
        "Contents",
        "How much headroom does each placement rule need?",
        "Provenance",
        "How to make this again",
    ]
    text = page.locator("body").inner_text()
    recommended = page.locator(".recommendation").inner_text()
    answer = (folder / "answers" / "vaults" / "answer.txt").read_text(encoding="utf-8")
    assert " ".join(answer.split()).startswith(recommended)
    assert HOSTILE in text
    assert "import labkit" not in text
    assert page.locator("script, [onerror], img:not([src^='data:'])").count() == 0
    figures = page.locator("figure img")
    assert figures.count() == 3
    alts = [figures.nth(at).get_attribute("alt") for at in range(3)]
    assert all("utilisation" in alt or "rule" in alt for alt in alts)
    for link in page.locator("nav a").all():
        assert page.locator(f"[id='{link.get_attribute('href')[1:]}']").count() == 1
    [run] = [path.stem for path in (folder / "runs" / "vaults").glob("*.parquet")]
    provenance = page.locator("section.origin").inner_text()
    for words in (run.split("-")[0], "Entropy", "commit", "requirements.lock, SHA-256", "numpy"):
        assert words in provenance
    assert "labkit report" in page.locator("section.repeat").inner_text()
