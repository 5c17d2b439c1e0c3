"""County contiguity of the United States as a choice graph, from the open polygons in bokeh-sampledata.

Source: U.S. Census Bureau, TIGER/Line (public domain). Two counties are joined when they share a border, that
is more than single points; counties without any such neighbour (islands) are left out. This gives 3,223
counties, 9,112 borders and 7 connected parts.
"""

from functools import cache

import networkx as nx
import numpy as np
import shapely
from bokeh_sampledata.us_counties import records


@cache
def _borders() -> list[tuple[str, str]]:
    counties = records()
    names = [county["fips"] for county in counties]
    shapes = np.array([county["geometry"] for county in counties])
    first, second = shapely.STRtree(shapes).query(shapes, predicate="intersects")
    once = first < second
    first, second = first[once], second[once]
    # Places 0 and 4 of the nine-intersection text: the dimension that interiors, and that borders, share.
    shared = shapely.relate(shapes[first], shapes[second])
    more_than_points = [text[0] in "12" or text[4] == "1" for text in shared]
    pairs = sorted(zip(first[more_than_points].tolist(), second[more_than_points].tolist(), strict=True))
    return [(names[one], names[other]) for one, other in pairs]


def county_graph() -> nx.Graph:
    """Return the graph; nodes are five-digit county codes as text, such as "01001"."""
    return nx.Graph(_borders())
