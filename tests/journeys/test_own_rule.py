"""From a rule in a cell to a study: the notebook with a copied cell, the study it makes, and its runs."""

import copy
import json

from labkit.cli import main
from labkit.records.project import NOTEBOOKS
from labkit.records.schema import row_of_origin
from labkit.records.store import Store
from labkit.studies.execution import execute

VALUES = {
    "policies": ["least-loaded"],
    "tasks": 300,
    "risk": 0.1,
    "replicates": 40,
    "new_study": "mine",
    "study": "own-rule-journey",
}


def with_copied_cell(folder):
    """Copy the notebook, add a copy of its rule's cell under another name, and write the study here."""
    content = json.loads((NOTEBOOKS / "own_rule.ipynb").read_text(encoding="utf-8"))
    cells = []
    path = folder / "own.ipynb"
    for cell in content["cells"]:
        source = "".join(cell["source"])
        source = source.replace('begin_run("own_rule"', f'begin_run("{path.as_posix()}"')
        source = source.replace(
            "entropy=entropy,", f'entropy=entropy,\n        folder="{folder.as_posix()}",'
        )
        cells.append({**cell, "source": source})
        if cell["id"] == "rule":
            other = copy.deepcopy(cells[-1]) | {"id": "rule-again"}
            other["source"] = source.replace("stay_first", "stay_longer").replace("0.02", "0.2")
            cells.append(other)
    path.write_text(json.dumps({**content, "cells": cells}), encoding="utf-8")
    return path


def test_a_copied_cell_is_enough_and_becomes_a_study(tmp_path, capsys):
    store, out = tmp_path / "runs", tmp_path / "out.ipynb"
    done = execute(with_copied_cell(tmp_path), {**VALUES, "store": str(store)}, out)
    assert done.error == ""
    page = out.read_text(encoding="utf-8")
    assert page.count("no fault found") == 4  # as text and as a page
    assert page.count('"image/png": "') == 1
    place = Store(store)
    (record,) = place.files("own-rule-journey")
    rules = row_of_origin(place.read(record))["rules"]
    assert list(rules) == ["stay-first", "stay-longer"]
    assert "- 0.2\n" in rules["stay-longer"]
    cells = {cell["id"]: cell for cell in json.loads(page)["cells"]}
    (shown,) = cells["source"]["outputs"]
    assert "def stay_longer(options" in "".join(shown["data"]["text/html"])

    study = str(tmp_path / "mine.toml")
    options = ["--store", str(store)]
    assert main(["run", study, *options, "--output", str(tmp_path / "answers")]) == 0
    answer = capsys.readouterr().out
    assert "stay-longer" in answer
    assert "saved: against least-loaded" in answer
    (made,) = place.files("mine")
    assert row_of_origin(place.read(made))["rules"].keys() == rules.keys()
    assert main(["list", *options]) == 0
    listed = capsys.readouterr().out
    assert "mine.ipynb" in listed
    assert "own-rule-journey" in listed
