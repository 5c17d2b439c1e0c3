"""Benchmarks print what they measured: a line a benchmark at the end."""

import pytest

_LINES = pytest.StashKey[list[str]]()


def pytest_configure(config):
    config.stash[_LINES] = []


@pytest.fixture
def report(request):
    """Return a function that keeps a line for the summary."""
    return request.config.stash[_LINES].append


def pytest_terminal_summary(terminalreporter, config):
    terminalreporter.section("measured")
    for line in config.stash[_LINES]:
        terminalreporter.line(line)
