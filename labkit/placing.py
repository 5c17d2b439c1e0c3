"""Placing tasks that stay: the public door, where all that is given is checked."""

from collections.abc import Callable, Iterable
from typing import Any

import numpy as np

from labkit.checks import LARGEST_WHOLE, check_whole
from labkit.engine.information import Information, checked_information
from labkit.engine.placement import Outcome, place_loads, zero_loads
from labkit.engine.sizes import LARGEST_SIZE, numbers_for, sizes_of
from labkit.errors import InputError
from labkit.fleet.model import Fleet, check_fleet
from labkit.memory import check_memory
from labkit.policies.base import Policy
from labkit.policies.naming import parse_policy
from labkit.randomness import check_replicates, seed_sequence

# Numbers kept for each replicate and checkpoint, more or less.
_MEASURES = 10


def place(
    fleet: Fleet,
    policy: Policy | str,
    *,
    tasks: int,
    replicates: int = 1,
    rng: Any,
    checkpoints: Iterable[int] | None = None,
    sizes: Any | Callable | None = None,
    information: Information | None = None,
    start: Any | None = None,
    workers: int = 1,
    first_replicate: int = 0,
) -> Outcome:
    """Place tasks that arrive one by one on choices drawn by demand, and stay.

    Parameters
    ----------
    fleet : Fleet
    policy : Policy or str
        The rule, or its name such as ``"least-loaded"`` or ``"mixed(beta=0.5)"``.
    tasks : int
        Number of tasks placed in each replicate, at least 1.
    replicates : int
        Independent repetitions.
    rng : int, numpy.random.SeedSequence or numpy.random.Generator
        The same int or SeedSequence gives every policy the same arrivals (common random numbers).
    checkpoints : sequence of int, optional
        Increasing numbers of tasks, from 1 to `tasks`; measured just after that task. Default: the end only.
    sizes : array or callable, optional
        Sizes of the tasks in work units, finite and at least 0: shape (tasks,), the same for every replicate;
        or (replicates, tasks); or ``sizes(generator, count)``, which returns that many sizes and is called
        for blocks of tasks in order. Default: every task has size 1.
    information : Fresh, Snapshot or Dispatchers, optional
        What the policy sees. Default: ``Fresh()``.
    start : array, shape (servers,) or (replicates, servers), or "forecast", optional
        Loads before the first task, in work units (whole numbers when tasks have no sizes). "forecast": drawn
        for each replicate from the stationary law that `labkit.forecast` finds, so that a burn-in of some
        tens of tasks a server does; for least-loaded and mixed, tasks of size 1. Default: empty.
    workers : int
        Threads that share the replicates. The result does not depend on it.
    first_replicate : int
        The number of the first replicate, at least 0. Replicates first_replicate, first_replicate + 1, … are
        the same, to the bit, in whichever call they are placed, so that a call can go on where another ended;
        for that, `rng` must be the same int or SeedSequence. Rows of `sizes` and `start` are those of the
        replicates of this call.

    Returns
    -------
    Outcome

    Raises
    ------
    InputError
        For any argument that is refused; nothing is computed then.

    Notes
    -----
    Replicate ``r`` uses ``SeedSequence(entropy, spawn_key=(*key, r, stream))``, stream 0 for arrivals, 1 for
    the policy's own coins, 2 for sizes, 3 for which dispatcher gets a task, 4 for a start. See
    `labkit.randomness.DRAWS` for how a raw word becomes an arrival.

    Examples
    --------
    >>> import labkit as lk
    >>> outcome = lk.place(lk.ring(16), "least-loaded", tasks=1600, replicates=3, rng=7)
    >>> outcome.measures[["replicate", "tasks", "mean_load"]].values.tolist()
    [[0.0, 1600.0, 100.0], [1.0, 1600.0, 100.0], [2.0, 1600.0, 100.0]]
    """
    check_fleet(fleet)
    rule = parse_policy(policy)
    tasks = check_whole("tasks", tasks)
    first_replicate, replicates = check_replicates(first_replicate, replicates)
    workers = check_whole("workers", workers)
    seed = seed_sequence(rng)
    moments = _checked_checkpoints(checkpoints, tasks)
    information = checked_information(information, in_tasks=True)
    check_memory(
        f"replicates is {replicates:,}; with {fleet.size:,} servers and {len(moments):,} checkpoints they",
        8 * replicates * (fleet.size + _MEASURES * len(moments)),
        "give fewer replicates or checkpoints",
    )
    work = sizes_of(sizes, tasks, replicates)
    whole = work is None and not rule.moves_work
    if isinstance(start, str):
        if start != "forecast":
            raise InputError(f'start is {start!r}; give loads, or "forecast".')
        if work is not None:
            raise InputError('start is "forecast", which knows tasks of size 1 only; leave sizes out.')
        from labkit.stationary.start import forecast_start  # with all of linear algebra, rarely needed

        loads = forecast_start(fleet, rule, replicates, seed, whole, first_replicate)
    else:
        loads = _starting_loads(start, fleet.size, replicates, whole)
    return place_loads(
        fleet, rule, tasks=tasks, seed=seed, checkpoints=moments, loads=loads, information=information,
        work=work, workers=workers, first_replicate=first_replicate,
    )  # fmt: skip


def _checked_checkpoints(checkpoints: Iterable[int] | None, tasks: int) -> np.ndarray:
    if checkpoints is None:
        return np.array([tasks], np.int64)
    try:
        moments = np.asarray(checkpoints if isinstance(checkpoints, np.ndarray) else list(checkpoints))
    except (TypeError, ValueError):
        moments = np.empty(0)
    whole = moments.ndim == 1 and moments.size > 0 and moments.dtype.kind in "iu"
    if not whole or moments[0] < 1 or moments[-1] > tasks or np.any(np.diff(moments.astype(np.int64)) <= 0):
        raise InputError(
            f"checkpoints is {checkpoints!r}; give increasing whole numbers from 1 to the number of tasks, "
            f"{tasks}."
        )
    return moments.astype(np.int64)


def _starting_loads(start: Any, servers: int, replicates: int, whole: bool) -> np.ndarray:
    loads = zero_loads(servers, replicates, whole)
    if start is None:
        return loads
    given = numbers_for("start", start, servers, replicates, "servers")
    most = LARGEST_WHOLE / servers if whole else LARGEST_SIZE
    beyond = ~(np.abs(given) <= most)
    if beyond.any():
        raise InputError(f"start holds the load {given[beyond][0]}; give finite loads of at most {most:.4g}.")
    if whole and np.any(given != np.floor(given)):
        raise InputError("start holds loads that are not whole; give whole numbers, or give the tasks sizes.")
    if np.any(given < 0):
        raise InputError(f"start holds the load {given.min()}; give loads of at least 0.")
    loads[:] = given
    return loads
