"""A real JupyterLab in a real browser: served, opened, executed, looked at."""

import json
import re
import secrets
import socket
import subprocess
import time
import urllib.request
from contextlib import contextmanager
from pathlib import Path
from typing import NamedTuple

import pytest

from labkit.records.project import ROOT
from tests.journeys.ways import JUPYTER, environment

SETTINGS = {
    "apputils-extension/notification": {
        "fetchNews": "false",
        "checkForUpdates": False,
        "doNotDisturbMode": True,
    },
    "apputils-extension/themes": {"adaptive-theme": True},  # light or dark as the system asks
    "notebook-extension/tracker": {"windowingMode": "none"},  # cells out of sight are there, too
}
SCREENS = ROOT / "build" / "screenshots"
ERRORS = ".jp-RenderedText[data-mime-type='application/vnd.jupyter.stderr']"
PATIENCE = 60  # seconds for anything that is expected to happen
FLAGS = (
    *("--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking"),
    *("--disable-component-update", "--disable-sync", "--disable-dev-shm-usage"),
)


class Lab(NamedTuple):
    """A server: what it serves, and how to get in."""

    root: Path
    address: str
    token: str


@contextmanager
def jupyterlab(root, scratch):
    """Serve a folder with settings of its own."""
    for name, chosen in SETTINGS.items():
        path = scratch / "settings" / "@jupyterlab" / f"{name}.jupyterlab-settings"
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(json.dumps(chosen))
    own = {
        "JUPYTERLAB_SETTINGS_DIR": "settings",
        "JUPYTERLAB_WORKSPACES_DIR": "workspaces",
        "JUPYTER_CONFIG_DIR": "config",
        "JUPYTER_RUNTIME_DIR": "runtime",
        "IPYTHONDIR": "ipython",
    }
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    token = secrets.token_hex(16)
    options = (
        "--no-browser",
        "--ip=127.0.0.1",
        "--allow-root",
        "--ServerApp.port_retries=0",
        f"--port={port}",
    )
    access = (f"--IdentityProvider.token={token}", f"--ServerApp.root_dir={root}")
    with (scratch / "lab.log").open("wb") as log:
        server = subprocess.Popen(
            [JUPYTER, "lab", *options, *access],
            env={**environment(), **{name: str(scratch / folder) for name, folder in own.items()}},
            stdout=log,
            stderr=subprocess.STDOUT,
        )
    try:
        address = f"http://127.0.0.1:{port}"
        wait_until_served(server, f"{address}/api/status?token={token}", scratch / "lab.log")
        yield Lab(root, address, token)
    finally:
        server.terminate()  # it ends its kernels
        try:
            server.wait(15)
        except subprocess.TimeoutExpired:
            server.kill()
            server.wait()


def wait_until_served(server, url, log):
    deadline = time.monotonic() + PATIENCE
    while time.monotonic() < deadline and server.poll() is None:
        try:
            with urllib.request.urlopen(url, timeout=2):
                return
        except OSError:
            time.sleep(0.1)
    pytest.fail(f"JupyterLab did not come up: {log.read_text()}")


@pytest.fixture
def page(browser_path):
    playwright = pytest.importorskip("playwright.sync_api")
    with playwright.sync_playwright() as driver:
        browser = driver.chromium.launch(executable_path=browser_path, headless=True, args=FLAGS)
        yield browser.new_page(viewport={"width": 1280, "height": 800})
        browser.close()


def open_notebook(page, lab, name):
    """Open a notebook alone, in a workspace of its own."""
    address = f"{lab.address}/lab/tree/{name}.ipynb?token={lab.token}&reset"
    page.goto(address, wait_until="domcontentloaded")
    page.wait_for_selector(".jp-Notebook .jp-Cell", timeout=1000 * PATIENCE)


def in_theme(page, scheme):
    """Let the system ask for a light or a dark page, and wait until it is."""
    page.emulate_media(color_scheme=scheme)
    page.wait_for_selector(
        f"body[data-jp-theme-light='{str(scheme == 'light').lower()}']",
        state="attached",
        timeout=1000 * PATIENCE,
    )


def keep(page, name):
    """Keep what the page shows, for people to look at."""
    SCREENS.mkdir(parents=True, exist_ok=True)
    page.mouse.move(5, 5)
    page.wait_for_timeout(500)
    page.screenshot(path=SCREENS / f"{name}.png")


def prompts(page):
    found = page.locator(".jp-Notebook .jp-CodeCell .jp-InputPrompt").all_inner_texts()
    return [text.strip() for text in found]


def wait_for_kernel(page):
    # the notebook's own indicator is idle before the kernel is connected; the status bar's is not
    page.get_by_text(re.compile(r"\| Idle$")).first.wait_for(timeout=1000 * PATIENCE)


def restart_and_run_all(page, seconds=PATIENCE):
    """Run all cells, wait until they have ended, and return their prompts."""
    wait_for_kernel(page)
    page.get_by_role("menuitem", name="Run", exact=True).click()
    page.get_by_role("menuitem", name=re.compile("^Restart Kernel and Run All Cells")).click()
    page.locator(".jp-Dialog button.jp-mod-accept").click(timeout=1000 * PATIENCE)
    deadline = time.monotonic() + seconds
    calm = 0
    while time.monotonic() < deadline and calm < 3:
        page.wait_for_timeout(100)
        now = prompts(page)
        idle = page.get_by_text(re.compile(r"\| Idle$")).count()
        done = idle and not any("*" in text for text in now) and any(re.search(r"\d", text) for text in now)
        calm = calm + 1 if done else 0
    return prompts(page)
