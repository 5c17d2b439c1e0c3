"""`make lab` serves this machine only and always asks for a token, whatever a configuration says."""

import json
import os
import signal
import socket
import subprocess
import time
import urllib.error
import urllib.request
from contextlib import suppress
from pathlib import Path
from urllib.parse import urlsplit

import pytest

ROOT = Path(__file__).parents[2]
PATIENCE = 60  # seconds

HOSTILE = """
c.ServerApp.ip = "0.0.0.0"
c.ServerApp.token = ""
c.ServerApp.password = ""
c.IdentityProvider.token = ""
c.PasswordIdentityProvider.token = ""
c.PasswordIdentityProvider.hashed_password = ""
c.ServerApp.identity_provider_class = "jupyter_server.auth.identity.IdentityProvider"
c.ServerApp.allow_remote_access = True
c.ServerApp.allow_unauthenticated_access = True
c.ServerApp.allow_origin = "*"
c.ServerApp.disable_check_xsrf = True
"""


def status_of(address):
    try:
        with urllib.request.urlopen(address, timeout=10) as answer:
            return answer.status
    except urllib.error.HTTPError as error:
        return error.code


def described(folder, server, log):
    """Return what the server says of itself, once it is there."""
    deadline = time.monotonic() + PATIENCE
    while time.monotonic() < deadline and server.poll() is None:
        for file in folder.glob("jpserver-*.json"):
            try:
                return json.loads(file.read_bytes())
            except ValueError:
                break  # half written
        time.sleep(0.1)
    pytest.fail(f"JupyterLab did not come up: {log.read_text()}")


def listening(pid):
    """Return the addresses on which a process accepts connections, as the kernel knows them."""
    sockets = set()
    for handle in Path(f"/proc/{pid}/fd").iterdir():
        try:
            sockets.add(os.readlink(handle))
        except OSError:
            continue  # closed meanwhile
    found = set()
    for table in ("tcp", "tcp6"):
        for line in Path(f"/proc/{pid}/net/{table}").read_text().splitlines()[1:]:
            cells = line.split()
            if cells[3] == "0A" and f"socket:[{cells[9]}]" in sockets:
                found.add(cells[1].partition(":")[0])
    return found


def test_a_hostile_configuration_opens_neither_the_address_nor_the_token(tmp_path):
    for name in ("jupyter_server_config.py", "jupyter_lab_config.py", "jupyter_config.py"):
        (tmp_path / "config").mkdir(exist_ok=True)
        (tmp_path / "config" / name).write_text(HOSTILE)
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    places = {
        f"JUPYTER_{name}_DIR": str(tmp_path / name.lower()) for name in ("CONFIG", "RUNTIME", "DATA")
    } | {"JUPYTERLAB_SETTINGS_DIR": str(tmp_path / "s"), "JUPYTERLAB_WORKSPACES_DIR": str(tmp_path / "w")}
    log = tmp_path / "log"
    with log.open("wb") as stream:
        server = subprocess.Popen(
            [
                *("make", "--no-print-directory", "-o", "setup", "lab"),
                f"LAB=--no-browser --port={port} --ServerApp.port_retries=0",
            ],
            cwd=ROOT,
            env={**os.environ, **places, "JUPYTER_TOKEN": ""},
            stdout=stream,
            stderr=subprocess.STDOUT,
            start_new_session=True,
        )
    try:
        about = described(tmp_path / "runtime", server, log)
        assert len(about["token"]) >= 48
        assert about["root_dir"] == str(ROOT)
        address = f"http://127.0.0.1:{port}/api/contents"
        assert status_of(address) == 403
        assert status_of(f"{address}?token=") == 403
        assert status_of(f"{address}?token={about['token']}") == 200
        with urllib.request.urlopen(f"http://127.0.0.1:{port}/?token={about['token']}", timeout=10) as first:
            assert urlsplit(first.url).path == "/lab/tree/notebooks/start.ipynb"
        assert listening(about["pid"]) == {"0100007F"}
        assert about["token"] not in Path(f"/proc/{about['pid']}/cmdline").read_text()
    finally:
        with suppress(ProcessLookupError):
            os.killpg(server.pid, signal.SIGTERM)
        server.wait(PATIENCE)
