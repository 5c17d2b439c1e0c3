"""Cards say what an object holds, at once, whatever its names are, and never in the way of the object."""

import time
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest
from IPython.core.formatters import DisplayFormatter

import labkit as lk
from labkit.cards.contents import CARDS
from labkit.cards.fragment import ROWS, Card, Listing, html, names, number
from tests.figures.test_every_figure import growth

HOSTILE = (
    "<script>alert(1)</script>",
    "\"><img src=x onerror='alert(2)'>",
    "</td></table><style>*{display:none}</style>",
    "&lt;b&gt; & $x^2$ \\(y\\)",
    "right\u202eto left",
    "bell\x07 and\x1b[31m red",
    "long " * 200,
)
ALLOWED = {"div", "table", "caption", "thead", "tbody", "tr", "th", "td", "p"}


class Page(HTMLParser):
    """Gather what a browser would make of a fragment, and complain about what does not fit together."""

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.open, self.seen, self.attributes, self.words = [], [], [], []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        self.open.append(tag)
        self.seen.append(tag)
        self.attributes += [(tag, *each) for each in attrs]

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.words.append(data)


def checked(thing):
    """Return the texts of a card after checking that it is safe and accessible."""
    text = thing._repr_html_() if hasattr(thing, "_repr_html_") else html(thing)
    page = Page(text)
    assert set(page.seen) <= ALLOWED
    assert {name for _, name, _ in page.attributes} <= {"style", "scope"}
    styles = " ".join(value for _, name, value in page.attributes if name == "style")
    assert "url" not in styles
    assert "expression" not in styles
    assert page.seen.count("caption") == page.seen.count("table") >= 1
    scopes = [value for tag, name, value in page.attributes if name == "scope"]
    assert len(scopes) == page.seen.count("th")
    assert {"row", "col"} >= set(scopes)
    assert all(word.isprintable() for word in page.words)
    assert len(text) < 40_000
    return page.words


def hostile_fleet():
    servers = pd.DataFrame({"server": HOSTILE, "capacity": np.arange(1.0, 1 + len(HOSTILE))})
    choices = pd.DataFrame({"option_1": HOSTILE[:-1], "option_2": HOSTILE[1:], "demand": 2.5})
    return lk.Fleet(servers, choices)


@pytest.fixture(scope="module")
def things():
    fleet = hostile_fleet()
    served = lk.serve(
        lk.ring(6), "least-loaded", load_factor=0.5, horizon=400.0, warmup=50.0, target=3.0, replicates=3,
        rng=1,
    )  # fmt: skip
    found = pd.DataFrame(
        [{"policy": "<b>", "information": "fresh", "criterion": "sojourns beyond 60", "risk": 0.01,
          "scale": 1.25, "lower": 1.2, "upper": np.nan, "capacity": 12_500.0, "load_factor": np.nan,
          "confidence": 0.95}]
    )  # fmt: skip
    return {
        "Fleet": fleet,
        "Survey": lk.survey(fleet),
        "Outcome": lk.place(fleet, "least-loaded", tasks=60, replicates=8, rng=1),
        "ServiceOutcome": served,
        "Provision": lk.Provision(found, found[["scale", "lower", "upper"]]),
        "GrowthFit": lk.fit_growth(growth(), x="servers", y="excess", rng=1),
        "Forecast": lk.forecast(lk.torus(5, 5), rng=1),
        "Plan": lk.plan(fleet, "least-loaded(ties=first)"),
    }


def test_every_kind_has_a_card_that_a_notebook_takes(things):
    assert set(things) == set(CARDS)
    for kind, thing in things.items():
        words = checked(thing)
        assert len(words) > 12, kind
        bundle, _ = DisplayFormatter().format(thing)
        assert bundle["text/html"] == thing._repr_html_()
        assert bundle["text/plain"] == repr(thing)
        assert "\n" not in repr(thing)


def test_names_are_text_and_nothing_else(things):
    words = checked(things["Fleet"])
    assert HOSTILE[0] in words
    assert HOSTILE[1] in words
    assert "right\\u202eto left" in words


def test_numbers_on_the_cards_are_those_of_the_objects(things):
    outcome = things["Outcome"]
    last = outcome.measures[outcome.measures["tasks"] == 60]
    words = checked(outcome)
    assert number(float(last["max_utilisation"].median())) in words
    assert number(float(last["gap"].max())) in words
    served = checked(things["ServiceOutcome"])
    assert number(float(things["ServiceOutcome"].measures["sojourn_mean"].mean())) in served
    assert number(things["Survey"].optimum) in checked(things["Survey"])
    assert "1.200 to –" in checked(things["Provision"])
    growth_words = checked(things["GrowthFit"])
    assert number(float(things["GrowthFit"].weights.iloc[0])) in growth_words
    assert "the first" in " ".join(growth_words) or len(things["GrowthFit"].weights) <= ROWS


def test_fleets_of_ten_million_servers_show_at_once():
    size = 10_000_000
    every = np.arange(size)
    servers = pd.DataFrame({"server": every, "capacity": 1.0 + every % 7})
    choices = pd.DataFrame({"option_1": every[:-1], "option_2": every[1:], "demand": 1.0 + every[:-1] % 3})
    fleet = lk.Fleet(servers, choices)
    began = time.perf_counter()
    words = checked(fleet)
    assert time.perf_counter() - began < 0.5
    assert "10,000,000" in words
    assert "Servers (the first 5 of 10,000,000)" in words
    began = time.perf_counter()
    assert "any 3 different servers" in checked(lk.complete(10**9, options=3))
    assert time.perf_counter() - began < 0.5


def test_small_odd_and_spoilt_objects_are_shown_too(things):
    three = lk.Fleet(
        pd.DataFrame({"server": list("abc")}),
        pd.DataFrame({"option_1": ["a", "a"], "option_2": ["b", "c"], "option_3": ["c", None]}),
    )
    assert "–" in checked(three)
    assert "yes" in checked(lk.survey(lk.ring(3)))
    outcome = things["Outcome"]
    assert "Placed work" in checked(replace(outcome, measured=outcome.measured[:0]))
    assert "–" in checked(replace(outcome, measured=np.full_like(outcome.measured, np.nan)))
    assert "Served work" in checked(replace(things["ServiceOutcome"], results=()))
    nothing = lk.survey(lk.ring(3))
    nothing.optimum = float("nan")
    assert "–" in checked(nothing)


def test_what_cannot_be_shown_leaves_the_text(things):
    broken = replace(things["Provision"], table=pd.DataFrame())
    assert broken._repr_html_() is None
    bundle, _ = DisplayFormatter().format(replace(things["Plan"], header={}, tables={}))
    assert "text/html" not in bundle


def test_long_tables_are_cut_with_a_count():
    rows = [(f"row {at}", at) for at in range(100)]
    words = checked(Card("Many", [], [Listing("Rows", ("name", "number"), rows, 12_345)]))
    assert f"Rows (the first {ROWS} of 12,345)" in words
    assert "row 7" in words
    assert "row 8" not in words
    assert names(["a", "b"], 12) == "a, b and 10 more"
    assert names(["a", "b"], 2) == "a, b"


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (3, "3"), (12345, "12,345"), (10**40, "about 10^40"), (0.80004, "0.8000"), (-0.5, "−0.5000"),
        (1.25e-7, "1.250e-07"), (float("nan"), "–"), (float("inf"), "∞"), (-float("inf"), "−∞"),
        (123456.7, "123,457"), (2.0, "2"), (1e300, "1e+300"), ("a word", "a word"),
        (np.float64(0.1), "0.1000"), (9999.99999, "10,000"), (-9999.6, "−10,000"), (9999.4, "9999"),
        (-5, "−5"), (-12345, "−12,345"), (-(10**40), "about −10^40"), (-1e300, "−1e+300"),
    ],
)  # fmt: skip
def test_numbers_in_words(value, words):
    assert number(value) == words
