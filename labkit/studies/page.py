"""One self-contained page from an executed notebook: no code shown, nothing fetched."""

import re
from pathlib import Path

# An address in a script or link would be fetched when the page is opened.
_FETCHED = re.compile(r"<(?:script|link|img|iframe)\b[^>]*\b(?:src|href)=[\"']?(?:https?:)?//", re.IGNORECASE)
_UNUSED = re.compile(r"<script type=\"module\">.*?</script>|<script src=\"\"></script>", re.DOTALL)


def write_page(notebook: Path, page: Path, title: str) -> None:
    """Write an executed notebook as one HTML file.

    Parameters
    ----------
    notebook : Path
        The executed notebook.
    page : Path
        The file to write.
    title : str
        The title in the browser's bar.
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
    html, _ = exporter.from_notebook_node(content, resources={"metadata": {"name": title}})
    html = _UNUSED.sub("", html)
    left = _FETCHED.search(html)
    if left:
        raise RuntimeError(f"the page would fetch {html[left.start() : left.start() + 120]!r}")
    page.write_text(html, encoding="utf-8")
