"""The explorer without a browser: what is selected, drawn, told and refused."""

import re

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.engine.placement import Outcome
from labkit.errors import InputError
from labkit.explorer import explorer as door
from labkit.explorer.board import escaped
from labkit.explorer.desk import find

HOSTILE = '<img src=x onerror="alert(1)"> $x$ &amp;'


def placed(fleet, policy, loads):
    """An outcome with these loads: nothing here depends on a rule."""
    loads = np.asarray(loads, dtype=np.int64)
    tasks = int(loads[0].sum())
    return Outcome(fleet, policy, "fresh", loads, np.array([tasks]), np.empty((len(loads), 1, 7)), tasks)


def desk_of(explorer):
    """The widget that is made when it is first asked for."""
    assert explorer.widget is explorer._desk.box
    return explorer._desk


@pytest.fixture(scope="module")
def yard():
    """Two small kilns that hold most of the work, two barns, a choice of three, a lone shed."""
    servers = pd.DataFrame(
        {"server": ["kiln-1", "kiln-2", "barn-1", HOSTILE, "shed"], "capacity": [10, 10, 20, 20, 5]}
    )
    choices = pd.DataFrame(
        [("kiln-1", "kiln-2", None, 18), ("kiln-2", "barn-1", None, 2), ("kiln-2", "barn-1", HOSTILE, 4)],
        columns=["option_1", "option_2", "option_3", "demand"],
    )
    return lk.Fleet(servers, choices)


@pytest.fixture(scope="module")
def pair(yard):
    even = placed(yard, "even", [[9, 9, 3, 3, 0], [9, 9, 2, 4, 0]])
    return [even, placed(yard, "uneven", [[18, 0, 3, 3, 0], [14, 4, 2, 4, 0]])]


@pytest.fixture
def around(yard, pair):
    return lk.explore(yard, pair)


def test_a_server_is_selected_by_name_and_its_loads_stand_side_by_side(around, yard):
    assert around.selected is None
    around.select("kiln-1")
    loads = around.loads.set_index("rule")
    assert list(loads.index) == ["even", "uneven", "fair split"]
    assert loads["load"].tolist() == [9, 16, 9]
    assert loads["utilisation"].tolist() == pytest.approx([0.9, 1.6, 0.9])
    assert loads["highest"].tolist()[:2] == pytest.approx([0.9, 1.8])
    assert loads["fullest"].tolist()[:2] == [1.0, 1.0]
    assert loads["replicates"].tolist() == [2, 2, 0]
    facts = around._state.facts()
    assert (facts["capacity"], facts["reach"], facts["choices"], facts["neighbours"]) == (10, 18, 1, 1)


def test_neighbours_and_choices_count_choices_of_three(around):
    around.select("kiln-2")
    near = around.neighbours.set_index("server")
    assert near["shared"].to_dict() == {"kiln-1": 18, "barn-1": 6, HOSTILE: 4}
    assert near.loc["kiln-1", ["even", "uneven"]].tolist() == pytest.approx([0.9, 1.6])
    choices = around._state.choices()
    assert choices["demand"].tolist() == [18, 4, 2]
    assert choices["options"][1] == ("kiln-2", "barn-1", HOSTILE)
    assert around._state.surroundings.neighbours(4) == {}


def test_the_bottleneck_is_that_of_the_survey(around, yard):
    around.select_bottleneck()
    best = lk.survey(yard)
    state = around._state
    assert tuple(map(state.name, state.bottleneck)) == best.bottleneck == ("kiln-1", "kiln-2")
    assert state.facts()["confined"] == pytest.approx(18)
    together = around.loads.set_index("rule")["utilisation"]
    assert together["even"] == pytest.approx(18 / 20)
    with pytest.raises(InputError, match="has no bottleneck"):
        lk.explore(lk.ring(5)).select_bottleneck()


def test_both_sides_share_one_colour_scale(around):
    state = around._state
    assert state.limits() == pytest.approx((0, 1.6))
    figure = desk_of(around).board.figure
    assert (figure.layout.coloraxis.cmin, figure.layout.coloraxis.cmax) == pytest.approx((0, 1.6))
    panels = [trace for trace in figure.data if trace.marker.coloraxis]
    assert len(panels) == 2
    assert panels[0].x.tolist() == panels[1].x.tolist()
    assert panels[0].marker.color.tolist() == pytest.approx([0.9, 0.9, 0.125, 0.175, 0])
    assert panels[1].marker.color.tolist() == pytest.approx([1.6, 0.2, 0.125, 0.175, 0])
    assert figure.layout.xaxis2.matches == "x"


def test_controls_of_the_widget_change_what_is_shown(around):
    desk = desk_of(around)
    desk.board._answer(None, type("Points", (), {"point_inds": [2]}), None)
    assert around.selected == "barn-1"
    assert desk.name.value == "barn-1"
    assert "<h4>barn-1</h4>" in desk.facts.value
    desk.ways.children[1].click()
    assert around.selected == "kiln-2"
    desk.name.value = "kiln-9"
    assert around.selected == "kiln-2"
    assert "did you mean" in desk.message.value
    desk.name.value = "kiln-1"
    assert around.selected == "kiln-1"
    assert desk.message.value == ""
    desk.bottleneck.click()
    assert around.selected is None
    assert "The bottleneck: 2 servers" in desk.facts.value
    around.select("shed")
    desk.board.zoom(0.5)
    low, high = desk.board.figure.layout.xaxis.range
    assert high - low == pytest.approx(1.12)
    assert (high + low) / 2 == pytest.approx(around._state.part.places[4, 0])


def test_the_highest_of_the_replicates_can_be_coloured(around):
    state = around._state
    state.measure = "highest"
    assert state.values("uneven").tolist() == pytest.approx([1.8, 0.4, 0.15, 0.2, 0])


def test_of_a_large_fleet_the_nearest_are_drawn():
    around = lk.explore(lk.ring(5_000), select=1_000, nearby=9)
    assert around.drawn == list(range(996, 1005))
    near = around.neighbours["server"].tolist()
    assert near == [999, 1_001]
    assert around.select(near[1]).selected == 1_001
    around.select(1_002)
    assert around.drawn == list(range(996, 1005))
    around.select(3_000)
    assert around.drawn == list(range(2_996, 3_005))
    part = around._state.part
    assert part.cut.tolist() == [True, *7 * [False], True]
    assert len(part.pairs) == 8
    assert find(around._state, "17") == 17
    assert find(around._state, " 017 ") == 17
    for typed in ("-3", "--5", "-", "9" * 19, "9" * 5_000):
        with pytest.raises(InputError, match=r"no server is called .*; give the name of a server of"):
            find(around._state, typed)
    assert "9 of 5,000 servers are drawn" in around._repr_mimebundle_()["text/html"]


def test_a_bottleneck_too_large_to_draw_is_selected_in_part():
    size = 1_000
    servers = pd.DataFrame({"server": np.arange(size + 2), "capacity": [*size * [1.0], 5e4, 5e4]})
    ends = [(k, (k + 1) % size) for k in range(size)] + [(size, size + 1), (0, size)]
    fleet = lk.Fleet(servers, pd.DataFrame(ends, columns=["option_1", "option_2"]))
    around = lk.explore(fleet).select_bottleneck()
    assert len(around._state.bottleneck) == size
    assert len(around.drawn) == door.NEARBY


def test_choices_of_three_are_drawn_as_spokes(around):
    part = around._state.part
    (group,) = part.groups
    assert group.members == (1, 2, 3)
    assert part.hub(group) == pytest.approx(part.places[[1, 2, 3]].mean(axis=0))
    assert len(part.strokes()) == 2 + 3
    desk = desk_of(around.select("kiln-1"))
    assert len(desk.board._of(0, "choices").x) == 3
    around.select("barn-1")
    assert len(desk.board._of(0, "choices").x) == 3 * (1 + 3)


def test_names_are_never_obeyed(around):
    desk = desk_of(around.select(HOSTILE))
    page = around._repr_mimebundle_()["text/html"]
    shown = [desk.facts.value, page, *(each.value for each in desk.ways.children[:1])]
    for html in shown:
        assert "<img src=x" not in html
        assert "&lt;img src=x" in html
    figure = desk.board.figure
    words = [note.text for note in figure.layout.annotations]
    words += [text for trace in figure.data if trace.hovertext is not None for text in trace.hovertext]
    assert any("onerror" in text for text in words)
    assert not any("<img" in text or "$" in text for text in words)
    assert escaped("a\x1b<") == "a\\x1b&lt;"


def test_without_a_reader_it_is_a_page_that_needs_nothing(around):
    bundle = around.select("kiln-1")._repr_mimebundle_()
    assert set(bundle) == {"text/plain", "text/html"}
    assert around._desk is None
    assert re.search(
        r'<img src="data:image/png;base64,[A-Za-z0-9+/=]{2000,}" [^>]*alt="Choice graph of 5',
        bundle["text/html"],
    )
    assert "<h4>kiln-1</h4>" in bundle["text/html"]
    assert "http" not in re.sub(r"base64,[^\"]*", "", bundle["text/html"])


def test_with_a_reader_it_is_a_widget(around, monkeypatch):
    monkeypatch.setattr(door, "somebody_at_the_notebook", lambda: True)
    bundle = around._repr_mimebundle_()
    kind = "application/vnd.jupyter.widget-view+json"
    assert bundle[kind]["model_id"] == around.widget.model_id
    assert "text/html" in bundle


def test_a_fleet_alone_shows_its_fair_split(yard):
    around = lk.explore(yard, survey=lk.survey(yard), select="kiln-1")
    assert around._state.shown == ("fair split",)
    assert around.loads["utilisation"].tolist() == pytest.approx([0.9])
    assert len([trace for trace in desk_of(around).board.figure.data if trace.marker.coloraxis]) == 1


@pytest.mark.parametrize(
    ("give", "sentence"),
    [
        (lambda fleet, pair: lk.explore(lk.complete(50)), "no choice graph to look around in"),
        (lambda fleet, pair: lk.explore("demo"), "fleet is str; give a labkit Fleet"),
        (lambda fleet, pair: lk.explore(fleet, 3), "outcomes is int; give outcomes of lk.place"),
        (lambda fleet, pair: lk.explore(fleet, {"a": 3}), r"outcomes\['a'\] is int; give an outcome"),
        (lambda fleet, pair: lk.explore(fleet, {"fair split": pair[0]}), "the name 'fair split'"),
        (
            lambda fleet, pair: lk.explore(fleet, {"even": pair[0], "capacity": pair[1]}),
            "the name 'capacity'; .* other than 'server', 'capacity', 'shared', which are columns",
        ),
        (lambda fleet, pair: lk.explore(fleet, [pair[0], pair[0]]), "holds 'even' twice"),
        (lambda fleet, pair: lk.explore(lk.ring(5), pair), "is of another fleet"),
        (lambda fleet, pair: lk.explore(fleet, survey=lk.survey(lk.ring(5))), "survey is of another fleet"),
        (lambda fleet, pair: lk.explore(fleet, survey=3), "survey is int"),
        (
            lambda fleet, pair: lk.explore(fleet, select="kiln-3"),
            "no server is called 'kiln-3'; did you mean 'kiln-[12]'",
        ),
        (lambda fleet, pair: lk.explore(fleet, nearby=1), "nearby is 1; give a whole number of at least 2"),
        (lambda fleet, pair: lk.explore(fleet, nearby=500), "nearby is 500; give at most 400"),
    ],
)
def test_what_cannot_be_explored_is_refused(yard, pair, give, sentence):
    with pytest.raises(InputError, match=sentence):
        give(yard, pair)


def test_outcomes_of_different_amounts_are_refused(yard, pair):
    other = placed(yard, "more", [[9, 9, 3, 4, 0]])
    with pytest.raises(InputError, match=r"different numbers of tasks, 24 \(even\), 25 \(more\)"):
        lk.explore(yard, [pair[0], other])
    once = placed(yard, "once", [[9, 9, 3, 3, 0]])
    with pytest.raises(InputError, match=r"different numbers of replicates, 2 \(even\), 1 \(once\); place"):
        lk.explore(yard, [pair[0], once])
