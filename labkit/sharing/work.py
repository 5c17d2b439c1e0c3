"""What a worker of the cluster executes: some replicates of a job that it has got once."""

import time
from collections import OrderedDict
from dataclasses import dataclass, field
from functools import lru_cache
from threading import Lock
from typing import Any

import cloudpickle

from labkit.errors import InputError
from labkit.sharing.facts import facts, mismatch
from labkit.sharing.replicates import Job

# Jobs that a worker keeps prepared.
_KEPT = 4

_jobs: "OrderedDict[bytes, _Prepared]" = OrderedDict()
_lock = Lock()


@dataclass
class _Prepared:
    job: Job
    compiled: bool = False
    lock: Lock = field(default_factory=Lock)


class WrongWorker(InputError):
    """A worker that has not what the client has."""


def hold(data: bytes) -> bytes:
    """Return a job: as the result of a task it is sent to each worker once, and made again when lost."""
    return data


def work(
    data: bytes, expected: dict[str, str], replicates: range, given: list[Any] | None
) -> tuple[list[Any], float]:
    """Run replicates of a job; return their results, and the seconds that took without preparing it.

    Raises
    ------
    WrongWorker
        When this worker has not what the client expects of it.
    InputError
        When the job refuses what it was given.
    """
    wrong = mismatch(expected, facts())
    if wrong:
        raise WrongWorker(refusal(_own_address(), wrong))
    try:
        prepared = _prepared(data)
    except ModuleNotFoundError as error:
        raise WrongWorker(
            f"worker {_own_address()} has no module {error.name}, which the rule needs; lay it beside the "
            "notebook, or install it there."
        ) from None
    with prepared.lock:
        if not prepared.compiled:
            prepared.job.compile()
            prepared.compiled = True
    begin = time.perf_counter()
    each = [None] * len(replicates) if given is None else given
    try:
        results = [prepared.job.run(replicate, own) for replicate, own in zip(replicates, each, strict=True)]
    except (SystemExit, KeyboardInterrupt) as error:  # either would end the worker
        raise RuntimeError(f"{type(error).__name__}: {error}") from None
    return results, time.perf_counter() - begin


def refusal(address: str, wrong: str) -> str:
    """Return the refusal of a worker; `wrong` begins with a verb."""
    return f"worker {address} {wrong}; set it up from the same checkout and lock, then start it again."


def packed(function: Any) -> bytes:
    """Return a user's function as bytes that `unpacked` makes a function of, in another process too."""
    return cloudpickle.dumps(function)


@lru_cache(maxsize=64)
def unpacked(data: bytes) -> Any:
    """Return the function in `packed` bytes, the same one for the same bytes."""
    return cloudpickle.loads(data)


def _prepared(data: bytes) -> _Prepared:
    with _lock:
        if data not in _jobs:
            _jobs[data] = _Prepared(cloudpickle.loads(data))
            while len(_jobs) > _KEPT:
                _jobs.popitem(last=False)
        _jobs.move_to_end(data)
        return _jobs[data]


def _own_address() -> str:
    from distributed import get_worker

    return str(get_worker().address)
