"""Hypothesis strategies for the two tables."""

import pandas as pd
from hypothesis import strategies as st

whole = st.integers(-(2**63), 2**63 - 1)
# Names that a CSV keeps: no white space around them and nothing that ends a line.
plain_text = st.text(st.characters(exclude_categories=["C", "Z"]), min_size=1, max_size=6)
amount = st.floats(1e-3, 1e6, allow_nan=False)


@st.composite
def tables(draw, names=None, most_options=4):
    names = names or st.one_of(
        st.lists(whole, min_size=2, max_size=12, unique=True),
        st.lists(st.integers(-20, 20), min_size=2, max_size=12, unique=True),
        st.lists(plain_text, min_size=2, max_size=12, unique=True),
        st.lists(whole | plain_text, min_size=2, max_size=12, unique_by=lambda name: (type(name), name)),
    )
    servers = draw(names)
    options = st.lists(st.sampled_from(servers), min_size=2, max_size=most_options, unique=True)
    chosen = draw(st.lists(options, min_size=1, max_size=15))
    width = max(2, *(len(row) for row in chosen))
    kind = object if len({type(name) for name in servers}) > 1 or width > 2 else None
    server_table = pd.DataFrame({"server": pd.Series(servers, dtype=kind)})
    if draw(st.booleans()):
        server_table["capacity"] = [draw(amount) for _ in servers]
    choice_table = pd.DataFrame(
        {
            f"option_{place + 1}": pd.Series(
                [row[place] if place < len(row) else None for row in chosen], dtype=kind
            )
            for place in range(width)
        }
    )
    if draw(st.booleans()):
        choice_table["demand"] = [draw(amount) for _ in chosen]
    return server_table, choice_table, servers, chosen
