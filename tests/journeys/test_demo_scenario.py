"""The demo fleet is what its scenario says: sizes, optimum, bottleneck."""

import re
import tomllib
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import linprog
from scipy.sparse import block_array, coo_array, csr_array

import labkit as lk
from labkit.analysis.headroom import replicates_needed

EXPERIMENTS = Path(__file__).parents[2] / "experiments"
SCENARIO = (EXPERIMENTS / "demo" / "README.md").read_text(encoding="utf-8")


@pytest.fixture(scope="module")
def fleet():
    return lk.read_fleet(EXPERIMENTS / "demo")


def lowest_highest_utilisation(fleet):
    """Minimise the highest load ÷ capacity over all splits of every choice's demand in two."""
    choices, servers = len(fleet.options), len(fleet)
    halves = np.arange(2 * choices)
    server = fleet.options.T.astype(int).ravel()
    loads = coo_array((np.ones(2 * choices), (server, halves)), shape=(servers, 2 * choices))
    splits = coo_array((np.ones(2 * choices), (halves % choices, halves)), shape=(choices, 2 * choices))
    result = linprog(
        np.append(np.zeros(2 * choices), 1.0),
        A_ub=block_array([[loads, csr_array(-fleet.capacity[:, None])]]),
        b_ub=np.zeros(servers),
        A_eq=block_array([[splits, csr_array((choices, 1))]]),
        b_eq=fleet.demand,
    )
    assert result.success
    return result.x[-1]


def test_the_optimum_is_the_one_stated(fleet):
    optimum, mean = lowest_highest_utilisation(fleet), fleet.demand.sum() / fleet.total_capacity
    assert optimum == pytest.approx(600 / 720, abs=1e-9)
    assert mean == pytest.approx(0.8)
    assert f"{100 * optimum:.2f} %" in SCENARIO
    assert f"{100 * (optimum / mean - 1):.2f} % above the mean" in SCENARIO


def test_the_bottleneck_certifies_the_optimum(fleet):
    named = re.search(r"bottleneck \| ([^:]*):", SCENARIO)[1].split(", ")
    inside = fleet.names.isin(named)
    assert inside.sum() == len(named) == 6
    confined = fleet.demand[inside[fleet.options].all(axis=1)].sum()
    assert confined / fleet.capacity[inside].sum() == pytest.approx(600 / 720, abs=1e-12)
    assert (np.diff(np.flatnonzero(inside)) == 1).all()


def test_sizes_are_those_stated(fleet):
    assert (len(fleet), len(fleet.options), fleet.total_capacity, fleet.demand.sum()) == (
        100,
        126,
        12_000,
        9_600,
    )
    assert (fleet.capacity.min(), fleet.capacity.max()) == (80, 200)
    step = np.abs(np.diff(fleet.options.astype(int), axis=1)).ravel()
    assert np.isin(step, [1, 99]).sum() == 100


def test_the_study_asks_for_enough_replicates_and_places_the_demand(fleet):
    study = tomllib.loads((EXPERIMENTS / "demo.toml").read_text(encoding="utf-8"))
    assert study["replicates"] >= replicates_needed(study["answer"]["risk"], study["answer"]["confidence"])
    assert study["parameters"]["tasks"] == fleet.demand.sum()
    assert study["answer"]["baseline"] in study["parameters"]["policies"]
