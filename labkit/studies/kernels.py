"""Kernels that can run side by side: no port race, the Python and labkit of one place, nothing left behind.

Ports are picked before they are bound, so two kernels that start together can pick the same one. On POSIX
systems each kernel gets Unix sockets in a folder of its own instead; elsewhere the usual ports.
"""

import asyncio
import contextlib
import os
import re
import shutil
import sys
from collections.abc import Iterator, Mapping
from pathlib import Path
from types import MappingProxyType
from typing import Any

from jupyter_client.manager import AsyncKernelManager
from jupyter_core.utils import ensure_event_loop, run_sync
from traitlets import default

from labkit.studies.place import HERE, Place
from labkit.studies.scratch import folder_for_sockets

# The kernels of this process that are alive; an interrupted command ends them.
_alive: set["PrivateKernelManager"] = set()


class PrivateKernelManager(AsyncKernelManager):
    """A kernel over Unix sockets in a private folder, with the Python and labkit of its place."""

    _folder: str | None = None
    preload: tuple[str, ...] = ()
    place: Place = HERE
    extra: Mapping[str, str] = MappingProxyType({})

    if os.name == "posix":
        transport = "ipc"

        @default("ip")
        def _private_address(self) -> str:
            return os.path.join(folder_for_sockets(), "k")

    def format_kernel_cmd(self, extra_arguments: list[str] | None = None) -> list[str]:
        """Return the command: the place's Python, whatever kernels are installed, and no history file."""
        connection = os.path.realpath(self.connection_file)
        # elsewhere labkit may be older than its own way of starting kernels
        module = ["ipykernel_launcher"]
        if self.place == HERE:
            module = ["labkit.studies.kernel_main", ",".join(self.preload)]
        command = [str(self.place.python), "-m", *module, "-f", connection]
        return [*command, "--HistoryManager.enabled=False", *(extra_arguments or [])]

    async def start_kernel(self, **options: Any) -> None:  # type: ignore[override]
        """Start the kernel with the place's labkit first on its path."""
        environment = {**options.pop("env", os.environ), **self.extra}
        if self.place != HERE:
            # machine code is kept by the path of its source, and this path will not come again
            environment["NUMBA_CACHE_DIR"] = str(self.place.root / ".numba_cache")
        paths = [str(self.place.root), *filter(None, [environment.get("PYTHONPATH")])]
        environment["PYTHONPATH"] = os.pathsep.join(paths)
        environment["PYDEVD_DISABLE_FILE_VALIDATION"] = "1"
        if os.name == "posix":
            self._folder = os.path.dirname(self.ip)
            self.connection_file = os.path.join(self._folder, "connection.json")  # else it is left in /tmp
        _alive.add(self)
        await super().start_kernel(env=environment, **options)

    async def cleanup_resources(self, restart: bool = False) -> None:  # type: ignore[override]
        """Remove the private folder with the rest."""
        await super().cleanup_resources(restart=restart)
        _alive.discard(self)
        if self._folder and not restart:
            shutil.rmtree(self._folder, ignore_errors=True)

    def end_now(self) -> None:
        """End the kernel's process at once, from any thread."""
        process = getattr(self.provisioner, "process", None)
        if process is not None:
            process.kill()


def start_kernel(
    notebook: Path, place: Place = HERE, environment: Mapping[str, str] | None = None
) -> type[PrivateKernelManager]:
    """Start a kernel for a notebook and return a class that nbclient can call for its manager.

    `environment` is added to that of this process.

    nbclient makes managers itself, from a class, and starts them when it is itself loaded. This kernel is on
    its way before that, so that both load at the same time; it begins with what the notebook will import.
    """
    manager = PrivateKernelManager(kernel_name="python3")
    manager.place, manager.preload = place, _imports(notebook)
    manager.extra = environment or {}
    # the working directory that JupyterLab gives; papermill's own option would change it for all threads
    try:
        run_sync(manager.start_kernel)(cwd=str(notebook.parent))
    except BaseException:
        _end(manager)
        raise

    class Started(PrivateKernelManager):
        def __new__(cls, **options: Any) -> Any:
            return manager

    return Started


def end_now(kernel: type[PrivateKernelManager]) -> None:
    """End a kernel's process at once, from any thread; what it did is still to be cleaned up."""
    manager: PrivateKernelManager = kernel()
    manager.end_now()


def end_kernel(kernel: type[PrivateKernelManager]) -> None:
    """End a kernel and remove what it left, if that has not been done."""
    _end(kernel())


def _end(manager: PrivateKernelManager) -> None:
    if manager in _alive:
        manager.end_now()
        run_sync(manager.cleanup_resources)()


@contextlib.contextmanager
def own_event_loop() -> Iterator[None]:
    """Close the event loop that jupyter makes for each thread and leaves open."""
    loop = ensure_event_loop()
    try:
        yield
    finally:
        if not loop.is_running():
            loop.close()
            asyncio.set_event_loop(None)


def end_all() -> None:
    """End the kernels that this process started and that are still alive."""
    for manager in list(_alive):
        manager.end_now()


def _imports(notebook: Path) -> tuple[str, ...]:
    """Return the modules of labkit that a notebook uses; they bring everything that is slow to import."""
    source = notebook.read_text(encoding="utf-8")
    names = dict.fromkeys(re.findall(r"\blk\.(\w+)", source))
    known = sys.modules["labkit"]._HOMES
    homes = [known[name] for name in names if name in known]
    return tuple(dict.fromkeys([*homes, *re.findall(r"\bfrom (labkit\.[\w.]+) import", source)]))
