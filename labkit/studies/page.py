"""One self-contained page from an executed notebook: no code shown, nothing fetched."""

import html
import re
from pathlib import Path
from typing import Any

# An address in a script or link would be fetched when the page is opened.
_FETCHED = re.compile(r"<(?:script|link|img|iframe)\b[^>]*\b(?:src|href)=[\"']?(?:https?:)?//", re.IGNORECASE)
_UNUSED = re.compile(r"<script type=\"module\">.*?</script>|<script src=\"\"></script>", re.DOTALL)

_PAPERMILL = "papermill-error-cell-tag"


def write_page(notebook: Path, page: Path, title: str, question: str = "") -> None:
    """Write an executed notebook as one HTML file, headed by the title and the question of its study.

    A cell that failed shows its error as one sentence instead of the code that raised it; the sentence also
    stands at the top.

    Parameters
    ----------
    notebook : Path
        The executed notebook.
    page : Path
        The file to write.
    title : str
        The title on the page and in the browser's bar.
    question : str
        Stands under the title; paragraphs are parted by blank lines.
    """
    import nbformat
    from nbconvert.exporters import HTMLExporter

    exporter = HTMLExporter(
        exclude_input=True,
        exclude_input_prompt=True,
        exclude_output_prompt=True,
        embed_images=True,
        require_js_url="",
        mathjax_url="",
        jquery_url="",
        mermaid_js_url="",
        mermaid_layout_elk_js_url="",
    )
    content = nbformat.read(notebook, as_version=4)
    # papermill's own notes of a failure speak of numbered cells, which the page does not show
    content.cells = [cell for cell in content.cells if _PAPERMILL not in cell.metadata.get("tags", [])]
    heading = _heading(title, question)
    for cell in content.cells:
        if cell.cell_type == "markdown" and cell.source.startswith("# "):
            cell.source = f"#{cell.source}"  # the study's title is the page's
        for at, output in enumerate(cell.get("outputs", [])):
            if output.output_type == "error":
                sentence = _sentence(output)
                cell.outputs[at] = nbformat.v4.new_output("display_data", {"text/html": sentence})
                heading += f"\n{sentence}"
    content.cells.insert(0, nbformat.v4.new_markdown_cell(heading))
    made, _ = exporter.from_notebook_node(content, resources={"metadata": {"name": title}})
    made = _UNUSED.sub("", made)
    check_nothing_fetched(made)
    page.write_text(made, encoding="utf-8")


def check_nothing_fetched(page: str) -> None:
    """Raise a RuntimeError when opening a page would fetch anything from elsewhere."""
    left = _FETCHED.search(page)
    if left:
        raise RuntimeError(f"the page would fetch {page[left.start() : left.start() + 120]!r}")


def _heading(title: str, question: str) -> str:
    """Return title and question as HTML, so that no sign in them is taken for Markdown."""
    paragraphs = [" ".join(part.split()) for part in re.split(r"\n\s*\n", question) if part.strip()]
    lines = [f"<h1>{html.escape(title)}</h1>", *(f"<p>{html.escape(part)}</p>" for part in paragraphs)]
    return "\n".join(lines)


def _sentence(output: Any) -> str:
    return f"<p><strong>Stopped:</strong> {html.escape(f'{output.ename}: {output.evalue}')}</p>"
