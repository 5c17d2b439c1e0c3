"""Executed notebooks as chapters: no code, headings in order, figures with words, nothing that runs."""

import base64
import re

import nbformat
import pytest
from bs4 import BeautifulSoup
from nbformat.v4 import new_code_cell, new_markdown_cell, new_notebook, new_output

from labkit.figures.style import describe, sheet
from labkit.reports.body import NOT_DESCRIBED, UNTITLED, Source, chapters_of
from labkit.reports.cleaning import LEFT_OUT
from labkit.reports.pictures import caption_of
from tests.reports.small import HOSTILE

FRAME = """<table><thead><tr><th></th><th>rule</th><th>gap</th></tr></thead>
<tbody><tr><th>0</th><td>one</td><td>1,200</td></tr><tr><th>1</th><td>other</td><td>–</td></tr></tbody></table>"""


def shown(data, **metadata):
    return new_output("display_data", data, metadata=metadata)


def chapters(tmp_path, *cells, title="", taken=()):
    made = []
    for cell in cells:
        if isinstance(cell, str):
            made.append(new_markdown_cell(cell))
        else:
            made.append(new_code_cell("SECRET_CODE = 1", outputs=[cell]))
    nbformat.write(new_notebook(cells=made), tmp_path / "n.ipynb")
    return chapters_of([Source(tmp_path / "n.ipynb", title)], taken)


def content(tmp_path, *cells):
    [chapter] = chapters(tmp_path, *cells)
    return chapter.content


def test_a_drawing_is_a_figure_with_its_own_words(tmp_path):
    drawing = describe(sheet(), f'the load of "{HOSTILE}" is 3. More follows.')
    data, about = drawing._repr_mimebundle_()
    page = content(tmp_path, shown(data, **about))
    [picture] = BeautifulSoup(page, "html.parser").find_all("img")
    assert picture["alt"] == f'The load of "{HOSTILE}" is 3. More follows.'
    assert picture["width"] == str(about["image/png"]["width"])
    assert re.search(r"<figcaption>Figure 1\. The load of .* is 3\.</figcaption>", page)
    assert base64.b64encode(drawing.png()).decode() in page


def test_a_figure_without_words_says_so(tmp_path):
    page = content(tmp_path, shown({"image/svg+xml": "<svg onload='alert(1)'></svg>"}))
    assert f'alt="Figure 1: {NOT_DESCRIBED}"' in page
    assert "data:image/svg+xml;base64," in page
    assert "onload" not in page


@pytest.mark.parametrize(
    "hostile",
    [
        HOSTILE,
        "<script>alert(1)</script>",
        "<svg><script>alert(1)</script></svg>",
        "<style>@import 'http://x.example'</style>",
        "<!-- <b>alert(1)</b> -->",
        "<p onclick=alert(1) style='background:url(http://x.example)'>word</p>",
        "<a href='javascript:alert(1)'>word</a>",
        "<iframe src='http://x.example'></iframe>",
        "<math><mtext><table><mglyph><style><img src=x onerror=alert(1)>",
        "<form action='http://x.example'><input name=alert></form>",
    ],
)
def test_nothing_that_runs_or_is_fetched_is_left(tmp_path, hostile):
    for cell in (hostile, shown({"text/html": hostile})):
        page = content(tmp_path, "Before.", cell, "After.")
        assert "alert" not in page
        assert "x.example" not in page
        assert page.index("Before.") < page.index("After.")


def test_what_cannot_be_held_is_told_of_and_links_to_the_web_stay(tmp_path):
    page = content(tmp_path, "![far](http://x.example/p.png) [near](https://labkit.example/a)")
    assert LEFT_OUT in page
    assert '<a href="https://labkit.example/a">near</a>' in page


def test_text_is_text_and_code_and_notes_of_the_execution_are_gone(tmp_path):
    page = content(
        tmp_path,
        new_output("stream", name="stdout", text=f"said {HOSTILE}"),
        new_output("stream", name="stderr", text="a bar"),
        new_output("error", ename="HeadroomExceeded", evalue=f"above {HOSTILE}", traceback=["line 1"]),
    )
    assert "said &lt;img" in page
    assert "above &lt;img" in page
    assert not re.search("SECRET_CODE|a bar|line 1|<img", page)


def test_headings_stand_in_order_below_the_chapter(tmp_path):
    [chapter] = chapters(
        tmp_path, "# The *whole*", "### Deep", "## Part", "###### Deepest", "## Part", taken=["part"]
    )
    assert (chapter.heading.text, chapter.heading.anchor) == ("The whole", "the-whole")
    found = re.findall(r'<h(\d) id="([^"]+)">', chapter.content)
    assert found == [("3", "deep"), ("3", "part-2"), ("4", "deepest"), ("3", "part-3")]
    assert [entry.text for entry in chapter.heading.below] == ["Deep", "Part", "Part"]
    [untitled] = chapters(tmp_path, "No heading.")
    assert untitled.heading.text == UNTITLED
    [named] = chapters(tmp_path, "# Own", title="tasks = 3")
    assert named.heading.text == "tasks = 3"


def test_tables_have_captions_headers_and_numbers_to_the_right(tmp_path):
    page = content(tmp_path, "## Needs", shown({"text/html": FRAME}), shown({"text/html": FRAME}))
    assert re.findall(r"<caption>(.*?)</caption>", page) == ["Table 1. Needs", "Table 2. Needs (2)"]
    assert (
        page.count('<td class="number">1,200</td>')
        == page.count('<th class="number" scope="col">gap</th>')
        == 2
    )
    assert page.count("<th") - page.count("<thead") == 4  # row numbers of pandas are gone
    assert page.count('tabindex="0"') == 2


@pytest.mark.parametrize(
    ("alt", "caption"), [("Loads of 3.5 kg. More.", "Loads of 3.5 kg."), ("Loads", "Loads."), ("A? B", "A?")]
)
def test_a_caption_is_the_first_sentence(alt, caption):
    assert caption_of(alt) == caption
