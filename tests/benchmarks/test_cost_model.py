"""The laws of cost foretell a larger point that they were not fitted to."""

import pytest

from tests.benchmarks import cost_model
from tests.benchmarks.cost_model import PLACED, Point, fit, memory_law, place_law, placed, recorded_bytes

pytestmark = pytest.mark.benchmark


def test_costs_that_are_sums_are_found_again():
    points = [Point(3.0 + 2e-9 * x + 5e6 / y, {"one": 1.0, "x": x, "1 / y": 1 / y}) for x, y in
              ((1e3, 1e9), (1e9, 1e9), (1e10, 1e3), (1e6, 1e4), (1e8, 1e5))]  # fmt: skip
    found = fit("sum", "s", points)
    assert found.costs == pytest.approx({"one": 3.0, "x": 2e-9, "1 / y": 5e6}, rel=1e-6)
    assert found({"one": 1.0, "x": 2e9, "1 / y": 1e-3}) == pytest.approx(3.0 + 4.0 + 5e3, rel=1e-6)


def test_place_beyond_the_sizes_fitted(report):
    """Fitted up to 4,000,000 servers and 12 million tasks; foretold for 9,000,000 and 27 million."""
    law = place_law("least-loaded")
    larger = placed("least-loaded", 9_000_000, 27_000_000, 3, 1, repeats=2)
    assert max(case[0] for case in PLACED) < 9_000_000
    factor = law(larger.terms) / larger.value
    report(f"{law}; 9,000,000 servers, 27 million tasks: foretold / measured {factor:.2f}")
    assert 1 / 2 <= factor <= 2


def test_memory_beyond_the_sizes_fitted(report):
    law = memory_law()
    larger = cost_model.remembered(9_000_000, 1_000, 2, 6, 2)
    factor = law(larger.terms) / larger.value
    report(f"{law}; 9,000,000 servers, 6 replicates: foretold / measured {factor:.2f}")
    assert 1 / 1.25 <= factor <= 1.25


def test_a_record_beyond_the_sizes_fitted(report):
    law = cost_model.record_law()
    larger = recorded_bytes(5_000, 20)
    factor = law(larger.terms) / larger.value
    report(f"{law}; 100,000 rows: foretold / measured {factor:.2f}")
    assert 1 / 1.5 <= factor <= 1.5
