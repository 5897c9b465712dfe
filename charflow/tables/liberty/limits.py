"""How far the tables of a cell reach: the largest input slew and output load it is known to work at.

The cell works at a point where every table that has it holds a value there. A load is no larger than what
lets the output pass its edge on within the slowest slew of the tables.
"""

from __future__ import annotations

from collections.abc import Sequence

from charflow.plan.arcs import Kind
from charflow.plan.behaviour import Behaviour
from charflow.tables.flat import Row


def largest_slew(cell: Behaviour, rows: Sequence[Row], pin: str) -> float | None:
    """Return the largest slew [ps] of input ``pin`` up to which no table about it has a hole."""
    fast = pin == cell.control or pin in cell.asynchronous_pins
    points: dict[float, bool] = {}
    for row in rows:
        if pin not in (row.pin, row.related_pin):
            continue
        own = row.clock_slew_ps if fast or row.data_slew_ps is None else row.data_slew_ps
        if row.pin == pin and row.related_pin and row.data_slew_ps is not None:
            own = row.data_slew_ps  # the constrained edge
        if own is not None:
            points[own] = points.get(own, True) and row.value_ps is not None
    return _reach(points)


def largest_load(rows: Sequence[Row], output: str) -> float | None:
    """Return the largest load [fF] of ``output``: on the tables, and its transition on the slew axes."""
    ours = [row for row in rows if row.output == output and not row.pin]
    slews = [s for row in rows for s in (row.clock_slew_ps, row.data_slew_ps) if s is not None]
    points: dict[float, bool] = {}
    worst: dict[float, float] = {}
    for row in ours:
        points[row.load_ff] = points.get(row.load_ff, True) and row.value_ps is not None
        if row.quantity == Kind.TRANSITION and row.value_ps is not None:
            worst[row.load_ff] = max(worst.get(row.load_ff, 0.0), row.value_ps)
    reach = _reach(points)
    if reach is None or not slews:
        return reach
    limit = max(slews)
    before: tuple[float, float] | None = None
    for load in sorted(load for load in worst if load <= reach):
        if worst[load] > limit:
            if before is None:
                return load
            low, slow = before
            return round(low + (load - low) * (limit - slow) / (worst[load] - slow), 6)
        before = (load, worst[load])
    return reach


def _reach(points: dict[float, bool]) -> float | None:
    reach = None
    for point in sorted(points):
        if not points[point]:
            break
        reach = point
    return reach
