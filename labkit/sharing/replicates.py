"""The one place where replicates are run side by side: threads of this process, or workers of a cluster."""

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from itertools import repeat
from typing import Any, Protocol

from labkit.sharing import progress, scheduler
from labkit.sharing.waiting import Waiting


class Job(Protocol):
    """What all replicates of a call share. It can be pickled, and `run` may be called by several threads."""

    def compile(self) -> None:
        """Compile what `run` needs, before threads share it."""

    def run(self, replicate: int, given: Any) -> Any:
        """Run one replicate, from what it alone is given; the result depends on nothing else."""


def run_replicates(
    job: Job, replicates: range, *, given: Sequence[Any] | None = None, workers: int = 1
) -> list[Any]:
    """Run replicates and return their results in order.

    Parameters
    ----------
    job : Job
        Sent to the workers of the cluster when a scheduler is in use, and else run here.
    replicates : range
        Their numbers.
    given : sequence, optional
        What each replicate alone is given, in their order; None for each when there is nothing.
    workers : int
        Threads of this process; with a scheduler they do not count.
    """
    address = scheduler.in_use()
    with Waiting("replicates computed", len(replicates), "replicate") as waiting:
        if address is None:
            results = run_here(job, replicates, given, workers, waiting.add)
        else:
            from labkit.sharing.cluster import connected

            results = connected(address).run(job, replicates, given, waiting.add)
    progress.add(0)
    return results


def run_here(
    job: Job,
    replicates: range,
    given: Sequence[Any] | None,
    workers: int,
    count: Callable[[int], None] = lambda done: None,
) -> list[Any]:
    """Run replicates in threads of this process; `count` is told of those that are done."""
    each = repeat(None) if given is None else given

    def run(replicate: int, own: Any) -> Any:
        result = job.run(replicate, own)
        progress.add(1)
        count(1)
        return result

    job.compile()
    if workers == 1 or len(replicates) == 1:
        return list(map(run, replicates, each))
    with ThreadPoolExecutor(workers) as pool:
        return list(pool.map(run, replicates, each))
