"""What people open in a spreadsheet holds texts and numbers, never formulas."""

import csv

import pandas as pd
import pytest

from labkit.figures.pages import write_answer_files
from labkit.text import FORMULA, harmless


@pytest.mark.parametrize("sign", FORMULA)
def test_a_text_that_begins_like_a_formula_gets_an_apostrophe(sign):
    assert harmless(f"{sign}1+1") == f"'{sign}1+1"


@pytest.mark.parametrize("value", ["a=1", "north", "", " =1", -3.5, 7, None, "'=1"])
def test_other_cells_stay_as_they_are(value):
    assert harmless(value) is value


def test_answer_csv_holds_no_formula_and_numbers_to_the_bit(tmp_path):
    names = ["=cmd|' /C calc'!A0", "+1", "-1", "@SUM(A1)", "\tx", "\rx", "plain"]
    table = pd.DataFrame(
        {
            "policy": names,
            "@head": pd.Series(names, dtype=object),
            "gap": [-3.5, 0.1, 1e-300, 2.0, float("nan"), -0.0, 1 / 3],
            "rank": range(-1, 6),
            "mixed": [-1, "-1", None, 2.5, True, "=x", ("=y",)],
        }
    )
    write_answer_files(tmp_path, table, "text", {})
    with (tmp_path / "answer.csv").open(newline="") as stream:
        head, *rows = csv.reader(stream)
    assert head == ["policy", "'@head", "gap", "rank", "mixed"]
    for row, name in zip(rows, names, strict=True):
        assert row[0] == row[1] == (name if name == "plain" else f"'{name}").replace("\r", "\n")
    assert [row[2] for row in rows] == ["-3.5", "0.1", "1e-300", "2.0", "", "-0.0", "0.3333333333333333"]
    assert [row[3] for row in rows] == ["-1", "0", "1", "2", "3", "4", "5"]
    assert [row[4] for row in rows] == ["-1", "'-1", "", "2.5", "True", "'=x", "('=y',)"]
    assert table["policy"].tolist() == names
