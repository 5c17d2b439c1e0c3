"""Sets of numbered items that are united step by step; a set is known by its first item, its root."""

from labkit.compiled import compiled


@compiled
def find(parent, item):
    """Return the root of the item's set, and halve the way to it."""
    while parent[item] != item:
        parent[item] = parent[parent[item]]
        item = parent[item]
    return item


@compiled
def join(parent, one, other):
    """Unite the sets of two items; return 1 when they were apart, else 0."""
    one, other = find(parent, one), find(parent, other)
    if one == other:
        return 0
    parent[max(one, other)] = min(one, other)
    return 1


def number_sets(parent, count, number):
    """Write the number of each item's set, in order of first items, and return how many sets there are."""
    sets = 0
    for item in range(count):
        root = find(parent, item)
        if root == item:
            number[item] = sets
            sets += 1
        else:
            number[item] = number[root]
    return sets
