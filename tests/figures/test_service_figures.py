"""Figures about work that leaves draw what the tables say and keep their words apart."""

from types import SimpleNamespace

import matplotlib as mpl
import matplotlib.pyplot as plt
import numpy as np
import pandas as pd
import pytest

from labkit.errors import InputError
from labkit.figures.capacity_per_policy import capacity_per_policy
from labkit.figures.from_empty import from_empty
from labkit.figures.highest_by_block import highest_by_block
from labkit.figures.profile_of_day import profile_of_day
from labkit.figures.queue_tails import queue_tails
from labkit.figures.saving import save_figure
from labkit.figures.sojourn_against_age import sojourn_against_age
from labkit.figures.sojourn_against_load import sojourn_against_load
from labkit.traces.facts import TraceFacts

RULES = {"least-loaded": 1.0, "mixed(beta=0.5)": 1.6, "static-split": 2.0, "one-choice": 2.1}


def limits():
    rows = [
        {"policy": rule, "load_factor": load, "measure": measure, "estimate": scale * size / (1 - load)}
        for rule, scale in RULES.items()
        for load in (0.5, 0.7, 0.9, 0.95)
        for measure, size in (("sojourn_mean", 5.0), ("sojourn_p99", 40.0))
        if (rule, load) != ("one-choice", 0.95)
    ]
    table = pd.DataFrame(rows).assign(confidence=0.95)
    return table.assign(lower=0.95 * table["estimate"], upper=1.07 * table["estimate"])


def tails():
    tables = []
    for rule, scale in RULES.items():
        tasks = np.arange(60)
        share = 0.9 ** (tasks**1.2 / scale)
        tables += [
            pd.DataFrame({"policy": rule, "replicate": at, "at_least": tasks, "share": share})
            for at in (0, 1)
        ]
    return pd.concat(tables, ignore_index=True)


def by_age():
    rows = [
        {"network": network, "policy": "least-loaded", "age": age, "estimate": scale * (0.4 + age / 20)}
        for network, scale in (("your fleet", 1.0), ("a ring", 1.2), ("a complete network", 0.98))
        for age in (0.5, 1.0, 2.0, 4.0, 8.0, 16.0, 32.0)
    ]
    table = pd.DataFrame(rows)
    return table.assign(lower=table["estimate"] - 0.02, upper=table["estimate"] + 0.02)


def by_interval(rules, blocks=14, replicates=2):
    rows = [
        {"policy": rule, "replicate": at, "interval": block, "start": 5.16 + 24.0 * block,
         "end": 29.16 + 24.0 * block, "area": 24.0 * scale * (50 + block + at),
         "max_utilisation": scale * (0.5 + 0.01 * (block % 4) + 0.02 * at)}
        for rule, scale in rules.items() for at in range(replicates) for block in range(blocks)
    ]  # fmt: skip
    return pd.DataFrame(rows)


def provisions(risk=0.01):
    return [
        SimpleNamespace(
            table=pd.DataFrame(
                [{"policy": rule, "criterion": "sojourns beyond 60", "risk": risk, "confidence": 0.95,
                  "scale": 0.6 * scale, "lower": 0.59 * scale, "upper": 0.62 * scale}]
            )
        )
        for rule, scale in RULES.items()
    ]  # fmt: skip


def facts(days=3):
    count = 24 * days - 5
    every = np.arange(count)
    arrivals = pd.DataFrame({"day": every // 24, "part": every % 24, "tasks": 5 + every % 24})
    return TraceFacts(1000, 0.0, float(count), 1.0, 1.0, 1.0, 1.0, 0, 5, arrivals, 24)


def everything():
    shown = ["sojourn_mean", "sojourn_p99"]
    return {
        "load": sojourn_against_load(limits(), measures=shown, unit="minutes", limit=0.96),
        "tails": queue_tails(tails(), title="load factor 0.9"),
        "age": sojourn_against_age(by_age()),
        "empty": from_empty(
            {rule: by_interval({rule: scale}) for rule, scale in RULES.items()}, warmup=60.0, unit="minutes"
        ),
        "capacity": capacity_per_policy(provisions(), unit="minutes"),
        "profile": profile_of_day(facts(), day=24.0, unit="hours"),
        "profile of many days": profile_of_day(facts(days=70), day=24.0, unit="hours"),
        "blocks": highest_by_block(by_interval(RULES | {"as-placed": 2.3}), unit="hours", block=24.0),
    }


def test_they_leave_no_trace_and_repeat_to_the_byte(tmp_path):
    before = dict(mpl.rcParams)
    again = everything()
    for name, figure in everything().items():
        one = save_figure(figure, tmp_path / f"{name}.svg")
        assert one.read_bytes() == save_figure(again[name], tmp_path / f"{name}-again.svg").read_bytes()
    assert plt.get_fignums() == []
    assert dict(mpl.rcParams) == before


def heights(axes):
    """Return what each line with limits goes through, by its colour."""
    return {line[0].get_color(): np.asarray(line[0].get_ydata()) for line in axes.containers}


def test_lines_are_the_estimates():
    shown = ["sojourn_p99", "sojourn_mean"]
    table = limits()
    figure = sojourn_against_load(table, measures=shown, unit="minutes")
    for axes, measure in zip(figure.axes, shown, strict=True):
        wanted = [
            rows.sort_values("load_factor")["estimate"].to_numpy()
            for _, rows in table[table["measure"] == measure].groupby("policy")
        ]
        for line, estimates in zip(heights(axes).values(), wanted, strict=True):
            np.testing.assert_allclose(line, estimates)
    assert "1 % of the tasks" in figure.axes[0].get_ylabel()


def test_tails_are_means_over_replicates_where_one_has_no_such_queue():
    table = tails()
    short = table[~((table["replicate"] == 1) & (table["at_least"] > 10))]
    lines = {line.get_color(): line for line in queue_tails(short).axes[0].lines}
    at = {int(x): y for x, y in zip(*next(iter(lines.values())).get_data(), strict=True)}
    own = table[(table["policy"] == "least-loaded") & (table["replicate"] == 0)].set_index("at_least")[
        "share"
    ]
    assert at[10] == pytest.approx(own[10])
    assert at[11] == pytest.approx(own[11] / 2)


def test_where_looking_becomes_worse_is_marked():
    axes = sojourn_against_age(by_age()).axes[0]
    marks = sorted(line.get_xdata()[0] for line in axes.lines if len(set(line.get_xdata())) == 1)
    marks = [mark for mark in marks if mark > 0]
    assert len(marks) == 3
    assert 8 < marks[0] < marks[1] < marks[2] < 16


def test_blocks_are_means_over_replicates_and_time_starts_with_measuring():
    table = by_interval({"one-choice": 1.0})
    axes = highest_by_block(table, unit="hours", block=24.0).axes[0]
    line = axes.lines[0]
    np.testing.assert_allclose(line.get_ydata(), table.groupby("interval")["max_utilisation"].mean())
    assert line.get_xdata()[0] == pytest.approx(12.0)
    assert "5.16" in axes.get_xlabel()


def test_the_least_capacity_stands_on_top():
    axes = capacity_per_policy(provisions(), unit="minutes").axes[0]
    names = [tick.get_text() for tick in axes.get_yticklabels()]
    assert names == sorted(RULES, key=RULES.__getitem__, reverse=True)
    assert axes.figure.get_suptitle().startswith("sojourns beyond 60 minutes at a risk of 1 %")


def test_days_that_are_not_whole_do_not_count_in_the_mean():
    axes = profile_of_day(facts(), day=24.0, unit="hours").axes[0]
    assert axes.figure.get_suptitle().startswith("thick: mean of 2 whole days")


@pytest.mark.parametrize(
    ("draw", "refusal"),
    [
        (lambda: sojourn_against_load(limits(), measures=["gap"], unit="s"), "no measure 'gap'"),
        (
            lambda: sojourn_against_load(
                pd.concat([limits()] * 2), measures=["sojourn_mean"], unit="s"
            ),
            "several rows",
        ),
        (lambda: queue_tails(tails().drop(columns="share")), "no column 'share'"),
        (lambda: sojourn_against_age(by_age().drop(columns="age")), "no column 'age'"),
        (lambda: capacity_per_policy([]), "provisions is empty"),
        (lambda: capacity_per_policy(provisions() + provisions(0.1)), "different criteria or risks"),
        (lambda: highest_by_block(pd.DataFrame({"policy": []}), unit="s", block=1.0), "no column"),
    ],
)  # fmt: skip
def test_tables_that_cannot_be_drawn_are_refused(draw, refusal):
    with pytest.raises(InputError, match=refusal):
        draw()
