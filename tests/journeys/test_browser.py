"""Restart and Run All in a real JupyterLab gives the record that a study gives."""

import pytest

from labkit.cli import main
from tests.journeys.lab_in_browser import ERRORS, jupyterlab, open_notebook, page, restart_and_run_all
from tests.journeys.ways import assert_same, copy_with_defaults, the_record, write_study

__all__ = ["page"]  # a fixture


@pytest.mark.browser
def test_restart_and_run_all_gives_the_record_of_the_study(tmp_path, page):
    root = tmp_path / "root"
    root.mkdir()
    copy_with_defaults(root, tmp_path / "by hand")
    assert main(["run", str(write_study(tmp_path)), "--store", str(tmp_path / "runs")]) == 0
    with jupyterlab(root, tmp_path) as lab:
        open_notebook(page, lab, "headroom")
        done = restart_and_run_all(page)
        assert page.locator(ERRORS).all_inner_texts() == []
        assert done == [f"[{at}]:" for at in range(1, len(done) + 1)]
        shown = page.locator(".jp-OutputArea").last.inner_text()
    one, other = the_record(tmp_path / "by hand"), the_record(tmp_path / "runs")
    assert_same(one, other)
    assert one[0]["study"] == "by-hand"
    assert one[0]["run_id"] in shown
