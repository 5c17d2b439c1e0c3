"""The optimum of open graphs against proved values, a general linear program, and simple peeling.

The values are highest densities (demand inside ÷ servers) of densest parts; each is proved here again from
both sides, by the split and by the direct count of its bottleneck.
"""

import pytest

import labkit as lk
from labkit.survey.fair import fair_profile
from tests.published.airlines import airline_graph
from tests.published.counties import county_graph
from tests.published.flights import flight_graph
from tests.published.telecom import telecom_graph
from tests.survey.oracles import assert_fair, linear_program, peeled, ratio_of

SNDLIB = ("germany50", "nobel-eu", "zib54", "giul39", "polska", "india35", "brain")

GRAPHS = {
    "counties": county_graph,
    "airlines": airline_graph,
    "flights": flight_graph,
    **{name: (lambda name=name: telecom_graph(name)) for name in SNDLIB},
}


@pytest.fixture(scope="module", params=GRAPHS)
def named(request):
    return request.param, lk.fleet_from_graph(GRAPHS[request.param]())


@pytest.mark.parametrize(
    ("name", "servers", "choices"), [("airlines", 514, 3_017), ("flights", 107, 223), ("zib54", 54, 626)]
)
def test_the_open_tables_are_those_the_values_were_proved_on(name, servers, choices):
    fleet = lk.fleet_from_graph(GRAPHS[name]())
    assert (len(fleet), len(fleet.options)) == (servers, choices)


@pytest.mark.parametrize(
    ("name", "value", "digits"),
    [
        ("counties", 2.900744, 6),
        ("airlines", 20.681818, 6),
        ("germany50", 66.583, 3),
        ("nobel-eu", 71.579, 3),
        ("zib54", 455, 3),
        ("giul39", 189.17, 2),
        ("flights", 10_729.58, 2),
    ],
)
def test_proved_values(name, value, digits):
    best = lk.survey(lk.fleet_from_graph(GRAPHS[name]()))
    assert round(best.optimum, digits) == value
    assert not best.balanceable


def test_the_two_servers_of_zib54():
    best = lk.survey(lk.fleet_from_graph(telecom_graph("zib54")))
    assert len(best.bottleneck) == 2
    assert best.optimum > 3.5 * best.mean


@pytest.mark.parametrize("name", ["polska", "india35"])
def test_balanceable_ones(name):
    best = lk.survey(lk.fleet_from_graph(telecom_graph(name)))
    assert best.balanceable
    assert best.optimum == pytest.approx(best.mean, rel=1e-12)
    assert len(best.bottleneck) == len(best.fleet)


def test_both_proofs_and_the_linear_program_agree(named):
    _, fleet = named
    profile = fair_profile(fleet)
    assert_fair(fleet, profile)
    assert profile.optimum == pytest.approx(float(ratio_of(fleet, profile.bottleneck)), rel=1e-12)
    assert abs(profile.agreement()) <= 1e-9
    assert profile.optimum == pytest.approx(linear_program(fleet), rel=1e-9)


@pytest.mark.parametrize("name", ["counties", "airlines", "brain"])
def test_simple_peeling_understates(name):
    # Peeling drops the server of least demand again and again; on these graphs it never sees the densest set.
    fleet = lk.fleet_from_graph(GRAPHS[name]())
    best = lk.survey(fleet)
    assert peeled(fleet) < best.optimum * (1 - 1e-4)
    positions = fleet.names.get_indexer(best.bottleneck)
    assert best.optimum == pytest.approx(float(ratio_of(fleet, positions)), rel=1e-12)


def test_peeling_never_overstates(named):
    _, fleet = named
    best = lk.survey(fleet).optimum
    assert best / 2 <= peeled(fleet) <= best * (1 + 1e-12)
