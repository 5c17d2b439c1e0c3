"""A written plan that tests read and copy, never change."""

import pytest

import labkit as lk
from tests.plans.makers import odd_fleet


@pytest.fixture(scope="session")
def fleet():
    return odd_fleet()


@pytest.fixture(scope="session")
def plan(fleet):
    return lk.plan(fleet, "smooth-feedback(gain=1.5, every=7)")


@pytest.fixture(scope="session")
def written(plan, tmp_path_factory):
    return plan.write(tmp_path_factory.mktemp("plans") / "plan")
