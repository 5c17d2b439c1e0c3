"""Texts that others wrote are shown in a terminal as what they are."""

import pytest

from labkit.text import align, printable


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("tasks=3, größe=½ 日本", "tasks=3, größe=½ 日本"),
        ("one\ntwo\r\tthree", r"one\x0atwo\x0d\x09three"),
        ("\x1b[2J\x9b31m\x7f", r"\x1b[2J\x9b31m\x7f"),
        ("run\u202egnp\u2028", r"run\u202egnp\u2028"),
        ("\ud800 \U000e0041", r"\ud800 \U000e0041"),
    ],
)
def test_what_a_terminal_obeys_is_shown_as_its_number(text, shown):
    assert printable(text) == shown


def test_a_line_break_in_a_cell_breaks_no_table():
    assert align([["a", "b"], ["x\ny", "z"]]) == "a       b\n" + r"x\x0ay  z"
