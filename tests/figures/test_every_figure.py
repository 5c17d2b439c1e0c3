"""Every figure speaks one language: whoever adds a figure finds it drawn and looked through here."""

import importlib
import itertools
import pkgutil
import re

import matplotlib as mpl
import numpy as np
import pandas as pd
import pytest
from colorspacious import cspace_convert
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import to_hex, to_rgb

import labkit as lk
from labkit import figures
from labkit.errors import InputError
from labkit.figures.capacity_per_policy import capacity_per_policy
from labkit.figures.choice_graph import choice_graph
from labkit.figures.fair_levels import fair_levels
from labkit.figures.forecast_against_simulation import forecast_against_simulation
from labkit.figures.from_empty import from_empty
from labkit.figures.growth_curve import growth_curve
from labkit.figures.growth_of_families import growth_of_families
from labkit.figures.headroom_against_age import headroom_against_age
from labkit.figures.headroom_per_policy import headroom_per_policy
from labkit.figures.highest_by_block import MOST_POINTS, highest_by_block
from labkit.figures.labels import spread
from labkit.figures.load_against_tasks import load_against_tasks
from labkit.figures.looks import NETWORKS, RULES, looks, looks_of_networks
from labkit.figures.profile_of_day import MOST_PARTS, profile_of_day
from labkit.figures.queue_tails import queue_tails
from labkit.figures.saving import save_figure
from labkit.figures.sojourn_against_age import sojourn_against_age
from labkit.figures.sojourn_against_load import sojourn_against_load
from labkit.figures.style import (
    COLOURS,
    FAINT,
    INK,
    LABEL,
    PALE,
    PAPER,
    TITLE,
    WIDTH,
    WORDS,
    alt_text,
    contrast,
    for_words,
)
from labkit.policies.naming import BUILT_IN
from labkit.traces.facts import TraceFacts
from tests.analysis.synthetic import measures
from tests.figures import test_figures as placed
from tests.figures import test_service_figures as served

LONG = "a rule of my own with a long name(first=1, second=twenty-two, third=3)"
MANY = dict.fromkeys([*BUILT_IN, "mixed(beta=0.25)", "least-loaded(ties=first)", LONG, "my rule"], 0.0)
MANY = {name: 1.0 + 0.02 * at for at, name in enumerate(MANY)}
UNITS = r"÷|utilisation|tasks|servers|minutes|hours|share|mean service times"


def long_day():
    """A log of a hundred days in parts of a minute."""
    at = np.arange(100 * 1440)
    arrivals = pd.DataFrame({"day": at // 1440, "part": at % 1440, "tasks": (at * 7919) % 13})
    return TraceFacts(1000, 0.0, 100.0, 1.0, 1.0, 1.0, 1.0, 0, 5, arrivals, 1440)


def growth():
    rng = np.random.default_rng(1)
    rows = [
        {"servers": n, "excess": n**0.5 * np.exp(0.1 * z)}
        for n in (9, 16, 36, 64)
        for z in rng.normal(size=30)
    ]
    return pd.DataFrame(rows)


@pytest.fixture(scope="module")
def drawn():
    """Name of the function → its figures, plain ones and hard ones."""
    from labkit.analysis.growth_by_family import FamilyFit

    fit = lk.fit_growth(growth(), x="servers", y="excess", rng=1)
    families = [
        FamilyFit(family, rule, "stationary" if rule == "least-loaded" else "after 200 tasks a server", fit)
        for family in ("ring", "torus", "ring-with-chords", "complete")
        for rule in ("least-loaded", "pairwise-averaging", "one-choice")
    ]
    records = pd.concat(
        [
            measures({name: shift * scale for name, scale in placed.RULES.items()}).assign(information=kind)
            for kind, shift in (("fresh", 1.0), ("snapshot(every=200)", 1.3), ("snapshot(every=900)", 1.9))
        ]
    )
    table = placed.answer_table(records, risk=0.02, baseline="one-choice", total_capacity=1000)
    last = measures(MANY)
    many = lk.headroom(last[last["tasks"] == last["tasks"].max()], risk=0.02)
    fleet = placed.uneven_ring()
    named = fleet.names.map(lambda name: f"{name} of a very long name, in the cellar")
    servers = fleet.servers.assign(server=named)
    options = fleet.choices.replace(dict(zip(fleet.names, named, strict=True)))
    full = np.linspace(0.5, 0.9, len(fleet))
    shown = ["sojourn_mean", "sojourn_p99"]
    blocks = served.by_interval(served.RULES | {"as-placed": 2.3})
    pilot = served.by_interval({"one-choice": 1.0})
    close = pd.concat([served.tails().assign(policy=name) for name in MANY])
    hours = {"unit": "hours"}
    found = {
        load_against_tasks: [
            load_against_tasks(records, risk=0.02),
            load_against_tasks(records, risk=0.02, above="optimum"),
            load_against_tasks(measures(MANY), risk=0.02, above="optimum"),
        ],
        headroom_per_policy: [
            headroom_per_policy(table, baseline="one-choice"),
            headroom_per_policy(table, above="optimum"),
            headroom_per_policy(many),
        ],
        choice_graph: [
            choice_graph(fleet, full, title="a ring"),
            choice_graph(
                lk.Fleet(servers, options), full, title="long words " * 12, ringed=named[:3],
                links=[named[[2, 9]]],
            ),
        ],
        fair_levels: [fair_levels(lk.survey(fleet).profile), fair_levels(lk.survey(lk.ring(5)).profile)],
        headroom_against_age: [headroom_against_age(placed.by_age(), servers=20)],
        forecast_against_simulation: [forecast_against_simulation(placed.forecasts())],
        growth_curve: [growth_curve(fit), growth_curve(fit, reach=1)],
        growth_of_families: [growth_of_families(families), growth_of_families(families[:1])],
        sojourn_against_load: [
            sojourn_against_load(served.limits(), measures=shown, unit="minutes", limit=0.96),
            sojourn_against_load(served.limits(), measures=[*shown, *shown], unit="minutes"),
        ],
        queue_tails: [queue_tails(served.tails(), title="load factor 0.9"), queue_tails(close)],
        sojourn_against_age: [sojourn_against_age(served.by_age())],
        from_empty: [from_empty({name: pilot.assign(policy=name) for name in MANY}, warmup=60.0, **hours)],
        capacity_per_policy: [capacity_per_policy(served.provisions(), unit="minutes")],
        profile_of_day: [profile_of_day(days, day=24.0, **hours) for days in (served.facts(), long_day())],
        highest_by_block: [
            highest_by_block(blocks, block=24.0, **hours),
            highest_by_block(served.by_interval(MANY, blocks=1000, replicates=1), block=24.0, **hours),
        ],
    }  # fmt: skip
    for figure in itertools.chain(*found.values()):
        FigureCanvasAgg(figure).draw()
    return {draw.__name__: each for draw, each in found.items()}


def every(drawn):
    return [(f"{name} {at}", figure) for name, each in drawn.items() for at, figure in enumerate(each)]


def test_every_figure_of_the_kit_is_here(drawn):
    names = set()
    for found in pkgutil.iter_modules(figures.__path__):
        module = importlib.import_module(f"labkit.figures.{found.name}")
        here = {name: each for name, each in vars(module).items() if getattr(each, "is_figure", False)}
        names |= {name for name, each in here.items() if each.__module__ == module.__name__}
    assert names == set(drawn)


def test_words_lie_inside_and_apart(drawn):
    for name, figure in every(drawn):
        boxes = placed.boxes(figure)
        for text, box in boxes.items():
            assert box.x0 >= -1, (name, text)
            assert box.y0 >= -1, (name, text)
            assert box.x1 <= figure.bbox.x1 + 1, (name, text)
            assert box.y1 <= figure.bbox.y1 + 1, (name, text)
        for (one, a), (other, b) in itertools.combinations(boxes.items(), 2):
            apart = a.x1 <= b.x0 + 1 or b.x1 <= a.x0 + 1 or a.y1 <= b.y0 + 1 or b.y1 <= a.y0 + 1
            assert apart, (name, one.get_text(), other.get_text())


def test_words_beside_an_axis_are_no_longer_than_it(drawn):
    for name, figure in every(drawn):
        for axes in figure.axes:
            words = axes.yaxis.label
            if axes.get_visible() and words.get_text():
                assert words.get_window_extent().height <= axes.bbox.height + 1, (name, words.get_text())


def test_type_has_three_sizes_and_figures_one_width(drawn):
    for name, figure in every(drawn):
        assert {text.get_fontsize() for text in placed.boxes(figure)} <= {WORDS, LABEL, TITLE}, name
        assert figure.get_figwidth() <= WIDTH + 1e-9, name
        assert 1.5 < figure.get_figheight() < 9, name


def test_axes_name_what_they_measure_and_its_unit(drawn):
    for name, figure in every(drawn):
        for axes in figure.axes:
            if not axes.get_visible() or not axes.axison:
                continue
            for axis, words in ((axes.xaxis, axes.get_xlabel()), (axes.yaxis, axes.get_ylabel())):
                numbers = [
                    tick.label1.get_text() for tick in axis.get_major_ticks() if tick.label1.get_visible()
                ]
                numbers = [text for text in numbers if re.fullmatch(r"[−\d.,e %]+", text)]
                if numbers and axis.get_tick_params().get("labelleft", True):
                    shared = axes.get_shared_x_axes() if axis is axes.xaxis else axes.get_shared_y_axes()
                    beside = [axes, *shared.get_siblings(axes)]
                    kind = "xlabel" if axis is axes.xaxis else "ylabel"
                    said = words or " ".join(getattr(each, f"get_{kind}")() for each in beside)
                    assert re.search(UNITS, said), (name, said, numbers)


def test_colours_are_of_the_palette_and_words_have_contrast(drawn):
    own = {*COLOURS, INK, FAINT, PALE, PAPER}
    allowed = {to_hex(each) for each in own | {for_words(each) for each in COLOURS}}
    for name, figure in every(drawn):
        for line in figure.findobj(mpl.lines.Line2D):
            assert to_hex(line.get_color()) in allowed, (name, line)
        for patch in figure.findobj(mpl.patches.Patch):
            for colour in (patch.get_facecolor(), patch.get_edgecolor()):
                visible = colour[3] > 0 and not isinstance(patch, mpl.patches.FancyArrowPatch)
                assert not visible or to_hex(colour) in allowed | {"#000000"}, (name, patch)
        for text in placed.boxes(figure):
            assert to_hex(text.get_color()) in allowed, (name, text)
            assert contrast(text.get_color()) >= 4.5, (name, text)


def test_each_figure_says_in_one_sentence_what_it_shows(drawn):
    said = [alt_text(figure) for _, figure in every(drawn)]
    for (name, figure), words in zip(every(drawn), said, strict=True):
        assert re.fullmatch(r"[A-Z][^\n]{40,700}\.", words), (name, words)
        assert re.search(r"\d", words), (name, words)
        bundle, about = figure._repr_mimebundle_()
        assert about["image/png"] == {"width": round(100 * figure.get_figwidth()), "alt": words}
        assert bundle["text/plain"] == f"<figure: {words}>"
    assert len(set(said)) >= len(drawn)
    plain = mpl.figure.Figure()
    plain.subplots().set(xlabel="servers", ylabel="load, tasks", title="A ring")
    assert alt_text(plain) == "Figure: A ring, load, tasks against servers."


def test_no_two_colours_look_alike_and_all_stand_out_from_paper():
    kinds = ["sRGB1"]
    seen = {}
    for vision in ("", "deuteranomaly", "protanomaly", "tritanomaly"):
        kind = {"name": "sRGB1+CVD", "cvd_type": vision, "severity": 100} if vision else kinds[0]
        raw = [np.clip(cspace_convert(to_rgb(each), kind, "sRGB1"), 0, 1) for each in COLOURS]
        seen[vision] = np.array([cspace_convert(each, "sRGB1", "CAM02-UCS") for each in raw])
    for vision, places in seen.items():
        for one, other in itertools.combinations(range(len(COLOURS)), 2):
            away = np.linalg.norm(places[one] - places[other])
            assert away > 10, (vision, COLOURS[one], COLOURS[other], away)
    assert min(contrast(colour) for colour in COLOURS) >= 3
    assert contrast("#000000") == pytest.approx(21)
    assert contrast("#777777") == pytest.approx(4.48, abs=0.005)


def test_a_rule_looks_the_same_in_every_figure():
    everywhere = looks(BUILT_IN)
    for company in (
        ["least-loaded"],
        ["least-loaded", "as-placed", "my rule"],
        [*BUILT_IN, "mixed(beta=0.5)"],
    ):
        here = looks(company)
        assert all(here[name] == everywhere[name] for name in company if name in everywhere)
        assert here.get("my rule", {"color": "#AA3377"})["color"] == "#AA3377"
    assert set(BUILT_IN) < set(RULES)
    shapes = {(each["marker"], str(each["linestyle"])) for each in everywhere.values()}
    assert len(shapes) == len(BUILT_IN)
    variants = looks(["mixed", "mixed(beta=0.25)", "mixed(beta=0.5)", "mixed(beta=0.75)"])
    assert len({each["color"] for each in variants.values()}) == 1
    assert len({each["marker"] for each in variants.values()}) == 4
    own = looks([*BUILT_IN, *(f"my rule {at}" for at in range(20))])
    assert len(own) == len(BUILT_IN) + 20
    crowded = looks(MANY)
    assert len({(look["color"], look["marker"]) for look in crowded.values()}) == len(MANY)
    assert looks_of_networks(["a ring"])["a ring"] == looks_of_networks(NETWORKS)["ring"]


def test_labels_of_different_heights_keep_apart_and_within():
    rng = np.random.default_rng(6)
    for _ in range(40):
        wished, sizes = rng.random(7), rng.uniform(0.02, 0.2, 7)
        placed_at = spread(wished, sizes, (0.0, sizes.sum() + 0.01))
        order = np.argsort(placed_at)
        assert (order == np.argsort(wished)).all()
        low, high = (placed_at - sizes / 2)[order], (placed_at + sizes / 2)[order]
        assert (low[1:] >= high[:-1] - 1e-12).all()
        assert low[0] >= -1e-12
        assert high[-1] <= sizes.sum() + 0.01 + 1e-12


def test_very_many_blocks_and_parts_are_gathered(drawn):
    line = drawn["highest_by_block"][1].axes[0].lines[0]
    assert 0.5 * MOST_POINTS < len(line.get_xdata()) <= MOST_POINTS
    assert line.get_ydata().max() == pytest.approx(0.53 * MANY[LONG])
    edges = drawn["profile_of_day"][1].axes[0].patches[-1].get_data().edges
    assert 0.5 * MOST_PARTS < len(edges) - 1 <= MOST_PARTS
    assert edges[-1] == 24.0
    arrivals = long_day().arrivals
    mean = drawn["profile_of_day"][1].axes[0].patches[-1].get_data().values
    assert mean.sum() * 100 == pytest.approx(arrivals["tasks"].sum())


def test_lines_without_room_for_their_names_get_a_legend(drawn):
    plain, crowded = drawn["queue_tails"]
    assert plain.legends == []
    assert len(plain.axes[0].texts) == len(served.RULES)
    assert list(crowded.axes[0].texts) == []
    assert len(crowded.legends[0].get_texts()) == len(MANY)


def test_names_of_tails_stand_nearest_to_their_own_lines(drawn):
    figure = drawn["queue_tails"][0]
    axes = figure.axes[0]
    paths = [axes.transData.transform(np.column_stack(line.get_data())) for line in axes.lines]
    names = sorted(served.RULES)
    for text in axes.texts:
        box = mpl.text.Text.get_window_extent(text, figure.canvas.get_renderer())
        corners = np.array([[box.x0, box.y0], [box.x1, box.y1], [box.x0, box.y1], [box.x1, box.y0]])
        near = [min(np.hypot(*(path - corner).T).min() for corner in corners) for path in paths]
        own = names.index(text.get_text())
        assert near[own] < 12 * figure.dpi / 72
        # The last two lines lie closer together than a name is high.
        assert int(np.argmin(near)) == own or own >= 2


@pytest.mark.parametrize("kind", ["svg", "pdf", "png"])
def test_files_repeat_to_the_byte_hold_words_and_no_date(drawn, tmp_path, kind):
    figure = drawn["fair_levels"][0]
    path = save_figure(figure, tmp_path / f"levels.{kind}")
    again = fair_levels(lk.survey(placed.uneven_ring()).profile)
    content = path.read_bytes()
    assert content == save_figure(again, str(tmp_path / f"again.{kind}")).read_bytes()
    assert not re.search(rb"20[0-9]{2}-[01][0-9]|CreationDate|matplotlib\.org|Creator", content)
    if kind == "svg":
        text = content.decode("utf-8")
        assert f"<title>{alt_text(figure)}</title>" in text
        assert "'DejaVu Sans', Verdana, sans-serif" in text
        assert ">share of the total capacity, fullest first</text>" in text
    if kind == "pdf":
        assert b"/Type3" not in content
        assert b"/FontFile2" in content


def test_what_cannot_be_saved_is_refused_in_one_sentence(drawn, tmp_path):
    figure = drawn["fair_levels"][0]
    for path, message in (
        (tmp_path / "a.gif", r"path is '.*a\.gif'; end its name in \.svg or \.pdf or \.png\."),
        (tmp_path / "plain", r"path is '.*plain'; end its name in"),
        (tmp_path / "none" / "a.svg", r"a\.svg cannot be written \(No such file"),
    ):
        with pytest.raises(InputError, match=message):
            save_figure(figure, path)
    with pytest.raises(InputError, match="figure is str; give a matplotlib Figure"):
        lk.save_figure("figure", tmp_path / "a.svg")
    assert list(tmp_path.iterdir()) == []
