"""README shows what the demo study gives and what the frozen growth table holds."""

import importlib.util

import pytest

from labkit.cli import main
from labkit.records.project import ROOT


@pytest.fixture
def update():
    spec = importlib.util.spec_from_file_location("update", ROOT / ".readme" / "update.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture
def readme():
    return (ROOT / "README.md").read_text(encoding="utf-8")


def test_the_answer_in_readme_is_the_one_that_the_demo_gives(tmp_path, capsys, update, readme):
    assert (
        main(["run", "demo", "--store", str(tmp_path / "runs"), "--output", str(tmp_path / "answers")]) == 0
    )
    answer = update.answer_block(capsys.readouterr().out)
    assert update.shown(readme, "answer") == answer, "run `make readme`"
    figures = sorted(path.name for path in (tmp_path / "answers" / "demo").glob("*.png"))
    assert figures == ["choice_graph.png", "headroom.png", "load.png"]
    assert (ROOT / ".readme" / "headroom.png").stat().st_size > 10_000


def test_the_growth_in_readme_is_that_of_the_frozen_table(update, readme):
    block = update.growth_block(update.GROWTH.read_text(encoding="utf-8"))
    assert update.shown(readme, "growth") == block, "run `make readme`"
    assert block.count("\n") > 12


def test_the_frozen_demo_is_the_answer_in_readme(update, readme):
    frozen = (ROOT / "results" / "frozen" / "demo" / "answer.txt").read_text(encoding="utf-8")
    assert update.shown(readme, "answer") == update.answer_block(frozen)
