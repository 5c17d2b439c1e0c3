"""Figures draw what the table says, leave no traces, and keep their words apart."""

import itertools
import re

import matplotlib as mpl
import matplotlib.pyplot as plt
import networkx as nx
import numpy as np
import pandas as pd
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import to_rgb

import labkit as lk
from labkit.analysis.answer import answer_table
from labkit.errors import InputError
from labkit.figures.choice_graph import choice_graph
from labkit.figures.fair_levels import fair_levels
from labkit.figures.forecast_against_simulation import forecast_against_simulation
from labkit.figures.headroom_against_age import headroom_against_age
from labkit.figures.headroom_per_policy import headroom_per_policy
from labkit.figures.labels import spread
from labkit.figures.layout import is_ring_in_order, positions
from labkit.figures.load_against_tasks import load_against_tasks
from labkit.figures.looks import looks
from labkit.figures.pages import KINDS, picture, write_answer_files
from labkit.figures.saving import save_figure
from labkit.figures.style import COLOURS, FILL, alt_text
from tests.analysis.synthetic import measures

RULES = {"least-loaded": 1.0, "least-loaded(ties=first)": 1.01, "mixed(beta=0.5)": 2.0, "one-choice": 4.0}


@pytest.fixture(scope="module")
def records():
    late = measures({name: 1.3 * scale for name, scale in RULES.items()})
    both = [measures(RULES).assign(information="fresh"), late.assign(information="snapshot(every=200)")]
    return pd.concat(both, ignore_index=True)


@pytest.fixture(scope="module")
def table(records):
    return answer_table(records, risk=0.02, baseline="one-choice", total_capacity=1000)


def uneven_ring(size=24):
    rng = np.random.default_rng(4)
    servers = pd.DataFrame(
        {"server": [f"site {k}" for k in range(size)], "capacity": rng.integers(50, 200, size)}
    )
    ends = [(k, (k + 1) % size) for k in range(size)] + [(0, size // 2), (3, size - 5)]
    choices = pd.DataFrame([(f"site {u}", f"site {v}") for u, v in ends], columns=["option_1", "option_2"])
    return lk.Fleet(servers, choices.assign(demand=rng.integers(1, 9, len(ends))))


def everything(records, table):
    fleet = uneven_ring()
    return {
        "load": load_against_tasks(records, risk=0.02),
        "headroom": headroom_per_policy(table, baseline="one-choice"),
        "graph": choice_graph(fleet, np.linspace(0.5, 0.9, len(fleet)), title="a ring"),
        "load above the optimum": load_against_tasks(records, risk=0.02, above="optimum"),
        "excess": headroom_per_policy(table, baseline="one-choice", above="optimum"),
        "levels": fair_levels(lk.survey(fleet).profile),
        "marked graph": choice_graph(
            fleet,
            lk.survey(fleet).profile["fair_utilisation"].to_numpy(),
            title="bottleneck and links",
            measure="fair utilisation (load ÷ capacity)",
            ringed=lk.survey(fleet).bottleneck,
            links=[("site 2", "site 9")],
        ),
        "age": headroom_against_age(by_age(), servers=20),
        "forecast": forecast_against_simulation(forecasts()),
    }


def by_age():
    kinds = ["fresh", "snapshot(every=5)", "snapshot(every=80)", "dispatchers(count=3, every=5)"]
    rows = [
        {"policy": policy, "information": kind, "headroom": scale * (1 + at)}
        for policy, scale in RULES.items()
        for at, kind in enumerate([*kinds, "dispatchers(count=3, every=80)"])
    ]
    table = pd.DataFrame(rows).assign(risk=0.01, confidence=0.95)
    return table.assign(lower=0.9 * table["headroom"], upper=1.2 * table["headroom"])


def forecasts():
    return pd.DataFrame(
        {
            "fleet": ["ring of 40", "torus"],
            "forecast": [4.5, 2.6],
            "forecast_error": [0.2, 0.1],
            "simulated": [4.4, 2.7],
            "simulated_error": [0.05, 0.01],
        }
    )


def saved(figure, folder, name):
    return [save_figure(figure, folder / f"{name}{kind}") for kind in KINDS]


def boxes(figure):
    renderer = figure.canvas.get_renderer()
    texts = [text for text in figure.findobj(mpl.text.Text) if text.get_visible() and text.get_text().strip()]
    beyond = set()  # labels of ticks outside the view are kept by matplotlib but not drawn
    for axis in (axis for axes in figure.axes for axis in (axes.xaxis, axes.yaxis)):
        low, high = sorted(axis.get_view_interval())
        for tick in axis.get_major_ticks():
            if not low <= tick.get_loc() <= high or not axis.axes.axison:
                beyond |= {tick.label1, tick.label2}
    # the extent of an annotation would include its line
    return {text: mpl.text.Text.get_window_extent(text, renderer) for text in texts if text not in beyond}


def test_no_figure_and_no_setting_is_left_behind(records, table):
    before = dict(mpl.rcParams)
    everything(records, table)
    assert plt.get_fignums() == []
    assert dict(mpl.rcParams) == before


def test_the_users_own_settings_do_not_show(records, tmp_path):
    plain = saved(load_against_tasks(records, risk=0.02), tmp_path, "plain")
    with mpl.rc_context({"axes.facecolor": "black", "font.size": 30, "lines.linewidth": 9}):
        other = saved(load_against_tasks(records, risk=0.02), tmp_path, "other")
    for one, two in zip(plain, other, strict=True):
        assert one.read_bytes() == two.read_bytes()


def test_equal_figures_give_equal_files(records, table, tmp_path):
    first, second = everything(records, table), everything(records, table)
    for name in ("marked graph", "age", "levels"):
        figure = first[name]
        one = save_figure(figure, tmp_path / f"{name}.svg")
        assert one.read_bytes() == save_figure(second[name], tmp_path / f"{name}-again.svg").read_bytes()


def test_lines_are_the_medians_and_markers_the_headroom(records, table):
    figure = load_against_tasks(records, risk=0.02)
    assert len(figure.axes) == 2
    for axes, kind in zip(figure.axes, ["fresh", "snapshot(every=200)"], strict=True):
        medians = records[records["information"] == kind].groupby(["policy", "tasks"])["gap"].median()
        curves = [
            line for line in axes.lines if len(line.get_xdata()) == 2 and line.get_marker() in ("None", "")
        ]
        assert len(curves) == len(RULES)
        for line, policy in zip(curves, sorted(RULES), strict=True):
            np.testing.assert_allclose(line.get_ydata(), medians[policy].to_numpy())
        points = [
            float(line.get_ydata()[0])
            for line in axes.lines
            if line.get_marker() not in ("None", "", "|", "_")
        ]
        expected = table[table["information"] == kind].sort_values("policy")["headroom"]
        np.testing.assert_allclose(sorted(points), sorted(expected))
        assert axes.get_xscale() == "log"


def test_one_kind_of_information_needs_no_panel_title(records):
    figure = load_against_tasks(
        records[records["information"] == "fresh"].drop(columns="information"), risk=0.02
    )
    assert [axes.get_title(loc="left") for axes in figure.axes] == [""]


def test_dots_are_sorted_and_labelled_with_their_difference(table):
    figure = headroom_per_policy(table, baseline="one-choice")
    names = [tick.get_text() for tick in figure.axes[0].get_yticklabels()]
    worst = table.groupby("policy")["headroom"].max()
    assert names == worst.sort_values(ascending=False).index.tolist()
    words = [text.get_text() for text in figure.findobj(mpl.text.Text)]
    for row in table[table["policy"] == "mixed(beta=0.5)"].itertuples():
        base = table[(table["policy"] == "one-choice") & (table["information"] == row.information)]
        away = base["headroom"].iloc[0] - row.headroom
        assert f"{row.headroom:.4f}   −{away:.4f} against one-choice" in words
    assert any(text.startswith("owed to the network whatever the rule: 0.0320") for text in words)
    headroom_per_policy(lk.headroom(measures(RULES, tasks=(800,)), risk=0.02))


def test_colours_in_the_graph_follow_utilisation_and_areas_capacity():
    fleet = uneven_ring()
    utilisation = pd.Series(np.linspace(0.5, 0.9, len(fleet)), index=fleet.names)
    figure = choice_graph(fleet, utilisation.sample(frac=1, random_state=1))
    dots = next(
        item for item in figure.axes[0].collections if hasattr(item, "get_sizes") and len(item.get_sizes())
    )
    np.testing.assert_allclose(dots.get_array(), utilisation.to_numpy())
    np.testing.assert_allclose(dots.get_sizes() / dots.get_sizes()[0], fleet.capacity / fleet.capacity[0])
    named = [text.get_text() for text in figure.axes[0].texts]
    assert named[0].split(":")[0] in {f"site {k}" for k in range(19, 24)}
    assert len(named) == 5


@pytest.mark.parametrize("fleet", [lk.ring(3), lk.ring(12), lk.ring(500), lk.torus(6, 6)], ids=len)
def test_the_graph_fills_its_sheet(fleet):
    figure = choice_graph(fleet, np.linspace(0, 1, len(fleet)), title="least-loaded: utilisation")
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    inked = np.asarray(canvas.buffer_rgba())[:, :, :3].min(axis=2) < 250
    for axis in (0, 1):
        used = np.flatnonzero(inked.any(axis=axis))
        gaps = np.diff(np.concatenate([[-1], used, [inked.shape[1 - axis]]]))
        assert gaps.max() < 0.85 * figure.dpi  # inches of nothing


def test_servers_of_a_long_ring_leave_room_for_the_widths_of_its_choices():
    demand = np.random.default_rng(1).integers(1, 12, 500)
    ring = lk.ring(500)
    fleet = lk.Fleet(ring.servers, ring.choices.assign(demand=demand))
    axes = choice_graph(fleet, np.linspace(0, 1, 500)).axes[0]
    lines = next(item for item in axes.collections if hasattr(item, "get_segments"))
    dots = next(item for item in axes.collections if hasattr(item, "get_sizes"))
    lengths = [72 * np.hypot(*np.diff(segment, axis=0)[0]) for segment in lines.get_segments()]
    assert np.median(lengths) > 1.5 * np.sqrt(dots.get_sizes().mean())
    widths = np.sort(lines.get_linewidths())
    assert widths[-25] > 2 * widths[25]
    assert widths[-1] < np.sqrt(dots.get_sizes().max())


def test_a_path_stands_so_that_names_find_room():
    places = positions(4, np.array([[0, 1], [1, 2], [2, 3]]))
    assert np.ptp(places[:, 1]) > 20 * np.ptp(places[:, 0])


def test_small_utilisations_keep_their_digits_in_the_figures(table):
    small = table.assign(**{name: table[name] * 1e-6 for name in ("headroom", "lower", "upper", "network")})
    words = [text.get_text() for text in headroom_per_policy(small).findobj(mpl.text.Text)]
    read = [float(text) for text in words if re.fullmatch(r"[0-9.]+e-[0-9]+", text)]
    np.testing.assert_allclose(sorted(read)[-len(small) :], sorted(small["headroom"]), rtol=5e-3)
    assert any(text.startswith("owed to the network whatever the rule: 3.20e-08") for text in words)
    names = [text.get_text() for text in choice_graph(lk.ring(5), np.full(5, 2e-6)).axes[0].texts]
    assert all(text.endswith(": 2.00e-06") for text in names)


def test_a_large_fleet_is_drawn_around_its_fullest_server():
    fleet = lk.ring(2_500)
    full = np.zeros(len(fleet))
    full[1_000] = 1.0
    figure = choice_graph(fleet, full)
    assert "the 300 servers nearest to the fullest of 2,500" in figure.get_supxlabel()
    assert figure.axes[0].texts[0].get_text().startswith("1000: 1")


def test_choices_of_three_and_lone_servers_are_drawn():
    servers = pd.DataFrame({"server": list("abcdef")})
    choices = pd.DataFrame({"option_1": ["a", "d"], "option_2": ["b", "e"], "option_3": ["c", None]})
    figure = choice_graph(lk.Fleet(servers, choices), np.arange(6.0))
    lines = next(item for item in figure.axes[0].collections if hasattr(item, "get_segments"))
    assert len(lines.get_segments()) == 4


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (
            lambda t: choice_graph(lk.ring(5), np.ones(4)),
            r"utilisation has shape \(4,\); give one number for each of the 5",
        ),
        (lambda t: choice_graph(lk.ring(3), [1, np.nan, 1]), "utilisation of server 1 is nan"),
        (lambda t: choice_graph(lk.complete(5), np.ones(5)), r"fleet is .*choices are listed"),
        (lambda t: choice_graph("demo", np.ones(5)), "fleet is 'demo'"),
        (lambda t: headroom_per_policy(t.drop(columns="upper")), "no column 'upper'"),
        (lambda t: headroom_per_policy(t, baseline="one"), "baseline is 'one'"),
        (lambda t: headroom_per_policy(pd.concat([t, t])), "several rows"),
        (lambda t: load_against_tasks(measures(RULES).drop(columns="gap"), risk=0.02), "gap"),
        (lambda t: load_against_tasks(measures(RULES), risk=2), "^risk is 2"),
    ],
)
def test_wrong_tables_are_refused_in_one_sentence(table, call, message):
    with pytest.raises(InputError, match=message):
        call(table)


def test_files_of_an_answer(records, table, tmp_path):
    figures = everything(records, table)
    written = write_answer_files(tmp_path / "new" / "folder", table, "the answer", figures)
    assert [path.name for path in written[:2]] == ["answer.csv", "answer.txt"]
    assert {path.suffix for path in written} == {".csv", ".txt", ".png", ".svg"}
    assert all(path.stat().st_size for path in written)
    np.testing.assert_allclose(pd.read_csv(written[0])["headroom"], table["headroom"])
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match=r"output .*file cannot be written .*; name another folder"):
        write_answer_files(tmp_path / "file", table, "", {})
    image = picture(figures["graph"], "a ring of servers")
    assert image.data.startswith(b"\x89PNG")
    assert image.alt == "a ring of servers"
    assert picture(figures["graph"]).alt == alt_text(figures["graph"])


def test_places_are_deterministic_and_components_do_not_overlap():
    graph = nx.disjoint_union_all(
        [nx.grid_2d_graph(4, 5), nx.cycle_graph(6), nx.path_graph(2), nx.empty_graph(3)]
    )
    graph = nx.convert_node_labels_to_integers(graph)
    pairs = np.array([sorted(edge) for edge in graph.edges])
    places = positions(len(graph), pairs)
    np.testing.assert_array_equal(places, positions(len(graph), pairs))
    assert len(np.unique(places.round(6), axis=0)) == len(graph)
    spans = [
        (places[sorted(part), 0].min(), places[sorted(part), 0].max())
        for part in nx.connected_components(graph)
        if len(part) > 1
    ]
    for (_, left), (right, _) in itertools.pairwise(sorted(spans)):
        assert left < right


def test_rings_in_table_order_are_circles():
    ring = np.array([[k, (k + 1) % 7] for k in range(7)])
    assert is_ring_in_order(7, np.sort(ring, axis=1))
    assert not is_ring_in_order(7, ring[:-1])
    assert not is_ring_in_order(2, np.array([[0, 1]]))
    np.testing.assert_allclose(np.hypot(*positions(7, ring).T), 1)


def test_labels_move_apart_as_little_as_needed():
    np.testing.assert_allclose(spread([0.0, 10.0], 1.0), [0, 10])
    np.testing.assert_allclose(spread([5.0, 5.0, 5.0], 2.0), [3, 5, 7])
    rng = np.random.default_rng(2)
    for _ in range(50):
        wished = rng.random(8)
        placed = spread(wished, 0.1)
        assert (np.diff(np.sort(placed)) >= 0.1 - 1e-12).all()
        assert (np.argsort(placed) == np.argsort(wished)).all()
        assert placed.mean() == pytest.approx(wished.mean())


def grey(colour):
    return float(np.dot(to_rgb(colour), [0.2126, 0.7152, 0.0722]))


def test_looks_differ_in_more_than_colour_and_fills_darken_in_grey():
    style = looks(RULES)
    assert len({(look["marker"], str(look["linestyle"])) for look in style.values()}) == len(RULES)
    assert len(set(COLOURS)) == len(COLOURS)
    shades = [grey(FILL(level)) for level in np.linspace(0, 1, 40)]
    assert (np.diff(shades) < 0).all()
    assert shades[0] - shades[-1] > 0.7


def test_ages_are_in_tasks_a_server_with_fresh_loads_on_the_left():
    figure = headroom_against_age(by_age(), servers=20)
    assert [axes.get_title(loc="left") for axes in figure.axes] == [
        "all see the last report",
        "3 dispatchers, each knows its own",
    ]
    for axes in figure.axes:
        assert [label.get_text() for label in axes.get_xticklabels()] == ["fresh", "0.25", "4"]
        drawn = sorted(
            tuple(np.round(line[0].get_ydata(), 9)) for line in axes.containers if len(line[0].get_ydata())
        )
        late = (1, 2) if axes is figure.axes[0] else (3, 4)
        assert drawn == sorted(
            tuple(np.round([scale, *(scale * (1 + at) for at in late)], 9)) for scale in RULES.values()
        )


@pytest.mark.parametrize(
    ("draw", "refusal"),
    [
        (lambda: headroom_against_age(by_age().drop(columns="lower"), servers=20), "no column 'lower'"),
        (lambda: headroom_against_age(pd.concat([by_age()] * 2), servers=20), "several rows"),
        (lambda: headroom_against_age(by_age(), servers=0), "servers is 0"),
        (
            lambda: headroom_against_age(by_age().head(1).assign(information="old"), servers=2),
            "information is 'old'",
        ),
        (lambda: forecast_against_simulation(forecasts().drop(columns="forecast")), "no column 'forecast'"),
    ],
)
def test_tables_that_cannot_be_drawn_are_refused(draw, refusal):
    with pytest.raises(InputError, match=refusal):
        draw()
