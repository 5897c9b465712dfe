"""Where one more axis point helps a table most.

The error of a straight line between two points is the second divided difference of the curve times the
distances to both (Newton's form of the remainder), so the table itself tells along which axis it bends.
The new point goes to where the chord of a logarithm is furthest from it, the logarithmic mean of the two
ends: timing tables bend most at the small end of an axis, and for a narrow interval it is the middle.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

from charflow.sheet import Axes
from charflow.solve.between import UNITS, rounded
from charflow.solve.certificate import Check, Table, coordinates, point_of, table_of
from charflow.solve.interpolate import Surface, cell

CLOSEST = 1.05  # ratio to both neighbours below which a further point cannot help


@dataclass(frozen=True)
class Insertion:
    """A new point of an axis: its name in the sheet, and the value [s or F]."""

    axis: str
    value: float

    def into(self, axes: Axes) -> Axes:
        """Return ``axes`` with this point."""
        return axes.model_copy(update={self.axis: tuple(sorted({*getattr(axes, self.axis), self.value}))})


def insertion(
    axes: Axes, tables: dict[Table, Surface], checks: Iterable[Check], limit: float
) -> Insertion | None:
    """Return the axis point that helps most against the worst check beyond ``limit`` (a fraction).

    None where no check is beyond it, or no room is left between the points around those that are.
    """
    beyond = [check for check in checks if check.share is not None and check.share > limit]
    for check in sorted(beyond, key=lambda check: -(check.share or 0.0)):
        found = _against(axes, tables[table_of(check.answer)], check)
        if found is not None:
            return found
    return None


def _against(axes: Axes, table: Surface, check: Check) -> Insertion | None:
    names, point = coordinates(check.answer), point_of(check.answer)
    shares: dict[str, float | None] = {}
    room: dict[str, tuple[float, float]] = {}
    for index, name in enumerate(names):
        axis, x = table.axes[index], point[index]
        if x in axis or len(axis) < 2:
            continue
        low, high = cell(axis, x)
        value = rounded((high - low) / math.log(high / low), UNITS[name])
        if low * CLOSEST < value < high / CLOSEST and value not in getattr(axes, name):
            room[name] = (value, math.log(high / low))
            shares[name] = _bend(table, point, index)
    if not room:
        return None
    known = {name: share for name, share in shares.items() if share is not None}
    unknown = [name for name in room if name not in known]
    best = max(known, key=lambda name: known[name], default=None)
    if unknown and (best is None or abs(check.error or 0.0) > 2 * known[best]):
        best = max(unknown, key=lambda name: room[name][1])
    assert best is not None
    return Insertion(best, room[best][0])


def _bend(table: Surface, point: tuple[float, ...], index: int) -> float | None:
    """Return the expected error [s] along one axis at ``point``, None where two points tell nothing."""
    axis, x = table.axes[index], point[index]
    low, high = cell(axis, x)
    at = axis.index(low)
    bends = []
    for first in (at - 1, at):
        three = axis[max(first, 0) : first + 3]
        if first < 0 or len(three) < 3:
            continue
        values = [table.at((*point[:index], place, *point[index + 1 :])) for place in three]
        if None in values:
            continue
        (x0, x1, x2), (y0, y1, y2) = three, values
        bends.append(abs(((y2 - y1) / (x2 - x1) - (y1 - y0) / (x1 - x0)) / (x2 - x0)))  # type: ignore[operator]
    return max(bends) * (x - low) * (high - x) if bends else None
