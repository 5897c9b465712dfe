"""A table read the way timing tools read it: linear between its points along each axis (bilinear in two).

The order of the axes does not matter. Outside the axes the outermost cell is continued, as timing tools
do; so a table should cover the range it is used in. An axis with one point says nothing about its
direction: the value is the same all along it.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import product

Point = tuple[float, ...]


@dataclass(frozen=True)
class Surface:
    """Values over ascending axes, in any units; ``values`` is keyed by point, None or absent at a hole."""

    axes: tuple[tuple[float, ...], ...]
    values: Mapping[Point, float | None]

    def __contains__(self, point: Point) -> bool:
        return point in self.values

    def at(self, point: Point) -> float | None:
        """Return the value at ``point``, one coordinate an axis; None where it leans on a hole."""
        ends = [cell(axis, x) for axis, x in zip(self.axes, point, strict=True)]
        shares = [
            0.0 if low == high else (x - low) / (high - low)
            for (low, high), x in zip(ends, point, strict=True)
        ]
        total = 0.0
        for corner in product((0, 1), repeat=len(ends)):
            weight = 1.0
            for side, share in zip(corner, shares, strict=True):
                weight *= share if side else 1 - share
            if weight:
                value = self.values.get(tuple(end[side] for end, side in zip(ends, corner, strict=True)))
                if value is None:
                    return None
                total += weight * value
        return total


def surface(values: Mapping[Point, float | None]) -> Surface:
    """Return the surface through ``values``, with the axes that occur in it, at holes (None) too."""
    axes = tuple(tuple(sorted(set(coordinates))) for coordinates in zip(*values, strict=True))
    return Surface(axes, values)


def cell(axis: tuple[float, ...], at: float) -> tuple[float, float]:
    """Return the two points of ``axis`` between which ``at`` is read; outside, the outermost two."""
    if len(axis) == 1:
        return axis[0], axis[0]
    index = min(max(bisect_right(axis, at), 1), len(axis) - 1)
    return axis[index - 1], axis[index]
