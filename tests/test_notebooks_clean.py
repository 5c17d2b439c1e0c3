"""Committed notebooks carry no outputs and one cell of documented parameters."""

import ast
import re
from pathlib import Path

import nbformat
import pytest
from nbformat.v4 import new_code_cell, new_markdown_cell, new_notebook, new_output

NOTEBOOKS = sorted((Path(__file__).parents[1] / "notebooks").rglob("*.ipynb"))
KERNEL = {"name": "python3", "language": "python"}
LINE = re.compile(r"[a-z]\w*: \S.* = \S.*  # \S.*")
RULE = "each line is: name: type = literal  # help"


def is_parameter(line: str) -> bool:
    """Tell whether `line` is one annotated literal with its help behind it."""
    if not LINE.fullmatch(line):
        return False
    try:
        [statement] = ast.parse(line).body
        assert isinstance(statement, ast.AnnAssign)
        assert isinstance(statement.target, ast.Name)
        ast.literal_eval(statement.value)
    except (AssertionError, SyntaxError, ValueError):
        return False
    return line[statement.end_col_offset :].startswith("  # ")


def faults_of(path: Path) -> list[str]:
    """Return what makes the notebook at `path` unfit to commit."""
    notebook = nbformat.read(path, as_version=nbformat.NO_CONVERT)
    try:
        nbformat.validate(notebook)
    except nbformat.ValidationError as error:
        return [f"no valid notebook: {error.message}"]
    faults = []
    metadata = notebook.metadata
    if (notebook.nbformat, notebook.nbformat_minor) < (4, 5):
        faults.append("older than format 4.5, so that its cells have no lasting ids")
    kernel = metadata.get("kernelspec", {})
    if {key: kernel.get(key) for key in KERNEL} != KERNEL:
        faults.append(f"kernelspec is {dict(kernel)}; it holds {KERNEL}")
    faults += [
        f"metadata.{key} is set; make strip" for key in ("language_info", "papermill") if key in metadata
    ]

    code = [cell for cell in notebook.cells if cell.cell_type == "code"]
    for number, cell in enumerate(code, start=1):
        if cell.outputs or cell.execution_count is not None:
            faults.append(f"code cell {number} has outputs or an execution count; make strip")
    faults += [
        f"cell {cell.id} holds metadata.{key}; make strip"
        for cell in notebook.cells
        for key in ("papermill", "execution")
        if key in cell.metadata
    ]
    tags = [tag for cell in code for tag in cell.metadata.get("tags", [])]
    if "injected-parameters" in tags:
        faults.append("holds a cell of injected parameters; delete it")
    if tags.count("parameters") != 1 or "parameters" not in code[0].metadata.get("tags", []):
        faults.append("the first code cell, and it alone, is tagged parameters")
        return faults
    lines = code[0].source.splitlines()
    faults += [f"parameter line {line!r}; {RULE}" for line in lines if not is_parameter(line)]
    return faults if lines else [*faults, f"no parameters; {RULE}"]


def test_there_are_notebooks():
    assert NOTEBOOKS


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.name)
def test_notebook_is_clean(path):
    assert faults_of(path) == []


def clean():
    parameters = new_code_cell(
        'tasks: int = 1000  # tasks placed\nfleet: str = "experiments/demo"  # folder # of the two tables',
        id="given",
        metadata={"tags": ["parameters"]},
    )
    cells = [new_markdown_cell("# Study", id="title"), parameters, new_code_cell("1 + 1", id="sum")]
    return new_notebook(cells=cells, metadata={"kernelspec": {**KERNEL, "display_name": "Python 3"}})


def write(notebook, tmp_path):
    path = tmp_path / "study.ipynb"
    nbformat.write(notebook, path)
    return path


def test_a_clean_notebook_passes(tmp_path):
    assert faults_of(write(clean(), tmp_path)) == []


def no_language(notebook):
    del notebook.metadata.kernelspec["language"]


def language_info(notebook):
    notebook.metadata.language_info = {"name": "python", "version": "3.11.7"}


def papermill_mark(notebook):
    notebook.metadata.papermill = {"duration": 1.0}


def papermill_cell(notebook):
    notebook.cells[0].metadata.papermill = {"duration": 1.0}


def output(notebook):
    notebook.cells[2].outputs = [new_output("stream", text="2")]


def count(notebook):
    notebook.cells[2].execution_count = 1


def no_parameters(notebook):
    notebook.cells[1].metadata.tags = []


def two_parameters(notebook):
    notebook.cells[2].metadata.tags = ["parameters"]


def late_parameters(notebook):
    notebook.cells.insert(1, new_code_cell("import math", id="early"))


def injected(notebook):
    notebook.cells[2].metadata.tags = ["injected-parameters"]


def empty(notebook):
    notebook.cells[1].source = ""


def old_format(notebook):
    notebook.nbformat_minor = 4
    for cell in notebook.cells:
        del cell["id"]


@pytest.mark.parametrize(
    ("spoil", "fault"),
    [
        (no_language, "kernelspec is"),
        (language_info, "metadata.language_info"),
        (papermill_mark, "metadata.papermill"),
        (papermill_cell, "cell title holds metadata.papermill"),
        (output, "code cell 2 has outputs"),
        (count, "an execution count"),
        (no_parameters, "tagged parameters"),
        (two_parameters, "tagged parameters"),
        (late_parameters, "tagged parameters"),
        (injected, "injected parameters"),
        (empty, "no parameters"),
        (old_format, "no lasting ids"),
    ],
)
def test_a_dirty_notebook_is_named(tmp_path, spoil, fault):
    notebook = clean()
    spoil(notebook)
    [found] = faults_of(write(notebook, tmp_path))
    assert fault in found


@pytest.mark.parametrize(
    "line",
    [
        "tasks = 1000  # tasks placed",
        "tasks: int = 1000",
        "tasks: int = 1000 # one blank before the help",
        "tasks: int = 10 ** 3  # not a literal",
        "tasks: int = 1000  #",
        "# only a comment",
        "",
        'title: str = "a  # b"',
        "a: int = 1; b: int = 2  # two",
    ],
)
def test_a_poor_parameter_line_is_named(tmp_path, line):
    notebook = clean()
    notebook.cells[1].source = f"{line}\nfleet: str = 'demo'  # folder"
    [found] = faults_of(write(notebook, tmp_path))
    assert repr(line) in found
