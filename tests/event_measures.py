"""What a run measures, from the list of all its tasks (tests/events.py) alone."""

import itertools
import math


def overlap(start, end, since, until):
    """Return how much of [start, end] lies in [since, until]."""
    return max(0.0, min(end, until) - max(start, since))


def quantile(values, share):
    """Return the smallest value that at least this share of the values do not exceed."""
    return sorted(values)[max(math.ceil(share * len(values)) - 1, 0)] if values else math.nan


def mean(values):
    return math.fsum(values) / len(values) if values else math.nan


def stays_on(record, server):
    return [(stay, task) for task in record.tasks for stay in task.stays if stay.server == server]


def busy_time(record, server, since, until):
    """Return a server's busy time in (since, until]: its busy periods less the times when it was down."""
    periods = []
    for stay, _ in sorted(stays_on(record, server), key=lambda pair: pair[0].start):
        if periods and stay.start <= periods[-1][1]:
            periods[-1][1] = max(periods[-1][1], stay.end)
        else:
            periods.append([stay.start, stay.end])
    downs = [(start, end) for where, start, end in record.downs if where == server]
    parts = [(max(start, since), min(end, until)) for start, end in periods if start < until and end > since]
    return math.fsum(end - start - sum(overlap(start, end, *down) for down in downs) for start, end in parts)


def levels(record, server):
    """Yield (from, to, load) of a server over all time, in the order in which things happened."""
    changes = []
    for stay, task in stays_on(record, server):
        changes += [(stay.first_step, stay.start, task.size), (stay.last_step, stay.end, -task.size)]
    before, load = -math.inf, 0
    for _, time, change in sorted(changes):
        yield before, time, load
        before, load = time, load + change
    yield before, math.inf, load


def time_at_levels(record, server, since, until):
    """Return {load: time that the server had it} within the window."""
    times = {}
    for start, end, load in levels(record, server):
        if start < until and end > since:
            times[load] = times.get(load, 0.0) + overlap(start, end, since, until)
    return times


def waiting_of(record, task):
    """Return a completed task's sojourn less what it would have taken alone on its last server."""
    speed = 1.0 if record.discipline == "sessions" else record.capacity[task.stays[-1].server]
    return task.ended - task.time - task.requirement / speed


def measures(record, since, until):
    """Return what a run measures in the window (since, until].

    At the bounds departures belong to the part before; arrivals and what failures do, to the part after.
    """
    servers, length = len(record.capacity), until - since

    def within(time):
        return since <= time < until

    came = [task for task in record.tasks if within(task.time)]
    done = [task for task in record.tasks if task.fate == "completed" and since < task.ended <= until]
    sojourns = [task.ended - task.time for task in done]
    waitings = [waiting_of(record, task) for task in done]
    tops = [max(time_at_levels(record, server, since, until)) for server in range(servers)]
    area = math.fsum(
        overlap(stay.start, stay.end, since, until) for task in record.tasks for stay in task.stays
    )
    if record.discipline == "sessions":
        work = math.fsum(
            overlap(stay.start, stay.end, since, until) * task.size
            for task in record.tasks
            for stay in task.stays
        )
    else:
        work = math.fsum(
            capacity * busy_time(record, server, since, until)
            for server, capacity in enumerate(record.capacity)
        )
    answer = {
        "arrivals": len(came),
        "completed": len(done),
        "sojourn_mean": mean(sojourns),
        "waiting_mean": mean(waitings),
        "sojourn_sum": math.fsum(sojourns),
        "waiting_sum": math.fsum(waitings),
        "area": area,
        "queue_mean": area / length / servers,
        "utilisation": work / math.fsum(record.capacity) / length,
        "max_load": max(tops),
        "max_utilisation": max(top / capacity for top, capacity in zip(tops, record.capacity, strict=True)),
        "blocked": sum(task.fate == "blocked" and within(task.ended) for task in record.tasks),
        "lost": sum(task.fate == "lost" and within(task.ended) for task in record.tasks),
        "requeued": sum(within(time) for task in record.tasks for time in task.moved),
        "waited": sum(within(time) for task in record.tasks for time in task.frozen),
    }
    for name, values in (("sojourn", sojourns), ("waiting", waitings)):
        answer |= {f"{name}_p{share}": quantile(values, share / 100) for share in (50, 90, 99)}
    answer["blocked_share"] = answer["blocked"] / len(came) if came else math.nan
    return answer


def measures_by_interval(record, since, until, count):
    """Return the measures of each of `count` equal parts of the window."""
    bounds = [since + (until - since) * part / count for part in range(count)] + [until]
    return [measures(record, *pair) for pair in itertools.pairwise(bounds)]
