"""Compiled: a first split of the demand, fair nearby, from which the moves over longer distances start."""

import numpy as np


def thread_entries(servers, head, following):
    """Chain each server's entries: `head[v]` is its first entry, `following[entry]` the next, −1 the end.

    Parameters
    ----------
    servers : int32 array, shape (choices, width)
        Servers of each choice, −1 where absent; absent ones come last.
    head : int32 array, shape (servers,), filled
    following : int32 array, shape (choices × width,), filled
    """
    width = servers.shape[1]
    head[:] = -1
    for choice in range(servers.shape[0] - 1, -1, -1):
        for position in range(width - 1, -1, -1):
            server = servers[choice, position]
            if server >= 0:
                entry = choice * width + position
                following[entry] = head[server]
                head[server] = entry


def share_by_capacity(servers, demand, capacity, carried, load):
    """Split each demand among its options in proportion to capacity; `carried` and `load` are filled."""
    load[:] = 0.0
    carried[:] = 0.0
    for choice in range(servers.shape[0]):
        total = 0.0
        for server in servers[choice]:
            if server >= 0:
                total += capacity[server]
        for position in range(servers.shape[1]):
            server = servers[choice, position]
            if server >= 0:
                share = demand[choice] * (capacity[server] / total)
                carried[choice * servers.shape[1] + position] = share
                load[server] += share


def even_out(servers, capacity, carried, load, sweeps):
    """Let each choice in turn move work from its fullest option that carries some to its emptiest."""
    width = servers.shape[1]
    for _ in range(sweeps):
        for choice in range(servers.shape[0]):
            full = -1
            empty = -1
            highest = -np.inf
            lowest = np.inf
            for position in range(width):
                server = servers[choice, position]
                if server < 0:
                    break
                level = load[server] / capacity[server]
                if carried[choice * width + position] > 0.0 and level > highest:
                    full = position
                    highest = level
                if level < lowest:
                    empty = position
                    lowest = level
            if full < 0 or highest <= lowest:
                continue
            giver = servers[choice, full]
            taker = servers[choice, empty]
            # What makes both levels equal.
            both = capacity[giver] * (capacity[taker] / (capacity[giver] + capacity[taker]))
            amount = min((highest - lowest) * both, carried[choice * width + full])
            carried[choice * width + full] -= amount
            carried[choice * width + empty] += amount
            load[giver] -= amount
            load[taker] += amount
