"""Closed forms and small exact models of queues, to compare simulations with. Service has mean 1 if not said.

Arrivals are Poisson. Unless it says otherwise, `load` is the arrival rate per server.
"""

import itertools

import networkx as nx
import numpy as np
from scipy import sparse
from scipy.sparse.linalg import spsolve


def mm1_sojourn(load):
    """Mean sojourn in M/M/1 (any text book): 1/(1 − load)."""
    return 1 / (1 - load)


def mg1_wait(arrivals, mean, second_moment):
    """Mean wait in M/G/1, first come first served: λ E[S²]/(2 (1 − λ E[S])).

    Pollaczek 1930, Khinchine 1932.
    """
    return arrivals * second_moment / (2 * (1 - arrivals * mean))


def sharing_sojourn(load, mean=1.0):
    """Mean sojourn in M/G/1 with processor sharing, for any law of this mean.

    Kleinrock 1967; Sakata, Noguchi & Oizumi 1971.
    """
    return mean / (1 - load)


def mmc_wait(arrivals, rate, servers):
    """Mean wait in M/M/c (Erlang 1917): the delay probability over c μ − λ."""
    offered = arrivals / rate
    blocked = erlang_b(offered, servers)
    delayed = blocked / (1 - offered / servers * (1 - blocked))
    return delayed / (servers * rate - arrivals)


def mmc_places(arrivals, rate, servers, places):
    """Return blocked share and mean wait of those let in, in M/M/c with so many places (any text book)."""
    served = rate * np.minimum(np.arange(1, places + 1), servers)
    shares = np.cumprod(np.append(1.0, arrivals / served))
    shares /= shares.sum()
    waiting = np.maximum(np.arange(places + 1) - servers, 0)
    return shares[-1], shares @ waiting / (arrivals * (1 - shares[-1]))


def erlang_b(offered, servers):
    """Share of sessions blocked in M/G/c/c (Erlang 1917), by B(c) = a B(c − 1)/(c + a B(c − 1))."""
    blocked = 1.0
    for count in range(1, servers + 1):
        blocked = offered * blocked / (count + offered * blocked)
    return blocked


def poisson_share(offered, tasks):
    """P(so many sessions at once) in M/G/∞, for any law of service: Poisson of the offered load."""
    return float(np.exp(-offered) * np.prod(offered / np.arange(1, tasks + 1)))


def large_fleet_sojourn(load, options):
    """Mean sojourn, least loaded of d options out of all servers, many servers: Σ λ^((dⁱ − d)/(d − 1)).

    Vvedenskaya, Dobrushin & Karpelevich 1996; Mitzenmacher 2001.
    """
    return sum(large_fleet_tail(load, options, level) for level in range(1, 4_000)) / load


def large_fleet_tail(load, options, level):
    """Share of servers with at least so many tasks, same model: λ^((dⁱ − 1)/(d − 1))."""
    if options == 1:
        return load**level
    # beyond the range of floats the share is 0 long since
    exponent = (options**level - 1) // (options - 1)
    return load**exponent if exponent < 10**6 else 0.0


def bulletin_board_sojourn(load, options, age, levels=60):
    """Mean sojourn, many servers, least loaded of d options by a board refreshed every `age`.

    Mitzenmacher 2000, "How useful is old information?" (model and equations from memory): within a phase a
    server whose board shows i is an M/M/1 queue with arrival rate load × (s_i^d − s_(i+1)^d)/p_i, s the tail
    of the board's shares p. Phases are worked through by uniformisation until the board repeats; the mean
    number of tasks over a phase gives the sojourn (Little). Fewer than `levels` tasks a server.
    """
    shares = -np.diff([large_fleet_tail(load, options, level) for level in range(levels + 1)])
    shares /= shares.sum()
    for _ in range(100 + int(1_000 / age)):
        mean, after = _phase(shares, load, options, age)
        if np.abs(after - shares).max() < 1e-12 * age:
            return mean / load
        shares = after
    raise ArithmeticError("the board does not repeat")


def _phase(shares, load, options, age):
    """Return the mean number of tasks over a phase, and the shares at its end."""
    tail = np.append(np.cumsum(shares[::-1])[::-1], 0.0) ** options
    arrivals = load * -np.diff(tail) / np.maximum(shares, 1e-300)
    speed = arrivals.max() + 1
    up, down = arrivals[:, None] / speed, 1 / speed
    joint = np.diag(shares)
    end, mean = np.zeros_like(shares), 0.0
    weight, passed = np.exp(-speed * age), 0.0
    for step in range(int(speed * age + 12 * np.sqrt(speed * age) + 20)):
        end += weight * joint.sum(axis=0)
        passed += weight
        mean += (1 - passed) / speed * (joint.sum(axis=0) @ np.arange(len(shares)))
        rise, fall = up * joint, down * joint
        rise[:, -1], fall[:, 0] = 0, 0
        joint = joint - rise - fall
        joint[:, 1:] += rise[:, :-1]
        joint[:, :-1] += fall[:, 1:]
        weight *= speed * age / (step + 1)
    return mean / age, end / end.sum()


def graph_sojourn(graph, load, most):
    """Mean sojourn under least-loaded with fair ties on a small graph, exponential service, exactly.

    Tasks arrive at rate load × servers, each to an edge drawn uniformly. The Markov chain of the numbers of
    tasks is solved with at most `most` tasks on a server (others are turned away; the error falls
    geometrically in `most`), states that a symmetry of the graph maps to each other counted as one.

    Parameters
    ----------
    graph : networkx.Graph
        Nodes 0 .. n − 1.
    load : float
        Arrivals per server and unit of time.
    most : int
        Tasks on a server at most.

    Returns
    -------
    float
        Mean number of tasks over rate of arrival (Little).
    """
    size, base = len(graph), most + 1
    states = np.array(list(itertools.product(range(base), repeat=size)))
    powers = base ** np.arange(size)
    matcher = nx.isomorphism.GraphMatcher(graph, graph)
    symmetries = [[each[node] for node in range(size)] for each in matcher.isomorphisms_iter()]

    def number(states):
        return np.min([states[:, symmetry] @ powers for symmetry in symmetries], axis=0)

    numbers, first = np.unique(number(states), return_index=True)
    states = states[first]
    origins, targets, rates = [], [], []

    def move(chosen, server, change, rate):
        after = states[chosen].copy()
        after[:, server] += change
        origins.append(np.flatnonzero(chosen))
        targets.append(np.searchsorted(numbers, number(after)))
        rates.append(np.broadcast_to(rate, len(after)))

    for server in range(size):
        move(states[:, server] > 0, server, -1, 1.0)
    each = load * size / graph.number_of_edges()
    for pair in graph.edges:
        for server, other in (pair, pair[::-1]):
            ahead, level = states[:, server] < states[:, other], states[:, server] == states[:, other]
            chosen = (ahead | level) & (states[:, server] < most)
            move(chosen, server, 1, np.where(level, each / 2, each)[chosen])
    origins, targets, rates = map(np.concatenate, (origins, targets, rates))
    count = len(states)
    flow = sparse.coo_array((rates, (targets, origins)), shape=(count, count)).tocsr()
    balance = (flow - sparse.diags_array(np.asarray(flow.sum(axis=0)).ravel())).tolil()
    balance[0] = 1.0
    law = spsolve(balance.tocsc(), np.eye(1, count).ravel())
    return float(law @ states.sum(axis=1) / (load * size))


def failing_tasks(load, failing, returning):
    """Mean number of tasks in M/M/1 whose server fails at a rate, busy or not, and returns at another.

    Work goes on where it stopped. Avi-Itzhak & Naor 1963 (from memory; agrees with the truncated chain).
    """
    both = failing + returning
    return load * (both**2 + failing) / (both * (returning - load * both))
