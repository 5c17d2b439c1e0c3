"""README shows what the demo study gives."""

import importlib.util

from labkit.cli import main
from labkit.records.project import ROOT


def test_the_answer_in_readme_is_the_one_that_the_demo_gives(tmp_path, capsys):
    spec = importlib.util.spec_from_file_location("update", ROOT / ".readme" / "update.py")
    update = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(update)
    assert (
        main(["run", "demo", "--store", str(tmp_path / "runs"), "--output", str(tmp_path / "answers")]) == 0
    )
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    assert update.shown(readme) == update.block(capsys.readouterr().out), "run `make readme`"
    figures = sorted(path.name for path in (tmp_path / "answers" / "demo").glob("*.png"))
    assert figures == ["choice_graph.png", "headroom.png", "load.png"]
    assert (ROOT / ".readme" / "headroom.png").stat().st_size > 10_000
