"""Work that arrives and stays: the public function, its checks, and its table of measures."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any, NamedTuple

import numpy as np
import pandas as pd

from labkit.cards.shown import Shown
from labkit.compiled import CONFIG, compiled, inlined, specialise
from labkit.engine.arrivals import Arrivals, arrivals_of, read_only
from labkit.engine.information import Fresh, Information
from labkit.engine.loop import place_drawn, place_near, place_shared, place_tasks
from labkit.engine.measures import MEASURED, measure
from labkit.engine.sizes import Sizes
from labkit.engine.weights import comparison_weights
from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet
from labkit.policies.base import Policy
from labkit.randomness import ARRIVALS, COINS, TURNS, kernel_state
from labkit.sharing.replicates import run_replicates
from labkit.survey.fair import fair_profile
from labkit.survey.optimum import optimum_of_unit_work

# A fleet whose loads and choices fill more than this is larger than the caches next to a core.
NEAR_BYTES = 1 << 20


@dataclass(frozen=True)
class Outcome(Shown):
    """What `place` measured.

    Attributes
    ----------
    measures : pandas.DataFrame
        One row a replicate and checkpoint: policy, replicate, tasks, mean_load, max_load, min_load,
        max_utilisation, gap, excess, load_variance, edge_difference. Loads in work units; gap and excess in
        utilisation (equal to loads where capacities are one). `excess` is NaN when demands and capacities
        are so far apart that the optimum cannot be proved; `edge_difference` is NaN where there is no
        two-server choice.
    loads : numpy.ndarray, shape (replicates, servers)
        Loads after the last task, int64 for unit tasks, float64 for tasks with sizes.
    policy, information : str
        The rule and what it could see, in words.
    tasks : int
        How many tasks were placed in each replicate.
    first_replicate : int
        The number of the first replicate; row i of `loads` is replicate first_replicate + i.
    replicates : numpy.ndarray, shape (replicates,)
        The numbers of the replicates.
    by_server : pandas.DataFrame
        The loads after the last task beside each server's fair utilisation, one row a replicate and server.

    Examples
    --------
    402 tasks on four servers: two of them must have one more.

    >>> import labkit as lk
    >>> outcome = lk.place(lk.ring(4), "least-loaded", tasks=402, replicates=2, rng=1)
    >>> outcome.replicates.tolist(), outcome.loads.tolist()
    ([0, 1], [[101, 101, 100, 100], [100, 100, 101, 101]])
    >>> outcome.measures[["replicate", "mean_load", "max_load", "gap"]].values.tolist()
    [[0.0, 100.5, 101.0, 0.5], [1.0, 100.5, 101.0, 0.5]]
    >>> outcome.by_server[["server", "load", "fair_utilisation", "excess"]].head(2).values.tolist()
    [[0.0, 101.0, 100.5, 0.5], [1.0, 101.0, 100.5, 0.5]]
    """

    fleet: Fleet
    policy: str
    information: str
    loads: np.ndarray
    checkpoints: np.ndarray
    measured: np.ndarray
    tasks: int
    first_replicate: int = 0

    @property
    def replicates(self) -> np.ndarray:
        """The numbers of the replicates, one for each row of `loads`."""
        return self.first_replicate + np.arange(len(self.loads))

    @cached_property
    def measures(self) -> pd.DataFrame:
        """The table of measures, one row a replicate and checkpoint."""
        count = self.checkpoints.size
        columns = dict(
            zip(MEASURED, np.moveaxis(self.measured, -1, 0).reshape(len(MEASURED), -1), strict=True)
        )
        work = columns["mean_load"] * self.fleet.size
        optimum = optimum_of_unit_work(self.fleet)
        table = pd.DataFrame(
            {
                "policy": self.policy,
                "replicate": np.repeat(self.replicates, count),
                "tasks": np.tile(self.checkpoints, len(self.loads)),
                **{name: columns[name] for name in MEASURED[:4]},
                "gap": columns["max_utilisation"] - work / self.fleet.total_capacity,
                "excess": columns["max_utilisation"] - optimum * work,
                **{name: columns[name] for name in MEASURED[4:]},
            }
        )
        return table

    @cached_property
    def by_server(self) -> pd.DataFrame:
        """The loads after the last task, one row a replicate and server.

        Columns: policy, replicate, tasks, server, load, utilisation, fair_utilisation and excess. The fair
        utilisation is the server's own level in the max-min fair split of this much work (`labkit.survey`),
        excess is utilisation − fair_utilisation. With ``labkit.headroom(outcome.by_server, risk=...,
        of="excess")`` fair_utilisation + headroom is what a server needs for itself.
        """
        replicates, servers = self.loads.shape
        capacity = 1.0 if self.fleet.capacity is None else self.fleet.capacity
        utilisation = self.loads / capacity
        fair = self.loads.sum(axis=1, keepdims=True) * fair_profile(self.fleet).of_unit_work
        return pd.DataFrame(
            {
                "policy": self.policy,
                "replicate": np.repeat(self.replicates, servers),
                "tasks": self.tasks,
                "server": pd.concat([self.fleet.names.to_series()] * replicates, ignore_index=True),
                "load": self.loads.ravel(),
                "utilisation": utilisation.ravel(),
                "fair_utilisation": fair.ravel(),
                "excess": (utilisation - fair).ravel(),
            }
        )

    def __repr__(self) -> str:
        replicates, servers = self.loads.shape
        return (
            f"<outcome of {self.policy}, information {self.information}: {replicates} replicates, "
            f"{servers} servers, {self.checkpoints.size} checkpoints up to {self.checkpoints[-1]} tasks>"
        )


def place_loads(
    fleet: Fleet,
    rule: Policy,
    *,
    tasks: int,
    seed: np.random.SeedSequence,
    checkpoints: np.ndarray,
    loads: np.ndarray,
    information: Information | None = None,
    work: Sizes | None = None,
    workers: int = 1,
    first_replicate: int = 0,
) -> Outcome:
    """Place tasks on loads that are there already; what is given has been checked.

    Parameters
    ----------
    fleet : Fleet
    rule : Policy
    tasks : int
    seed : numpy.random.SeedSequence
    checkpoints : int64 array, shape (moments,)
    loads : array, shape (replicates, servers), changed in place
        int64 for unit tasks, else float64.
    information : Information, optional
        Default: fresh.
    work : Sizes, optional
        Default: unit tasks.
    workers : int
    first_replicate : int
        Row i of `loads` is replicate first_replicate + i and draws from its streams.

    Returns
    -------
    Outcome
    """
    information = Fresh() if information is None else information
    replicates = range(first_replicate, first_replicate + len(loads))
    measured = np.empty((len(loads), checkpoints.size, len(MEASURED)))
    job = _Job(fleet, rule, seed, information, checkpoints, tasks, work)
    rows = [_Row(at, each, measured[at]) for at, each in enumerate(loads)]
    results = run_replicates(job, replicates, given=rows, workers=workers)
    for row, (ours, out) in zip(rows, results, strict=True):
        if ours is not row.loads:  # it comes from another process
            row.loads[:], row.measured[:] = ours, out
    return Outcome(fleet, rule.name, information.name, loads, checkpoints, measured, tasks, first_replicate)


class _Row(NamedTuple):
    """A replicate's place in a call: the number of its row, its loads, and where its measures go."""

    at: int
    loads: np.ndarray
    measured: np.ndarray

    def __reduce__(self) -> tuple:
        """Send no numbers that are not there yet, and a row of zeros by its length."""
        loads = self.loads if self.loads.any() else (self.loads.size, self.loads.dtype.str)
        return _row_again, (self.at, loads, self.measured.shape)


def _row_again(at: int, loads: Any, shape: tuple[int, ...]) -> _Row:
    """Make a row in another process; what comes from there may be memory that cannot be written."""
    own = np.zeros(*loads) if isinstance(loads, tuple) else np.array(loads)
    return _Row(at, own, np.empty(shape))


def measured_loads(fleet: Fleet, loads: np.ndarray) -> np.ndarray:
    """Return what is measured of one replicate's loads, float64 of shape (len(MEASURED),)."""
    out = np.empty(len(MEASURED))
    demand = read_only(np.empty(0)) if fleet.demand is None else fleet.demand
    measure(loads, fleet.capacity, arrivals_of(fleet).options, demand, _pairs_of(fleet), out)
    return out


def zero_loads(servers: int, replicates: int, whole: bool) -> np.ndarray:
    """Return loads of zero, shape (replicates, servers), int64 or float64.

    Rows are two cache lines apart: threads that write at the ends of neighbouring rows slow each other.
    """
    return np.zeros((replicates, servers + 16), np.int64 if whole else np.float64)[:, :servers]


class _Job:
    """One call of `place`, prepared: what all its replicates share."""

    def __init__(
        self,
        fleet: Fleet,
        rule: Policy,
        seed: np.random.SeedSequence,
        information: Information,
        checkpoints: np.ndarray,
        tasks: int,
        work: Sizes | None,
        state: tuple[Any, ...] | None = None,
    ) -> None:
        self.fleet, self.information = fleet, information
        self.rule, self.seed, self.checkpoints = rule, seed, checkpoints
        self.every, self.dispatchers = information.every, information.dispatchers
        self.tasks, self.work = tasks, work
        self.arrivals = arrivals_of(fleet)
        self.capacity, self.weights = fleet.capacity, comparison_weights(fleet.capacity)
        self.demand = read_only(np.empty(0)) if fleet.demand is None else fleet.demand
        self.state = rule.prepare(fleet) if state is None else state
        self.renewal = rule.renewal(fleet)
        self._no_sizes = None if work is None else np.empty(0)
        self.pairs_of = _pairs_of(fleet)
        self.several = None if only_pairs(self.arrivals) else True
        touched = 8 * fleet.size * (1 if self.capacity is None else 2) + self.arrivals.options.nbytes
        ahead = fleet.implicit is not None or fleet.demand is not None or touched > NEAR_BYTES
        self.ahead = True if ahead or self.dispatchers > 0 else None
        rule.check(np.int64 if work is None and not rule.moves_work else np.float64)
        self.loop = loop_of(rule)

    def __reduce__(self) -> tuple:
        """Send what was given, and the rule's tables, which another processor could work out differently."""
        given = (self.fleet, self.rule, self.seed, self.information, self.checkpoints, self.tasks, self.work)
        return _Job, (*given, self.state)

    def compile(self) -> None:
        """Place no task at all, so that the loop is compiled before threads share it."""
        whole = self.work is None and not self.rule.moves_work
        loads = np.zeros(self.fleet.size, np.int64 if whole else np.float64)
        out = np.empty((self.checkpoints.size, len(MEASURED)))
        words = np.zeros(4, np.uint64)
        self._place(self.state, words, words.copy(), words.copy(), loads, loads, 0, 0, self._no_sizes, out)

    def run(self, replicate: int, given: _Row) -> tuple[np.ndarray, np.ndarray]:
        """Place all tasks of one replicate: loads and measures are written into its row, and returned.

        `replicate` numbers its streams; given sizes that differ between replicates have it in row `given.at`.
        """
        loads, out = given.loads, given.measured
        arriving = kernel_state(self.seed, replicate, ARRIVALS)
        own = kernel_state(self.seed, replicate, COINS)
        turns = kernel_state(self.seed, replicate, TURNS)
        report = loads if self.every == 0 else loads.copy()
        state = self.rule.own_state(self.state)
        work = self.work
        blocks = [(0, self.tasks, None)] if work is None else work.blocks(self.seed, replicate, given.at)
        for first, last, sizes in blocks:
            self._place(state, arriving, own, turns, loads, report, first, last, sizes, out)
        return loads, out

    def _pictures(self, loads: np.ndarray) -> np.ndarray | None:
        """Return room for what each dispatcher sees, or None; a report fills it before the first task."""
        return np.zeros((self.dispatchers, loads.size), loads.dtype) if self.dispatchers else None

    def _place(
        self,
        state: tuple[Any, ...],
        arriving: np.ndarray,
        own: np.ndarray,
        turns: np.ndarray,
        loads: np.ndarray,
        report: np.ndarray,
        first: int,
        last: int,
        sizes: np.ndarray | None,
        out: np.ndarray,
    ) -> None:
        try:
            # Without the compiler unsigned words are NumPy scalars, which warn when they wrap around.
            with np.errstate(over="ignore" if CONFIG.DISABLE_JIT else "warn"):
                failed = self.loop(
                    self.arrivals, self.several, arriving, own, state, self.capacity, self.weights,
                    sizes, loads, read_only(report.view()), report, self.every, self._pictures(loads), turns,
                    self.renewal, self.ahead, first, last, self.checkpoints, self.demand, self.pairs_of, out,
                )  # fmt: skip
        except Exception as error:
            refusal = self.rule.explain(error)
            if refusal is None:
                raise
            raise refusal from error
        if failed:
            raise InputError(
                f"policy {self.rule.name} picked a position outside the options of task {failed}; "
                "it must return a whole number from 0 to the number of options less 1."
            )


@lru_cache(maxsize=64)
def _loop(kernel_name: str, choose: Callable, renew: Callable, after: Callable, cache: bool) -> Callable:
    pieces = {"choose": inlined(choose), "after": inlined(after)}
    loops = {
        loop.__name__: specialise(loop, kernel_name, cache=False, **pieces)
        for loop in (place_near, place_drawn, place_shared)
    }
    return specialise(place_tasks, kernel_name, cache=cache, renew=compiled(renew), **loops)


def loop_of(rule: Policy) -> Callable:
    """Return the placement loop compiled for a policy's chooser (one copy a chooser)."""
    return _loop(rule.kernel_name, rule.choose, rule.renew, rule.after, rule.cached)


def only_pairs(arrivals: Arrivals) -> bool:
    """Tell whether every choice has exactly two options."""
    options = arrivals.options
    return options.shape[1] == 2 or bool((options[:, 2:] == ABSENT).all() and options.shape[0] > 0)


def _pairs_of(fleet: Fleet) -> int:
    if fleet.implicit is None:
        return 0
    if fleet.implicit.options != 2:
        return 3
    return 1 if fleet.implicit.distinct else 2
