"""A heap of numbered items whose keys may change: the largest key stands first.

`heap` holds the items, `place` where each item stands in it, `key` the key of each item.
"""

from labkit.compiled import compiled


@compiled
def rise(heap, place, key, item):
    """Restore the order after the key of `item` went up."""
    here = place[item]
    while here > 0:
        above = (here - 1) // 2
        other = heap[above]
        if key[other] >= key[item]:
            break
        heap[here] = other
        place[other] = here
        here = above
    heap[here] = item
    place[item] = here


@compiled
def sink(heap, place, key, item, count):
    """Restore the order among `count` items after the key of `item` went down."""
    here = place[item]
    while 2 * here + 1 < count:
        below = 2 * here + 1
        if below + 1 < count and key[heap[below + 1]] > key[heap[below]]:
            below += 1
        other = heap[below]
        if key[other] <= key[item]:
            break
        heap[here] = other
        place[other] = here
        here = below
    heap[here] = item
    place[item] = here


@compiled
def take_first(heap, place, key, count):
    """Remove and return the item with the largest key; `count` - 1 items remain."""
    first = heap[0]
    last = heap[count - 1]
    if last != first:
        heap[0] = last
        place[last] = 0
        sink(heap, place, key, last, count - 1)
    return first
