"""What every test shares: fixed examples, no silent skips in CI, and the browser when there is one."""

import os
import shutil

import pytest
from hypothesis import settings

os.environ.setdefault("MPLBACKEND", "Agg")

IN_CI = os.environ.get("CI", "").lower() in {"1", "true"}
BROWSERS = ("chromium", "chromium-browser", "google-chrome")
BROWSER = next((path for path in map(shutil.which, BROWSERS) if path), None)
NO_BROWSER = f"no browser on the PATH ({', '.join(BROWSERS)})"

# Files that take longest begin first, so that no process is left alone with one of them at the end.
LONGEST = (
    "journeys/test_notebooks_in_browser.py",
    "studies/test_durable_studies.py",
    "journeys/test_growth.py",
    "plans/test_dispatcher.py",
    "journeys/test_frozen.py",
    "studies/test_rerun.py",
    "test_docstrings.py",
    "journeys/test_cluster.py",
)

settings.register_profile("fixed", derandomize=True, deadline=None, database=None)
settings.load_profile("fixed")


def pytest_report_header():
    if BROWSER:
        return f"browser: {BROWSER}"
    return f"browser: {NO_BROWSER}: browser tests {'fail' if IN_CI else 'are LEFT OUT'}"


def pytest_collection_modifyitems(config, items):
    items.sort(
        key=lambda item: next((at for at, name in enumerate(LONGEST) if item.path.match(name)), len(LONGEST))
    )
    if BROWSER or IN_CI:
        return
    left_out = [item for item in items if item.get_closest_marker("browser")]
    if left_out:
        items[:] = [item for item in items if not item.get_closest_marker("browser")]
        config.hook.pytest_deselected(items=left_out)


@pytest.fixture(scope="session")
def browser_path():
    """Path of the browser program."""
    if not BROWSER:
        pytest.fail(NO_BROWSER)
    return BROWSER


def pytest_runtest_setup(item):
    if item.get_closest_marker("browser") and not BROWSER:
        pytest.fail(NO_BROWSER)


def _refuse_skip(report):
    """In CI a skipped test, or file of tests, is a failure; an expected failure is not a skip."""
    if IN_CI and report.skipped and not hasattr(report, "wasxfail"):
        reason = report.longrepr[2] if isinstance(report.longrepr, tuple) else report.longrepr
        report.outcome = "failed"
        report.longrepr = f"{report.nodeid}: nothing may be skipped in CI. {reason}"
    return report


@pytest.hookimpl(wrapper=True, tryfirst=True)
def pytest_runtest_makereport(item, call):
    return _refuse_skip((yield))


@pytest.hookimpl(wrapper=True, tryfirst=True)
def pytest_make_collect_report(collector):
    return _refuse_skip((yield))
