"""In which order the points of an axis are solved: the ends first, then the middles between solved points.

So every later point lies between two solved ones, and its first guess is an interpolation.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence


def ends_then_middles(count: int, *, last_first: bool) -> list[tuple[int, tuple[int, ...]]]:
    """Return (index, indices to solve before it) for an axis of ``count`` points, in solving order.

    The first one needs nothing, the second the first, every other one its two solved neighbours.
    """
    if count < 2:
        return [(0, ())] * count
    first, second = (count - 1, 0) if last_first else (0, count - 1)
    order: list[tuple[int, tuple[int, ...]]] = [(first, ()), (second, (first,))]
    gaps = [(0, count - 1)]
    while gaps:
        low, high = gaps.pop(0)
        if high - low > 1:
            middle = (low + high) // 2
            order.append((middle, (low, high)))
            gaps += [(low, middle), (middle, high)]
    return order


def between(at: float, known: Mapping[float, float]) -> float:
    """Return the value at ``at`` on the line through the two nearest known points, or the only one."""
    nearest = sorted(known, key=lambda x: abs(x - at))
    inside = enclosing(at, nearest)
    if len(inside) < 2:
        return known[nearest[0]]
    a, b = inside
    return known[a] + (known[b] - known[a]) * (at - a) / (b - a)


def enclosing(at: float, points: Sequence[float]) -> tuple[float, ...]:
    """Return the nearest points below and above ``at``; with a side empty, the two nearest of the other."""
    below = sorted((x for x in points if x <= at), reverse=True)
    above = sorted(x for x in points if x > at)
    if below and above:
        return below[0], above[0]
    return tuple((below or above)[:2])
