"""Restart and Run All in a real JupyterLab gives the record that a study gives."""

import json
import re
import secrets
import socket
import subprocess
import time
import urllib.request
from contextlib import contextmanager

import pytest

from labkit.cli import main
from tests.journeys.ways import JUPYTER, assert_same, copy_with_defaults, environment, the_record, write_study

PATIENCE = 60  # seconds for anything that is expected to happen
FLAGS = (
    *("--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking"),
    *("--disable-component-update", "--disable-sync", "--disable-dev-shm-usage"),
)


@contextmanager
def jupyterlab(root, scratch):
    """Serve a folder with settings of its own; yield the address and the token."""
    settings = scratch / "settings" / "@jupyterlab" / "apputils-extension"
    settings.mkdir(parents=True)
    quiet = {"fetchNews": "false", "checkForUpdates": False, "doNotDisturbMode": True}
    (settings / "notification.jupyterlab-settings").write_text(json.dumps(quiet))
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
        yield address, token
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
        yield browser.new_page(viewport={"width": 1280, "height": 1000})
        browser.close()


def prompts(page):
    found = page.locator(".jp-Notebook .jp-CodeCell .jp-InputPrompt").all_inner_texts()
    return [text.strip() for text in found]


def wait_for_kernel(page):
    # the notebook's own indicator is idle before the kernel is connected; the status bar's is not
    page.get_by_text(re.compile(r"\| Idle$")).first.wait_for(timeout=1000 * PATIENCE)


def restart_and_run_all(page):
    wait_for_kernel(page)
    page.get_by_role("menuitem", name="Run", exact=True).click()
    page.get_by_role("menuitem", name=re.compile("^Restart Kernel and Run All Cells")).click()
    page.locator(".jp-Dialog button.jp-mod-accept").click(timeout=1000 * PATIENCE)
    deadline = time.monotonic() + PATIENCE
    calm = 0
    while time.monotonic() < deadline and calm < 3:
        page.wait_for_timeout(100)
        now = prompts(page)
        idle = page.get_by_text(re.compile(r"\| Idle$")).count()
        done = idle and not any("*" in text for text in now) and any(re.search(r"\d", text) for text in now)
        calm = calm + 1 if done else 0
    return prompts(page)


@pytest.mark.browser
def test_restart_and_run_all_gives_the_record_of_the_study(tmp_path, page):
    root = tmp_path / "root"
    root.mkdir()
    copy_with_defaults(root, tmp_path / "by hand")
    assert main(["run", str(write_study(tmp_path)), "--store", str(tmp_path / "runs")]) == 0
    with jupyterlab(root, tmp_path) as (address, token):
        page.goto(f"{address}/lab/tree/headroom.ipynb?token={token}&reset", wait_until="domcontentloaded")
        page.wait_for_selector(".jp-Notebook .jp-Cell", timeout=1000 * PATIENCE)
        done = restart_and_run_all(page)
        errors = page.locator(".jp-RenderedText[data-mime-type='application/vnd.jupyter.stderr']")
        assert errors.all_inner_texts() == []
        assert done == [f"[{at}]:" for at in range(1, len(done) + 1)]
        shown = page.locator(".jp-OutputArea").last.inner_text()
    one, other = the_record(tmp_path / "by hand"), the_record(tmp_path / "runs")
    assert_same(one, other)
    assert one[0]["study"] == "by-hand"
    assert one[0]["run_id"] in shown
