"""The cited table as CSV, Markdown and LaTeX: the same numbers, and every sign of a text as it is."""

import csv
import io
import re

import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from labkit.analysis.rounded_tables import csv_text, latex_text, markdown_text, tex_text

AWKWARD = r"=a|b_c&50%$x^{2}~\y#<z>"


@pytest.fixture
def table():
    return pd.DataFrame(
        {
            "policy": [AWKWARD, "mixed(beta=0.5)"],
            "share": [0.25, 1e-05],
            "tasks": [9600, 9600],
            "replicates": [400, 400],
            "gap": [0.123456, 98765.4],
            "gap_error": [0.0123, 996.0],
            "headroom": [0.31234, 7.0],
            "headroom_lower": [0.30012, 7.0],
            "headroom_upper": [0.32456, 7.0],
        }
    )


def test_csv_keeps_values_and_errors_apart(table):
    rows = list(csv.reader(io.StringIO(csv_text(table, ["gap"]))))
    assert rows[0] == list(table.columns)
    assert rows[1] == [f"'{AWKWARD}", "0.25", "9600", "400", "0.123", "0.012", "0.312", "0.300", "0.325"]
    assert rows[2] == ["mixed(beta=0.5)", "1e-05", "9600", "400", "98800", "1000", "7", "7", "7"]


@pytest.mark.parametrize("begin", ["=", "+", "-", "@", "\t=", "\r\n+"])
def test_a_text_that_a_spreadsheet_would_compute_is_made_harmless(table, begin):
    table["policy"] = f"{begin}1+1"
    rows = list(csv.reader(io.StringIO(csv_text(table, ["gap"]), newline="")))
    assert [row[0] for row in rows[1:]] == [f"'{begin.strip()}1+1"] * 2


def test_markdown_has_one_cell_for_value_and_error(table):
    lines = markdown_text(table, ["gap"], "A note.").splitlines()
    assert lines[0].startswith(r"| policy | share | tasks | replicates | gap | headroom | headroom\_lower |")
    assert "| 0.123 ± 0.012 | 0.312 | 0.300 | 0.325 |" in lines[2]
    assert lines[-2:] == ["", "A note."]
    cells = {len(re.split(r"(?<!\\)\|", line)) for line in lines[:4]}
    assert cells == {10}


def test_latex_is_a_plain_tabular(table):
    lines = latex_text(table, ["gap"], "A note: 50 %.").splitlines()
    assert lines[0] == r"\begin{tabular}{lrrrrrrr}"
    assert lines[-1] == r"\end{tabular}"
    assert lines[4].startswith(
        r"=a\textbar{}b\_c\&50\%\$x\textasciicircum{}\textbraceleft{}2\textbraceright{}\textasciitilde{}"
    )
    assert r"$0.123 \pm 0.012$ & $0.312$ & $0.300$ & $0.325$ \\" in lines[4]
    assert r"$1 \times 10^{-5}$" in lines[5]
    assert "A note: 50 \\%." in lines[-2]
    for line in lines[2:6]:
        if line != r"\hline":
            assert len(re.findall(r"(?<!\\)&", line)) == 7
            assert line.endswith(r" \\")
    assert balanced("\n".join(lines))


@given(st.text(max_size=40))
def test_no_sign_of_a_text_is_left_to_latex(text):
    escaped = tex_text(text)
    assert balanced(escaped)
    bare = re.sub(r"\\text[a-z]+\{\}|\\[&%$#_{}]|\$\\(?:pm|times)\$|-\{\}", "", escaped)
    assert not set(bare) & set("\\&%$#_{}~^<>|±×")
    assert "--" not in escaped


def balanced(text: str) -> bool:
    depth = 0
    for sign in re.sub(r"\\[\\{}]", "", text):
        depth += (sign == "{") - (sign == "}")
        if depth < 0:
            return False
    return depth == 0
