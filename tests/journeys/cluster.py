"""A real Dask scheduler and real workers, as processes of their own on this machine."""

import contextlib
import os
import socket
import subprocess
import sys
import time
from pathlib import Path

from labkit.records.project import ROOT


class LocalCluster:
    """Started by `with`; everything is ended at its end."""

    def __init__(self, folder: Path, workers: int = 2) -> None:
        self.folder, self.count = folder, workers
        self.processes: list[subprocess.Popen] = []
        self.workers: list[subprocess.Popen] = []
        with socket.socket() as found:
            found.bind(("127.0.0.1", 0))
            self.port = found.getsockname()[1]
        self.address = f"tcp://127.0.0.1:{self.port}"

    def __enter__(self):
        self.start_scheduler()
        for _ in range(self.count):
            self.add_worker()
        return self

    def __exit__(self, *error):
        for process in self.processes:
            process.kill()
        for process in self.processes:
            process.wait()

    def start_scheduler(self):
        words = ["scheduler", "--host", "127.0.0.1", "--port", str(self.port), "--no-dashboard"]
        self.scheduler = self._start(words, "scheduler.log")
        for _ in range(300):
            with contextlib.suppress(OSError), socket.create_connection(("127.0.0.1", self.port), 1):
                return
            time.sleep(0.1)
        raise AssertionError((self.folder / "scheduler.log").read_text())

    def add_worker(self, **environment: str) -> subprocess.Popen:
        # without a nanny, so that the process that is killed is the one that works
        words = ["worker", self.address, "--host", "127.0.0.1", "--nthreads", "1", "--no-nanny"]
        words += ["--no-dashboard", "--local-directory", str(self.folder)]
        worker = self._start(words, f"worker-{len(self.workers)}.log", environment)
        self.workers.append(worker)
        return worker

    def _start(self, words: list[str], log: str, environment: dict[str, str] | None = None):
        given = {**os.environ, "PYTHONPATH": str(ROOT), **(environment or {})}
        with (self.folder / log).open("a") as stream:
            process = subprocess.Popen(
                [sys.executable, "-m", "dask", *words],
                env=given,
                cwd=self.folder,
                stdin=subprocess.DEVNULL,
                stdout=stream,
                stderr=stream,
                start_new_session=True,
            )
        self.processes.append(process)
        return process
