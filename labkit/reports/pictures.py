"""Pictures of a notebook as figures of a report: inside the page, with words for who cannot see them."""

import base64
import html
import re
from collections.abc import Mapping
from typing import Any

SVG, PNG, JPEG = "image/svg+xml", "image/png", "image/jpeg"
KINDS = (SVG, PNG, JPEG)


def figure_html(output: Mapping[str, Any]) -> str | None:
    """Return an output that is a picture as an HTML figure; None when it is none.

    An SVG becomes a picture, too: there it can neither run nor fetch anything.

    Parameters
    ----------
    output : mapping
        An output of a notebook, with `data` and `metadata`; the figures of `labkit.figures` say there what
        they show, and how many pixels wide they are made for.
    """
    kind = next((kind for kind in KINDS if kind in output.get("data", {})), None)
    if kind is None:
        return None
    content = output["data"][kind]
    content = "".join(content) if isinstance(content, list) else content
    encoded = base64.b64encode(content.encode()).decode() if kind == SVG else "".join(content.split())
    told = output.get("metadata", {}).get(kind, {})
    width = told.get("width")
    size = f' width="{width}"' if isinstance(width, int) and width > 0 else ""
    alt = " ".join(str(told.get("alt", "")).split())
    source = f"data:{kind};base64,{html.escape(encoded)}"
    return f'<figure><img alt="{html.escape(alt)}" src="{source}"{size}></figure>'


def caption_of(alt: str) -> str:
    """Return the caption of a figure: the first sentence of what it shows."""
    first = re.split(r"(?<=[.!?])\s+(?=[A-Z0-9])", alt, maxsplit=1)[0]
    return first if first.endswith((".", "!", "?")) else f"{first}."
