"""What of a notebook's page may stand in a report: what is on a list, nothing that runs or is fetched."""

from bs4 import BeautifulSoup
from bs4.element import PreformattedString

# Left as they are, with these attributes; of any other element only what is inside stays.
_PLAIN = """
    h1 h2 h3 h4 h5 h6 p div section blockquote pre hr br ul li dl dt dd figure figcaption details summary
    strong em b i code kbd samp sub sup small abbr mark del ins table caption thead tbody tfoot tr
"""
ALLOWED: dict[str, tuple[str, ...]] = {
    **dict.fromkeys(_PLAIN.split(), ()),
    "ol": ("start",),
    "th": ("colspan", "rowspan", "scope"),
    "td": ("colspan", "rowspan"),
    "img": ("alt", "src", "width"),
    "a": ("href",),
}
# Gone with all that is inside: code, styles and what only works with them.
_GONE = """
    script style link meta base title template noscript iframe frame object embed applet audio video canvas
    math form input button select textarea option source track map area
"""

PICTURE = ("data:image/png;base64,", "data:image/svg+xml;base64,", "data:image/jpeg;base64,")
LEFT_OUT = "A picture that this page cannot hold is left out."


def clean(page: BeautifulSoup) -> None:
    """Take out of a parsed page, in place, all that is not allowed.

    Pictures stay when the page itself holds them; of another a sentence tells. Links stay when they lead to
    the web, where nobody goes without a click.

    Parameters
    ----------
    page : bs4.BeautifulSoup
    """
    for text in page.find_all(string=lambda text: isinstance(text, PreformattedString)):
        text.extract()  # comments and the like
    for element in page.find_all(_GONE.split()):
        element.decompose()
    for drawing in page.find_all("svg"):
        drawing.replace_with(LEFT_OUT)
    for element in page.find_all(True):
        if element.name not in ALLOWED:
            element.unwrap()
            continue
        allowed = ALLOWED[element.name]
        element.attrs = {name: value for name, value in element.attrs.items() if name in allowed}
        if element.name == "img" and not str(element.get("src", "")).startswith(PICTURE):
            element.replace_with(LEFT_OUT)
        elif element.name == "a" and not str(element.get("href", "")).startswith(("https://", "http://")):
            element.unwrap()
