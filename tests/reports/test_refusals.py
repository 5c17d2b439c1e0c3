"""What `labkit report` refuses: one sentence, exit status 2, and nothing written."""

import os

import pytest

from labkit.cli import main
from labkit.reports import report
from labkit.reports.target import check_target, place_of, write_beside
from tests.records.tiny import snapshot
from tests.reports.small import write_small


@pytest.fixture
def asked(tmp_path, capsys):
    path = write_small(tmp_path)

    def ask(*words, study=path):
        before = snapshot(tmp_path)
        status = main(["report", str(study), "--store", str(tmp_path / "runs"), *words])
        out, err = capsys.readouterr()
        assert (status, out, err.count("\n")) == (2, "", 1)
        assert snapshot(tmp_path) == before
        return err

    return ask


def test_a_study_that_is_unknown_not_run_or_without_an_answer(asked, tmp_path):
    assert "study is 'no-such-study'" in asked(study="no-such-study")
    assert "2 of 2 runs are not recorded" in asked()
    assert "has no [answer]" in asked(study="serve")
    assert "the folder of a fleet" in asked(study=tmp_path / "kilns")


def test_a_place_that_is_taken_or_no_place(asked, tmp_path):
    there = tmp_path / "there.html"
    there.write_text("mine")
    assert "give --replace" in asked("--to", str(there))
    assert "not recorded" in asked("--to", str(there), "--replace")
    (tmp_path / "new.pdf").write_text("mine")
    assert "new.pdf is there already" in asked("--to", str(tmp_path / "new.html"), "--pdf")
    assert "ends in .html" in asked("--to", str(tmp_path / "report.txt"))
    (tmp_path / "folder.html").symlink_to(tmp_path / "nowhere")
    assert "is no file" in asked("--to", str(tmp_path / "folder.html"))
    assert "in a folder that is there" in asked("--to", str(there / "wrong.html"))
    assert "in a folder that is there" in asked("--to", str(tmp_path / "deep" / "new.html"))


def test_a_pdf_without_a_browser(asked, tmp_path, monkeypatch):
    monkeypatch.setenv("PATH", os.fspath(tmp_path))
    assert "leave out --pdf" in asked("--pdf", "--to", str(tmp_path / "new.html"))


def test_where_it_goes(tmp_path):
    assert place_of("demo", None) == report.ROOT / "results" / "reports" / "demo.html"
    assert place_of("demo", tmp_path) == tmp_path / "demo.html"
    path = place_of("demo", tmp_path / "x.html")
    write_beside(path, b"one")
    check_target(path, replace=True)
    write_beside(path, b"two")
    assert snapshot(tmp_path) == {str(path): b"two"}
