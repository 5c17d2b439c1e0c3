"""What is shown in words: facts of a server as HTML that takes the colours of the page it is on."""

from collections.abc import Iterable
from html import escape

import numpy as np
import pandas as pd

from labkit.analysis.wording import percent, quantity, utilisation, writer
from labkit.explorer.state import HIGHEST, State
from labkit.text import printable

# Rows of a table of choices or neighbours, and names in a sentence.
ROWS, NAMES = 8, 12
LONGEST = 40

STYLE = (
    "<style>"
    ".choice-facts{font-family:var(--jp-ui-font-family,sans-serif);font-size:13px;line-height:1.45;"
    "color:var(--jp-ui-font-color1,#222)}"
    ".choice-facts h4{margin:0 0 4px;font-size:15px;font-weight:600}"
    ".choice-facts p{margin:0 0 6px}"
    ".choice-facts table{border-collapse:collapse;margin:2px 0 8px}"
    ".choice-facts caption{text-align:left;font-weight:600;padding:4px 0 2px;white-space:nowrap}"
    ".choice-facts th,.choice-facts td{padding:1px 14px 1px 0;text-align:right;font-weight:normal;"
    "border-bottom:1px solid var(--jp-border-color2,#ddd);white-space:nowrap;background:none}"
    ".choice-facts th{color:var(--jp-ui-font-color2,#555)}"
    ".choice-facts .first{text-align:left;white-space:normal;overflow-wrap:anywhere}"
    ".choice-facts .tables{display:flex;flex-wrap:wrap;gap:0 32px;align-items:flex-start}"
    "</style>"
)


def safe(name: str, longest: int = LONGEST) -> str:
    """Return a name for a page: shortened, nothing in it is obeyed."""
    name = printable(name)
    return escape(name if len(name) <= longest else f"{name[: longest - 1]}…")


def heading(state: State) -> str:
    """Return what is selected, in a few words."""
    if state.whole_bottleneck:
        return f"The bottleneck: {_count(len(state.bottleneck), 'server')}"
    return "Nothing is selected" if state.selected is None else safe(state.name(state.selected), 80)


def facts_in_html(state: State) -> str:
    """Return the facts of what is selected."""
    return f'{STYLE}<div class="choice-facts" role="status"><h4>{heading(state)}</h4>{_facts(state)}</div>'


def _facts(state: State) -> str:
    if state.whole_bottleneck:
        return f'<p>{_bottleneck(state)}</p><div class="tables">{_loads(state)}</div>'
    if state.selected is None:
        return "<p>Click a server, or type its name, to see what is known about it.</p>"
    tables = _loads(state) + _choices(state) + _neighbours(state)
    return f'<p>{_server(state)}</p><div class="tables">{tables}</div>'


def _server(state: State) -> str:
    facts = state.facts()
    confined = ". It belongs to the <b>bottleneck</b>" if facts["bottleneck"] else ""
    return (
        f"Capacity <b>{quantity(facts['capacity'])}</b> work units · demand that can reach it "
        f"<b>{quantity(facts['reach'])}</b> ({percent(100 * facts['reach'] / facts['capacity'])} % of its "
        f"capacity), in {_count(facts['choices'], 'choice')} with {_count(facts['neighbours'], 'neighbour')}"
        f" · fair utilisation {utilisation(facts['fair_utilisation'])} when the demand is placed once, "
        f"level {facts['level']} of {facts['levels']} from the fullest{confined}."
    )


def _bottleneck(state: State) -> str:
    facts = state.facts()
    names = [safe(state.name(each)) for each in state.bottleneck[:NAMES]]
    more = f" and {len(state.bottleneck) - NAMES:,} more" if len(state.bottleneck) > NAMES else ""
    return (
        f"Demand of <b>{quantity(facts['confined'])}</b> can go only to these servers, whose capacity is "
        f"<b>{quantity(facts['capacity'])}</b>: no rule brings the highest utilisation below "
        f"<b>{utilisation(facts['optimum'])}</b> when the demand is placed once; the mean of the fleet is "
        f"{utilisation(facts['mean'])}.<br>{', '.join(names)}{more}."
    )


def _loads(state: State) -> str:
    loads = state.loads()
    write = writer(loads["utilisation"].max())
    known = int(loads["replicates"].max())
    rows = []
    for row in loads.to_dict("records"):
        cells = [safe(row["rule"], 28), quantity(row["load"]), write(row["utilisation"])]
        if known:
            cells += [write(row["highest"]), _of(row["fullest"], 1.0)]
        rows.append(cells)
    heads = ["rule", "load", "utilisation"]
    if known:
        heads += [f"highest of {known:,}", "fullest in"]
    together = " of all together" if state.whole_bottleneck else ""
    mean = f", mean of {_count(known, 'replicate')}" if known else ", demand placed once"
    return _table(f"Load (work units) and load ÷ capacity{together}{mean}", heads, rows)


def _choices(state: State) -> str:
    table = state.choices()
    total = table["demand"].sum()
    rows = [
        [" or ".join(safe(name, 22) for name in options), quantity(demand), _of(demand, total)]
        for options, demand in list(zip(table["options"], table["demand"], strict=True))[:ROWS]
    ]
    return _table(f"Its choices{_only(table)}", ["options", "demand", "share"], rows)


def _neighbours(state: State) -> str:
    table = state.neighbours()
    numbers = table[list(state.shown)].to_numpy()
    write = writer(numbers.max() if len(table) else 1.0)
    rows = [
        [safe(str(table["server"][at]), 22), quantity(table["capacity"][at]), quantity(table["shared"][at])]
        + [write(value) for value in numbers[at]]
        for at in range(min(ROWS, len(table)))
    ]
    heads = ["server", "capacity", "shared", *(safe(name, 18) for name in state.shown)]
    return _table(f"Its neighbours, by shared demand{_only(table)}", heads, rows)


def _only(table: pd.DataFrame) -> str:
    return f" (first {ROWS} of {len(table):,})" if len(table) > ROWS else ""


def _of(part: float, total: float) -> str:
    return "–" if total == 0 or np.isnan(part) else f"{percent(100 * part / total)} %"


def _count(number: int, thing: str) -> str:
    return f"{number:,} {thing}{'s' * (number != 1)}"


def _table(caption: str, heads: Iterable[str], rows: list[list[str]]) -> str:
    """Return a table; its cells are HTML already."""
    if not rows:
        return ""
    head = "".join(f'<th scope="col"{_first(at)}>{cell}</th>' for at, cell in enumerate(heads))
    body = "".join(
        "<tr>" + "".join(f"<td{_first(at)}>{cell}</td>" for at, cell in enumerate(row)) + "</tr>"
        for row in rows
    )
    return f"<table><caption>{caption}</caption><tr>{head}</tr>{body}</table>"


def _first(at: int) -> str:
    return ' class="first"' if at == 0 else ""


def measure_in_words(state: State) -> str:
    """Return what the colours mean, with its unit."""
    if all(state.sides[name].replicates == 0 for name in state.shown):
        return "fair utilisation (load ÷ capacity)"
    return f"utilisation (load ÷ capacity), {'highest' if state.measure == HIGHEST else 'mean'} of replicates"


def side_in_words(state: State, name: str) -> str:
    """Return a line under the name of a side: its fullest server and the mean utilisation."""
    values = state.values(name)
    top = int(np.argmax(values))
    write = writer(state.limits()[1])
    mean = state.sides[name].load.sum() / state.capacity.sum()
    return f"highest {write(values[top])} ({printable(_short(state.name(top)))}) · mean {write(mean)}"


def key_in_words(state: State) -> str:
    """Return how to read the drawing, and how much of the fleet is drawn."""
    part = state.part
    words = ["Area: capacity", "line width: demand"]
    if len(state.bottleneck):
        words.append("orange ring: bottleneck")
    words.append("black: selected server and its choices")
    if part.groups:
        words.append("diamond: a choice of three or more servers, whose spokes lead to them")
    if len(part.servers) < state.fleet.size:
        words.append(
            f"{len(part.servers):,} of {state.fleet.size:,} servers are drawn, the nearest to the selection; "
            "pale rim: has choices with servers that are not drawn"
        )
    return " · ".join(words)


def alt_in_words(state: State) -> str:
    """Return what the picture shows, for readers who cannot see it."""
    sides = " beside ".join(f"{name}, {side_in_words(state, name)}" for name in state.shown)
    return f"Choice graph of {_count(state.fleet.size, 'server')} by {measure_in_words(state)}: {sides}"


def _short(name: str) -> str:
    return name if len(name) <= 18 else f"{name[:17]}…"
