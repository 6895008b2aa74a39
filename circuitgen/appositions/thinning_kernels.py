"""Compiled sorting and thinning of hits: closest first, none near another."""

from __future__ import annotations

from circuitgen.core.compilation import kernel

_SHORT_SORT = 16


@kernel
def _after(gap, axon, target, i, j):
    """Tell whether hit i comes after hit j: by gap, then by the two segments."""
    if gap[i] != gap[j]:
        return gap[i] > gap[j]
    if axon[i] != axon[j]:
        return axon[i] > axon[j]
    return target[i] > target[j]


@kernel
def _sift(order, low, high, root, gap, axon, target):
    while True:
        child = 2 * root + 1
        if child >= high - low:
            return
        if child + 1 < high - low and _after(
            gap, axon, target, order[low + child + 1], order[low + child]
        ):
            child += 1
        if not _after(gap, axon, target, order[low + child], order[low + root]):
            return
        order[low + root], order[low + child] = order[low + child], order[low + root]
        root = child


@kernel
def sort_hits(order, low, high, gap, axon, target):
    """Sort order[low:high] closest first: insertion when short, else a heap."""
    if high - low <= _SHORT_SORT:
        for i in range(low + 1, high):
            item, j = order[i], i
            while j > low and _after(gap, axon, target, order[j - 1], item):
                order[j] = order[j - 1]
                j -= 1
            order[j] = item
        return
    for root in range((high - low) // 2 - 1, -1, -1):
        _sift(order, low, high, root, gap, axon, target)
    for last in range(high - 1, low, -1):
        order[low], order[last] = order[last], order[low]
        _sift(order, low, last, 0, gap, axon, target)


@kernel
def thin(order, low, high, place, min_spacing):
    """Keep the closest hit, drop those near it along the axon, repeat.

    Kept hits are moved to the front of order[low:high]; returns how many.
    """
    kept = low
    for i in range(low, high):
        item, clear = order[i], True
        for j in range(low, kept):
            other = order[j]
            square = 0.0
            for axis in range(3):
                square += (place[item, axis] - place[other, axis]) ** 2
            if square < min_spacing * min_spacing:
                clear = False
                break
        if clear:
            order[kept] = item
            kept += 1
    return kept - low


@kernel
def sorted_by(values, chosen, first, order):
    """Order `chosen` items by a small whole number; those of v: first[v] to first[v+1].

    Stable; `first` has one entry more than there are numbers.
    """
    first[:] = 0
    for item in chosen:
        first[values[item] + 1] += 1
    for v in range(first.size - 1):
        first[v + 1] += first[v]
    for i in range(chosen.size):
        v = values[chosen[i]]
        order[first[v]] = chosen[i]
        first[v] += 1
    for v in range(first.size - 1, 0, -1):
        first[v] = first[v - 1]
    first[0] = 0
