"""A Dask cluster at work on replicates: sent in tasks of about a minute, taken back in any order."""

import contextlib
import logging
import socket
import sys
import time
import warnings
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import CancelledError
from math import ceil
from pathlib import Path
from queue import Empty, Queue
from threading import Lock
from typing import Any

import cloudpickle
from distributed import Client, Future, KilledWorker, Security

from labkit.errors import InputError, SchedulerLost
from labkit.sharing import progress
from labkit.sharing.facts import facts, mismatch
from labkit.sharing.replicates import Job
from labkit.sharing.work import WrongWorker, hold, refusal, work

# How long a task should take, and the least that is worth sending.
TASK_SECONDS, LEAST_SECONDS = 60.0, 0.2
# Tasks a worker thread that wait or run, so that no thread waits for the client.
IN_FLIGHT = 2
# Seconds until a scheduler that does not answer is given up, and between two looks at who works for it.
PATIENCE, LOOK = 10.0, 5.0


_clusters: "dict[str, Cluster]" = {}
_connecting = Lock()


def connected(address: str) -> "Cluster":
    """Return the cluster of a scheduler, connected once a process.

    Raises
    ------
    SchedulerLost
        When nothing answers there.
    """
    with _connecting:
        if address not in _clusters:
            _clusters[address] = _connect(address)
        return _clusters[address]


def _connect(address: str) -> "Cluster":
    if address.startswith("tls:") and not Security().get_connection_args("client").get("ssl_context"):
        raise InputError(
            f"scheduler is {address!r}, and no certificates are named; name them in Dask's configuration "
            "(distributed.comm.tls), or give a tcp address."
        )
    # It logs lost connections, which are told in a sentence here.
    logging.getLogger("distributed").setLevel(logging.CRITICAL)
    try:
        host, _, port = address.partition("://")[2].rpartition(":")
        socket.create_connection((host.strip("[]"), int(port)), PATIENCE).close()  # Dask would try for long
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # versions are compared by `check`
            return Cluster(address, Client(address, timeout=PATIENCE, set_as_default=False, name="labkit"))
    except (OSError, OverflowError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error).splitlines()[0]
        raise SchedulerLost(
            f"scheduler {address} does not answer ({reason}); start it, then try again."
        ) from None


class Cluster:
    """A scheduler and its workers, as this process sees them."""

    def __init__(self, address: str, client: Client) -> None:
        self.address, self.client = address, client
        self._threads, self._looked = 1, 0.0

    def check(self) -> int:
        """Compare every worker with this process and return the number of their threads.

        Raises
        ------
        InputError
            For the first worker that lacks labkit or has something else than this process.
        """
        with self._answering():
            present = self.workers()
            run = self.client._run  # with a limit of time, which `run` does not have
            try:
                found = self.client.sync(run, facts, on_error="return", callback_timeout=6 * PATIENCE)
            except TimeoutError:
                raise InputError(
                    f"scheduler {self.address}: not all of its {present} workers answer within "
                    f"{6 * PATIENCE:.0f} seconds; end those that hang, then try again."
                ) from None
        for worker, theirs in sorted(found.items()):
            if isinstance(theirs, ModuleNotFoundError):
                raise InputError(refusal(worker, f"has no {theirs.name or 'labkit'}"))
            if isinstance(theirs, BaseException):
                raise InputError(refusal(worker, f"cannot tell its versions ({theirs})"))
            wrong = mismatch(facts(), theirs)
            if wrong:
                raise InputError(refusal(worker, wrong))
        return self.threads() if found else 0

    def workers(self) -> int:
        """Return the number of workers that the scheduler has now."""
        with self._answering():
            return len(self.client.nthreads())

    def threads(self) -> int:
        """Return the number of the workers' threads, at least 1; asked anew every few seconds."""
        if time.monotonic() - self._looked > LOOK:
            with self._answering():
                self._threads = max(1, sum(self.client.nthreads().values()))
            self._looked = time.monotonic()
        return self._threads

    def run(
        self,
        job: Job,
        replicates: range,
        given: Sequence[Any] | None,
        count: Callable[[int], None] = lambda done: None,
    ) -> list[Any]:
        """Run replicates on the workers and return their results in order; `count` is told of those done.

        Raises
        ------
        SchedulerLost
            When the scheduler does not answer any more.
        RuntimeError
            When a task ends every worker that gets it.
        InputError
            What the job refuses, or a worker that joined with other versions.
        """
        results: dict[int, Any] = {}
        tasks: dict[Future, range] = {}
        ended: Queue[Future] = Queue()
        left = replicates
        recent: deque[float] = deque(maxlen=8)  # seconds of a replicate; a first one may have compiled
        with self._answering(), warnings.catch_warnings():
            warnings.simplefilter("ignore")  # of jobs that are large, as a large fleet is
            held = self.client.submit(hold, _packed(job), pure=False)
            try:
                while left or tasks:
                    while left and len(tasks) < IN_FLIGHT * self.threads():
                        part, left = _cut(left, min(recent, default=float("inf")), IN_FLIGHT * self._threads)
                        at = part.start - replicates.start
                        own = None if given is None else list(given[at : at + len(part)])
                        task = self.client.submit(work, held, facts(), part, own, pure=False)
                        tasks[task] = part
                        task.add_done_callback(ended.put)
                    task = self._next(ended)
                    part = tasks.pop(task)
                    found, took = _result(task, part)
                    results.update(zip(part, found, strict=True))
                    recent.append(took / len(part))
                    progress.add(len(part))
                    count(len(part))
            finally:
                with contextlib.suppress(Exception):  # nothing hides what went wrong
                    self.client.cancel([*tasks, held])
        return [results[replicate] for replicate in replicates]

    def _next(self, ended: "Queue[Future]") -> Future:
        """Wait for a task to end; looking through all that are under way would keep the client busy."""
        lost = 0.0
        while True:
            with contextlib.suppress(Empty):
                return ended.get(timeout=1.0)
            lost = 0.0 if self.client.status == "running" else lost + 1.0
            if lost > PATIENCE:
                raise CancelledError

    @contextlib.contextmanager
    def _answering(self) -> Iterator[None]:
        """Turn what a scheduler that is gone causes into one sentence."""
        try:
            yield
        except (CancelledError, OSError, TimeoutError) as error:
            _clusters.pop(self.address, None)
            with contextlib.suppress(Exception):
                self.client.close(timeout=1)
            raise SchedulerLost(
                f"scheduler {self.address} does not answer any more ({type(error).__name__}); start it "
                "and its workers again, then run the same command: it goes on with what is not recorded."
            ) from None


def _cut(left: range, seconds: float, parts: int) -> tuple[range, range]:
    """Return the next replicates for a task, and those after them.

    Parameters
    ----------
    left : range
    seconds : float
        That a replicate takes; infinite while not known.
    parts : int
        Tasks that are under way at a time: what is left is shared among them, so that all end alike.
    """
    size = 1
    if seconds < float("inf"):
        fitting = TASK_SECONDS / max(seconds, 1e-9)
        worth = LEAST_SECONDS / max(seconds, 1e-9)
        size = max(1, int(min(fitting, max(worth, ceil(len(left) / parts)))))
    return left[:size], left[size:]


def _result(task: Future, part: range) -> tuple[list[Any], float]:
    """Return what a task gave; tell apart what is wrong with the work, a worker, or the cluster."""
    which = f"replicate {part.start}" if len(part) == 1 else f"replicates {part.start} to {part.stop - 1}"
    failed = task.status == "error"
    try:
        return task.result()
    except KilledWorker as error:
        raise RuntimeError(
            f"{which} ended {error.allowed_failures + 1} workers one after the other, most likely for want "
            "of memory; give each worker more memory or fewer threads."
        ) from None
    except WrongWorker as error:
        raise SchedulerLost(f"{error} It came while work was under way; what is recorded is kept.") from None
    except (CancelledError, OSError, TimeoutError) as error:
        if not failed:
            raise
        raise RuntimeError(f"{which} failed on a worker: {type(error).__name__}: {error}") from error


def _packed(job: Job) -> bytes:
    """Return a job as bytes, with the code of modules that lie beside the notebook."""
    beside = [
        module
        for name, module in list(sys.modules.items())
        if name.partition(".")[0] not in ("labkit", "__main__")
        and _is_beside(getattr(module, "__file__", None))
    ]
    with _by_value(beside):
        return cloudpickle.dumps(job)


def _is_beside(file: str | None) -> bool:
    """Tell whether a module's file lies in or below the working folder, and is no installed package."""
    if not file:
        return False
    path = Path(file)
    installed = any(path.is_relative_to(place) for place in (sys.prefix, sys.base_prefix))
    return path.is_relative_to(Path.cwd()) and not installed


@contextlib.contextmanager
def _by_value(modules: list[Any]) -> Iterator[None]:
    register: Callable = cloudpickle.register_pickle_by_value
    known = cloudpickle.list_registry_pickle_by_value()
    new = [module for module in modules if module.__name__ not in known]
    for module in new:
        register(module)
    try:
        yield
    finally:
        for module in new:
            cloudpickle.unregister_pickle_by_value(module)
