"""Points between those of a table: where they lie, and first guesses for them.

The points form a Halton sequence (J. H. Halton, "On the efficiency of certain quasi-random sequences of
points in evaluating multi-dimensional integrals", Numerische Mathematik 2, 1960) in the logarithms of the
axes: spread evenly, the same in every run, and any number of them can follow.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from charflow.sheet import Axes
from charflow.solve.order import between
from charflow.solve.row import Hint, Question, RowResult

UNITS = {"clock_slew": 1e-12, "data_slew": 1e-12, "load": 1e-15}  # s and F of one ps and one fF


@dataclass(frozen=True)
class Place:
    """A point between the grid: clock and data slew [s] and load [F]."""

    clock_slew: float
    data_slew: float
    load: float


def radical_inverse(index: int, base: int) -> float:
    """Return the digits of ``index`` in ``base``, mirrored behind the point (van der Corput)."""
    value, scale = 0.0, 1.0
    while index:
        index, digit = divmod(index, base)
        scale /= base
        value += digit * scale
    return value


def places(axes: Axes, count: int, first: int = 1) -> tuple[Place, ...]:
    """Return members ``first`` to ``first + count - 1`` of the sequence, mapped into the axes' rectangles.

    Bases 2, 3 and 5 go along clock slew, data slew and load. Values are rounded to three digits, so that
    they can be read and typed. An axis with one point keeps it.
    """
    return tuple(
        Place(
            _along(axes, "clock_slew", radical_inverse(index, 2)),
            _along(axes, "data_slew", radical_inverse(index, 3)),
            _along(axes, "load", radical_inverse(index, 5)),
        )
        for index in range(first, first + count)
    )


def _along(axes: Axes, name: str, share: float) -> float:
    axis: tuple[float, ...] = getattr(axes, name)
    low, high = axis[0], axis[-1]
    return low if low == high else min(max(rounded(low * (high / low) ** share, UNITS[name]), low), high)


def rounded(value: float, unit: float) -> float:
    """Return ``value`` to three digits in multiples of ``unit``."""
    return float(f"{value / unit:.3g}") * unit


def columns(axes: Axes, data_slew: tuple[float, ...], load: tuple[float, ...]) -> Axes:
    """Return axes with other data slews [s] and loads [F], either of which may be none."""
    return axes.model_copy(update={"data_slew": data_slew, "load": load, "constraint_loads": ()})


def hints_at(rows: Iterable[RowResult], slew: float, data_slews: Sequence[float]) -> RowResult:
    """Return a row that was not measured: what ``rows`` lead to expect at ``slew`` and ``data_slews`` [s].

    Values and reference delays are interpolated, slope and shape of the curve taken from the nearest point.
    """
    known: dict[Question, dict[tuple[float, float], Hint]] = {}
    for row in rows:
        for (asked, data), hint in row.hints.items():
            known.setdefault(asked, {})[row.clock_slew, data] = hint
    hints = {
        (asked, data): _expected(points, slew, data) for asked, points in known.items() for data in data_slews
    }
    return RowResult(slew, (), hints)


def _expected(points: dict[tuple[float, float], Hint], slew: float, data_slew: float) -> Hint:
    def distance(point: tuple[float, float]) -> float:
        return abs(math.log(point[0] / slew)) + abs(math.log(point[1] / data_slew))

    def read(name: str) -> float:
        lines: dict[float, dict[float, float]] = {}
        for (x, data), hint in points.items():
            lines.setdefault(x, {})[data] = getattr(hint, name)
        return between(slew, {x: between(data_slew, line) for x, line in lines.items()})

    return replace(points[min(sorted(points), key=distance)], value=read("value"), delay=read("delay"))
