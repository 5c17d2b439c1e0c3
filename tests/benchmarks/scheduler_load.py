"""What a Dask scheduler and the study's process can carry: measured with trivial tasks, then simulated.

Run as ``python -m tests.benchmarks.scheduler_load [TASKS]``. Tasks go the way of every study
(`labkit.sharing.cluster`): two a worker thread under way, a job that is sent once, results returned to the
client.
"""

import heapq
import os
import sys
import tempfile
import time
from collections import deque
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from labkit.sharing import cluster
from labkit.sharing.cluster import connected
from tests.journeys.cluster import LocalCluster

TICKS = os.sysconf("SC_CLK_TCK")
MINUTE = 60.0


@dataclass(frozen=True)
class Job:
    """Replicates that sleep, or do nothing at all."""

    seconds: float = 0.0

    def compile(self):
        pass

    def run(self, replicate, given):
        if self.seconds:
            time.sleep(self.seconds * float(np.random.default_rng(replicate).exponential()))
        return replicate


def spent(pid: int) -> float:
    """Return the CPU seconds of a process so far."""
    fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / TICKS


def resident(pid: int) -> int:
    """Return the bytes of memory that a process has now."""
    [line] = [
        line for line in Path(f"/proc/{pid}/status").read_text().splitlines() if line.startswith("VmRSS")
    ]
    return int(line.split()[1]) * 1024


@dataclass(frozen=True)
class Load:
    """What some tasks cost: CPU seconds a task, and bytes of the scheduler's memory a task that is over."""

    tasks: int
    in_flight: int
    seconds: float
    scheduler: float
    client: float
    workers: float
    memory: float

    def __str__(self) -> str:
        rate = self.tasks / self.seconds
        return (
            f"{self.tasks:>9,} tasks, {self.in_flight:>6,} under way: {rate:7.0f} a second; CPU a task: "
            f"scheduler {1e6 * self.scheduler:5.0f} µs, client {1e6 * self.client:5.0f} µs, worker "
            f"{1e6 * self.workers:5.0f} µs; scheduler's memory {self.memory:6.0f} bytes a task"
        )


class Measured:
    """A scheduler and its workers on this machine, to be measured; one task a replicate."""

    def __init__(self, workers: int = 2) -> None:
        self.folder = tempfile.TemporaryDirectory()
        self.local = LocalCluster(Path(self.folder.name), workers=workers)

    def __enter__(self):
        self.local.__enter__()
        self.cluster = connected(self.local.address)
        self.cluster.client.wait_for_workers(len(self.local.workers), timeout=60)
        self.run(200, in_flight=8)
        return self

    def __exit__(self, *error):
        self.cluster.client.close()
        cluster._clusters.clear()
        self.local.__exit__(*error)
        self.folder.cleanup()

    def run(self, tasks: int, *, in_flight: int, seconds: float = 0.0) -> Load:
        """Send so many tasks with so many under way, and return what they cost."""
        before = cluster.TASK_SECONDS, cluster.IN_FLIGHT
        scheduler = self.local.scheduler.pid
        workers = [worker.pid for worker in self.local.workers]
        cluster.TASK_SECONDS, cluster.IN_FLIGHT = 0.0, in_flight / self.cluster.threads()
        try:
            own, theirs, others = time.process_time(), spent(scheduler), sum(map(spent, workers))
            memory, begin = resident(scheduler), time.perf_counter()
            results = self.cluster.run(Job(seconds), range(tasks), None)
            took = time.perf_counter() - begin
        finally:
            cluster.TASK_SECONDS, cluster.IN_FLIGHT = before
        assert results == list(range(tasks))
        return Load(
            tasks, in_flight, took,
            (spent(scheduler) - theirs) / tasks, (time.process_time() - own) / tasks,
            (sum(map(spent, workers)) - others) / tasks, (resident(scheduler) - memory) / tasks,
        )  # fmt: skip


@dataclass(frozen=True)
class Simulated:
    """A simulated study: shares of time while tasks are left to be sent, and idle time over all."""

    threads: int
    seconds: float
    scheduler: float
    client: float
    idle: float
    idle_in_all: float

    def __str__(self) -> str:
        return (
            f"{self.threads:>7,} threads: {self.seconds / 3600:8.2f} h; scheduler {self.scheduler:6.1%}, "
            f"client {self.client:6.1%}; threads idle {self.idle:6.1%} (with the start and the last tasks "
            f"{self.idle_in_all:6.1%})"
        )


@dataclass
class Station:
    """A process of one thread that serves messages one by one, in order of arrival."""

    free: float = 0.0
    busy: float = 0.0

    def serve(self, now: float, seconds: float) -> float:
        """Return when a message that arrives now has been dealt with."""
        self.free = max(self.free, now) + seconds
        self.busy += seconds
        return self.free

    def worked(self, now: float) -> float:
        """Return for how long it has been busy until now."""
        return self.busy - max(0.0, self.free - now)


def simulate(
    threads: int,
    tasks: int,
    *,
    scheduler: float,
    client: float,
    mean: float = MINUTE,
    in_flight: int = cluster.IN_FLIGHT,
    rng: int = 1,
) -> Simulated:
    """Simulate a study of so many tasks on so many threads.

    Parameters
    ----------
    threads, tasks : int
    scheduler : float
        Seconds of the scheduler a task: half when it is sent to a worker, half when its end is told.
    client : float
        Seconds of the client a task.
    mean : float
        Mean seconds of a task; exponentially distributed, a harder case than tasks cut to one length.
    in_flight : int
        Tasks a thread that wait or run.
    rng : int
    """
    return _Study(threads, tasks, scheduler / 2, client, in_flight, mean, rng).run()


SUBMITTED, ARRIVED, ENDED, TOLD = range(4)
# Threads that hold more tasks are not told apart.
MOST_HELD = 16


class _Study:
    """The events of one simulated study: a heap of (time, kind, task, thread)."""

    def __init__(self, threads, tasks, half, client, in_flight, mean, rng):
        self.lengths = np.random.default_rng(rng).exponential(mean, tasks).tolist()
        self.threads, self.tasks, self.most = threads, tasks, in_flight * threads
        self.half, self.client = half, client
        self.hub, self.study = Station(), Station()
        self.events: list[tuple[float, int, int, int]] = []
        self.sent = self.under_way = 0
        self.waiting = [deque() for _ in range(threads)]
        self.held = [0] * threads
        self.by_held = [dict.fromkeys(range(threads))] + [{} for _ in range(MOST_HELD)]
        self.ends = [0.0] * threads
        self.begun = 0.0

    def run(self):
        self.send(0.0)
        steady = None
        now = 0.0
        while self.events:
            now, kind, task, thread = heapq.heappop(self.events)
            if kind == SUBMITTED:
                self.push(self.hub.serve(now, self.half), ARRIVED, task)
            elif kind == ARRIVED:
                self.arrive(now, task)
            elif kind == ENDED:
                self.end(now, task, thread)
            else:
                self.under_way -= 1
                self.send(now)
                if self.sent == self.tasks and steady is None:
                    steady = now, self.hub.worked(now), self.study.worked(now), self.work_done(now)
        if steady is None:
            steady = now, self.hub.worked(now), self.study.worked(now), self.work_done(now)
        until, hub, study, done = steady
        return Simulated(
            self.threads, now, hub / until, study / until,
            1 - done / (self.threads * until), 1 - self.work_done(now) / (self.threads * now),
        )  # fmt: skip

    def push(self, now, kind, task=0, thread=0):
        heapq.heappush(self.events, (now, kind, task, thread))

    def send(self, now):
        """The client sends what may be under way."""
        while self.sent < self.tasks and self.under_way < self.most:
            self.push(self.study.serve(now, self.client), SUBMITTED, self.sent)
            self.sent += 1
            self.under_way += 1

    def arrive(self, now, task):
        """A task goes to the thread with the fewest."""
        thread = next(iter(next(group for group in self.by_held if group)))
        self.move(thread, 1)
        if self.held[thread] == 1:
            self.start(now, task, thread)
        else:
            self.waiting[thread].append(task)

    def start(self, now, task, thread):
        self.begun += self.lengths[task]
        self.ends[thread] = now + self.lengths[task]
        self.push(self.ends[thread], ENDED, task, thread)

    def end(self, now, task, thread):
        self.move(thread, -1)
        if self.waiting[thread]:
            self.start(now, self.waiting[thread].popleft(), thread)
        self.push(self.hub.serve(now, self.half), TOLD, task)

    def move(self, thread, by):
        del self.by_held[min(self.held[thread], MOST_HELD)][thread]
        self.held[thread] += by
        self.by_held[min(self.held[thread], MOST_HELD)][thread] = None

    def work_done(self, now):
        """Return the seconds that threads have worked until now."""
        return self.begun - sum(max(0.0, end - now) for end in self.ends)


def main(tasks: int = 10_000) -> None:
    with Measured(workers=2) as measured:
        cases = [(2_000, 2), (2_000, 8), (3_000, 64), (3_000, 1_000), (8_000, 4_000), (tasks, 64)]
        loads = [measured.run(count, in_flight=in_flight) for count, in_flight in cases]
    for load in loads:
        print(load, flush=True)
    scheduler = loads[-1].scheduler
    client = loads[-1].client
    for threads in (100, 300, 1_000, 3_000, 10_000, 20_000):
        print(simulate(threads, 1_000_000, scheduler=scheduler, client=client), flush=True)


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
