"""Work that leaves, event by event in plain Python: the oracle for the compiled service loop.

It shares no code with the engine and prefers what is obvious to what is fast: one heap of events, work left
in floats, settled whenever a task's speed changes, and a list of all tasks at the end. What is measured is
computed afterwards from that list alone (tests/event_measures.py), so that no counter is trusted.
"""

import heapq
import itertools
import math
from dataclasses import dataclass, field

import numpy as np

from tests.reference import WORD, arrival, pick, words

ARRIVALS, COINS, TURNS, TIMES, REQUIREMENTS, MOVES = 0, 1, 3, 5, 6, 8
BLOCK = 16_384
# The order of events at the same time.
DEPARTURE, FAILURE, REPORT, ARRIVAL = range(4)


@dataclass
class Stay:
    """A task's time on one server; steps number all beginnings and ends in the order they happened."""

    server: int
    start: float
    first_step: int
    end: float = math.inf
    last_step: float = math.inf


@dataclass(eq=False)
class Task:
    """One task: `fate` is "completed", "blocked", "lost" or "present", `ended` when that was settled."""

    number: int
    time: float
    requirement: float
    size: float
    options: list[int]
    row: int | None
    stays: list[Stay] = field(default_factory=list)
    fate: str = "present"
    ended: float | None = None
    moved: list[float] = field(default_factory=list)  # when it was requeued
    frozen: list[float] = field(default_factory=list)  # when a failure made it wait
    # Work left at the time `since`, done at `speed` from then on.
    left: float = 0.0
    since: float = 0.0
    speed: float = 0.0


@dataclass
class Record:
    """All tasks that came, and when servers were down: (server, from, to)."""

    tasks: list[Task]
    capacity: list[float]
    discipline: str
    downs: list[tuple[int, float, float]]


def serve(
    fleet,
    rule,
    *,
    times,
    requirements,
    entropy,
    replicate=0,
    key=(),
    table=None,
    discipline="fcfs",
    limits=None,
    on_full="another",
    failures=((), (), ()),
    on_failure="wait",
    information=("fresh",),
    end=math.inf,
    options=None,
    sizes=None,
):
    """Return the `Record` of everything up to `end`: departures at that time are in it, arrivals are not.

    `rule` and `table` are as in tests/reference.py; `times` (rising) and `requirements` hold one number a
    task; `limits` is the number of places on each server; `failures` three equally long lists: times,
    servers, whether the server comes back; `information` ("fresh",), ("snapshot", T) or ("dispatchers",
    count, T); `options` and `sizes`, where given, are those of each task (a trace), whose coin is then one
    raw word. The rule ("as placed", servers) puts each task where it really went.
    """
    world = World(fleet, rule, discipline, limits, on_full, on_failure, information)
    world.words = {
        stream: words(entropy, replicate, stream, key) for stream in (ARRIVALS, COINS, TURNS, MOVES)
    }
    world.table, world.trace, world.sizes = table, options, sizes
    for number, time in enumerate(times):
        world.push(time, ARRIVAL, (number, float(requirements[number])))
    for time, server, back in zip(*failures, strict=True):
        world.push(time, FAILURE, (int(server), bool(back)))
    if information[0] != "fresh":
        world.push(0.0, REPORT, 0)
    return world.run(end)


class World:
    """The state of all servers, and what happens to it."""

    def __init__(self, fleet, rule, discipline, limits, on_full, on_failure, information):
        self.fleet, self.rule, self.discipline = fleet, rule, discipline
        self.on_full, self.on_failure, self.information = on_full, on_failure, information
        self.capacity = [1.0] * fleet.size if fleet.capacity is None else [float(c) for c in fleet.capacity]
        self.limits = [math.inf] * fleet.size if limits is None else list(limits)
        self.loads = [0] * fleet.size
        self.up = [True] * fleet.size
        self.lines = [[] for _ in range(fleet.size)]  # tasks on each server, in the order they came to it
        self.versions = [0] * fleet.size
        self.dispatchers = information[1] if information[0] == "dispatchers" else 1
        # What each dispatcher sees, and the last report: the loads themselves when there is none.
        self.seen, self.reported = [self.loads] * self.dispatchers, self.loads
        self.events, self.order, self.steps = [], itertools.count(), itertools.count()
        self.tasks, self.downs = [], []

    def push(self, time, kind, what):
        heapq.heappush(self.events, (time, kind, next(self.order), what))

    def run(self, end):
        happen = {
            DEPARTURE: self.depart, FAILURE: self.fail_or_return, REPORT: self.report, ARRIVAL: self.arrive
        }  # fmt: skip
        coming = sum(kind in (ARRIVAL, FAILURE) for _, kind, _, _ in self.events)
        while self.events and self.events[0][:2] <= (end, DEPARTURE):
            time, kind, _, what = heapq.heappop(self.events)
            coming -= kind in (ARRIVAL, FAILURE)
            if kind == REPORT and not coming:
                continue  # nobody will look any more
            happen[kind](time, what)
        return Record(self.tasks, self.capacity, self.discipline, self.downs)

    # Service

    def speed(self, server, place):
        """Return the speed of the task at a place in the server's line."""
        if not self.up[server]:
            return 0.0
        if self.discipline == "sessions":
            return 1.0
        if self.discipline == "ps":
            return self.capacity[server] / len(self.lines[server])
        return self.capacity[server] if place == 0 else 0.0

    def settle(self, server, now):
        """Settle the work left of all tasks whose speed changes, and foresee the next departure."""
        line = self.lines[server]
        for place, task in enumerate(line):
            speed = self.speed(server, place)
            if speed != task.speed:
                if task.speed:
                    task.left -= task.speed * (now - task.since)
                task.speed, task.since = speed, now
        self.versions[server] += 1
        due = [(max(now, task.since + task.left / task.speed), task) for task in line if task.speed]
        if due:
            time, task = min(due, key=lambda pair: pair[0])
            if time < math.inf:
                self.push(time, DEPARTURE, (server, self.versions[server], task))

    def join(self, task, server, now):
        task.stays.append(Stay(server, now, next(self.steps)))
        task.left, task.since, task.speed = task.requirement, now, 0.0
        self.lines[server].append(task)
        self.loads[server] += task.size
        self.settle(server, now)

    def leave(self, task, now):
        stay = task.stays[-1]
        stay.end, stay.last_step = now, next(self.steps)
        self.lines[stay.server].remove(task)
        self.loads[stay.server] -= task.size
        self.settle(stay.server, now)

    def depart(self, now, what):
        server, version, task = what
        if version == self.versions[server]:
            self.leave(task, now)
            task.fate, task.ended = "completed", now

    # Reports

    def report(self, now, number):
        self.reported = self.loads.copy()
        self.seen = [self.loads.copy() for _ in range(self.dispatchers)]
        every = self.information[-1]
        self.push((number + 1) * every, REPORT, number + 1)

    # Where tasks go

    def arrive(self, now, what):
        number, requirement = what
        if self.trace is not None:
            options, row, coin = list(self.trace[number]), None, next(self.words[ARRIVALS])
        else:
            options, row, coin = arrival(self.fleet, self.words[ARRIVALS], self.table)
        size = 1 if self.sizes is None else self.sizes[number]
        turn = 0
        if self.information[0] == "dispatchers":
            turn = next(self.words[TURNS]) * self.dispatchers // WORD
        task = Task(number, now, requirement, size, options, row)
        self.tasks.append(task)
        server = self.place_for_new(options, row, coin, turn, number)
        if isinstance(server, str):
            task.fate, task.ended = server, now
            return
        self.join(task, server, now)
        if not self.up[server]:
            task.frozen.append(now)
        if self.information[0] == "dispatchers":
            self.seen[turn][server] += size

    def place_for_new(self, options, row, coin, turn, number):
        """Return the server of a new task, or the word for why it has none."""
        if self.rule[0] == "as placed":
            return self.rule[1][number]
        picked = self.first_pick(options, row, coin, self.seen[turn])
        if self.is_open(picked):
            return picked
        if self.up[picked] and self.on_full == "lost":
            return "blocked"
        server = self.second_pick(options, coin, self.seen[turn])
        if server is not None:
            return server
        if any(self.up[option] for option in options):
            return "blocked"
        if self.on_failure == "lost":
            return "lost"
        # All are down: it waits on the server picked, or on the first that has a place.
        return next((server for server in [picked, *options] if self.has_room(server)), "blocked")

    def has_room(self, server):
        return len(self.lines[server]) < self.limits[server]

    def is_open(self, server):
        return self.up[server] and self.has_room(server)

    def first_pick(self, options, row, coin, seen):
        return options[pick(self.rule, self.fleet, options, row, seen, coin, self.words[COINS])]

    def second_pick(self, options, coin, seen):
        """Return the server that the same rule picks among those open; None of none.

        Its coin is what the first pick leaves of the first one: the low half of the product.
        """
        opened = [server for server in options if self.is_open(server)]
        if len(opened) < 2:
            return opened[0] if opened else None
        rule = ("least-loaded", "random") if self.rule[0] == "static-split" else self.rule
        coin = coin * len(options) % WORD
        return opened[pick(rule, self.fleet, opened, None, seen, coin, self.words[COINS])]

    # Failures

    def fail_or_return(self, now, what):
        server, back = what
        if self.up[server] == back:
            return
        self.up[server] = back
        self.settle(server, now)
        if back:
            place = max(index for index, down in enumerate(self.downs) if down[0] == server)
            self.downs[place] = (server, self.downs[place][1], now)
            return
        self.downs.append((server, now, math.inf))
        held = sorted(self.lines[server], key=lambda task: task.number)
        if self.on_failure == "wait":
            for task in held:
                task.frozen.append(now)
            return
        if self.on_failure == "lost":
            for task in held:
                self.leave(task, now)
                task.fate, task.ended = "lost", now
            return
        # All are on their way, so that rules see a server without load, and then what stays.
        self.loads[server] = 0
        for task in held:
            self.requeue(task, now)

    def requeue(self, task, now):
        """Move a task of a server that failed to an open option, by the last report, or let it wait there."""
        if self.fleet.implicit is not None and self.trace is None:
            options, row, coin = arrival(self.fleet, self.words[MOVES], None)
        else:
            options, row, coin = task.options, task.row, next(self.words[MOVES])
        server = self.first_pick(options, row, coin, self.reported)
        if not self.is_open(server):
            server = self.second_pick(options, coin, self.reported)
        self.loads[task.stays[-1].server] += task.size
        if server is None:
            task.frozen.append(now)
            return
        self.leave(task, now)
        self.join(task, server, now)
        task.moved.append(now)


# What the streams hold


def numpy_generator(entropy, replicate, stream, key=()):
    return np.random.Generator(
        np.random.SFC64(np.random.SeedSequence(entropy, spawn_key=(*key, replicate, stream)))
    )


def arrival_times(entropy, replicate, rate, end, *, key=(), profile=None, period=None):
    """Return the times of arrivals before `end`: exponential amounts, spent at the rate of the moment.

    `profile` holds the rate of each of the equal parts of a `period` relative to `rate`, over and over.
    """
    source, times, now, part = numpy_generator(entropy, replicate, TIMES, key), [], 0.0, 0
    while True:
        amount = source.standard_exponential()
        if profile is None:
            now += amount / rate
        else:
            length = period / len(profile)
            while amount > (left := rate * profile[part % len(profile)] * ((part + 1) * length - now)):
                amount -= left
                part += 1
                now = part * length
            now += amount / (rate * profile[part % len(profile)])
        if now >= end:
            return times
        times.append(now)


def requirements_of(entropy, replicate, draw, count, *, key=()):
    """Return the requirements of `count` tasks from `draw(generator, BLOCK)`, block after block."""
    source, values = numpy_generator(entropy, replicate, REQUIREMENTS, key), []
    while len(values) < count:
        values += [float(value) for value in draw(source, BLOCK)]
    return values[:count]


# Traces


def plain_python_replay(fleet, rows, rule, *, entropy=0, replicate=0):
    """Replay a trace in one obvious loop of its own: a heap of departures and a list of loads.

    Each row is (time, options, size, duration, placed); a duration of None stays for ever. `rule` is
    ("as placed",) or one of tests/reference.py. Returns the server of each row, the loads after the last row,
    the highest load and the highest utilisation.
    """
    capacity = [1.0] * fleet.size if fleet.capacity is None else fleet.capacity
    coins, own = words(entropy, replicate, ARRIVALS), words(entropy, replicate, COINS)
    loads, leaving, picked = [0] * fleet.size, [], []
    max_load = max_utilisation = 0.0
    for number, (time, options, size, duration, placed) in enumerate(rows):
        while leaving and leaving[0][0] <= time:
            _, _, server, amount = heapq.heappop(leaving)
            loads[server] -= amount
        coin = next(coins)
        server = (
            placed if rule[0] == "as placed" else options[pick(rule, fleet, options, None, loads, coin, own)]
        )
        loads[server] += size
        picked.append(server)
        max_load = max(max_load, loads[server])
        max_utilisation = max(max_utilisation, loads[server] / capacity[server])
        if duration is not None:
            heapq.heappush(leaving, (time + duration, number, server, size))
    return {"servers": picked, "loads": loads, "max_load": max_load, "max_utilisation": max_utilisation}
