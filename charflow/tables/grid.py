"""Rows as labelled grids: one xarray array a table, over clock slew and load or data slew."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from charflow.tables.flat import Row

if TYPE_CHECKING:
    import xarray

_DELAY = "delay of {output} {output_edge} from {related_pin} {related_edge}"
_WORDS = {
    "clk_to_q": _DELAY,
    "gate_to_q": _DELAY,
    "data_to_q": _DELAY,
    "async_to_q": _DELAY,
    "transition": "transition of {output} {output_edge} from {related_pin} {related_edge}",
    "setup": "setup of {pin} {pin_edge} before {related_pin} {related_edge}",
    "hold": "hold of {pin} {pin_edge} after {related_pin} {related_edge}",
    "recovery": "recovery of {pin} {pin_edge} before {related_pin} {related_edge}",
    "removal": "removal of {pin} {pin_edge} after {related_pin} {related_edge}",
    "pulse_width": "minimum {level} pulse of {pin}, {output} {output_edge}",
    "min_period": "minimum period of {pin}, {output} {output_edge}",
}


@dataclass(frozen=True)
class Grid:
    """One table: what it holds, and its values [ps] over the axes ``row`` and ``column``.

    An axis is named ``clock_slew``, ``data_slew`` (points in ps) or ``load`` (in fF).
    """

    title: str
    corner: str
    quantity: str
    row: str
    column: str
    rows: tuple[float, ...]
    columns: tuple[float, ...]
    cells: dict[tuple[float, float], Row]

    def at(self, row: float, column: float) -> Row | None:
        """Return the entry at a grid point, None where there is none."""
        return self.cells.get((row, column))

    def to_xarray(self) -> xarray.DataArray:
        """Return values [ps] of shape (row, column), NaN where there is no answer, units in attrs."""
        import numpy as np
        import xarray

        values = [[_number(self.at(row, column)) for column in self.columns] for row in self.rows]
        array = xarray.DataArray(
            np.array(values, dtype=float),
            dims=(self.row, self.column),
            coords={self.row: list(self.rows), self.column: list(self.columns)},
            name=self.quantity,
            attrs={"units": "ps", "long_name": self.title, "corner": self.corner},
        )
        for axis in (self.row, self.column):
            array[axis].attrs["units"] = axis_unit(axis)
        return array


def axis_unit(axis: str) -> str:
    """Return the unit of the points of an axis."""
    return "fF" if axis == "load" else "ps"


def _number(row: Row | None) -> float:
    return float("nan") if row is None or row.value_ps is None else row.value_ps


def grids_of(rows: Iterable[Row]) -> list[Grid]:
    """Return the rows as grids, in their order; a constraint measured at several loads gives one for each."""
    tables: dict[tuple[object, ...], dict[tuple[float, float], Row]] = {}
    for row in rows:
        names, points = _axes(row)
        arc = (row.corner, row.quantity, row.pin, row.pin_edge, row.related_pin, row.related_edge)
        load = row.load_ff if "load" not in names else None
        key = (*arc, row.output, row.output_edge, row.when, load)
        tables.setdefault(key, {})[points] = row
    several = {key[:-1] for key in tables if sum(other[:-1] == key[:-1] for other in tables) > 1}
    return [_grid(cells, key[:-1] in several) for key, cells in tables.items()]


def worst_of(grids: Sequence[Grid]) -> list[Grid]:
    """Return, for each constraint measured under several side conditions, the grid of its worst case.

    Worst is the largest value: the longest time data must be there. A point without an answer under any
    condition has none here.
    """
    families: dict[tuple[object, ...], list[Grid]] = {}
    for grid in grids:
        first = next(iter(grid.cells.values()))
        if first.pin and first.when:
            load = first.load_ff if "load" not in (grid.row, grid.column) else None
            key = (
                grid.corner,
                grid.quantity,
                first.pin,
                first.pin_edge,
                first.output,
                first.output_edge,
                load,
            )
            families.setdefault(key, []).append(grid)
    return [_worst(family) for family in families.values() if len(family) > 1]


def _worst(family: list[Grid]) -> Grid:
    cells: dict[tuple[float, float], Row] = {}
    for point in family[0].cells:
        rows = [grid.cells[point] for grid in family if point in grid.cells]
        holes = [row for row in rows if row.value_ps is None]
        cells[point] = holes[0] if holes else max(rows, key=lambda row: row.value_ps or 0.0)
    title = family[0].title.partition(" when ")[0]
    return replace(family[0], title=f"{title}, worst of {len(family)} side conditions", cells=cells)


def _axes(row: Row) -> tuple[tuple[str, str], tuple[float, float]]:
    """Return the axes of the table that ``row`` belongs to, and its point on them."""
    if row.clock_slew_ps is None:
        return ("data_slew", "load"), (row.data_slew_ps or 0.0, row.load_ff)
    if row.data_slew_ps is None:
        return ("clock_slew", "load"), (row.clock_slew_ps, row.load_ff)
    return ("clock_slew", "data_slew"), (row.clock_slew_ps, row.data_slew_ps)


def _grid(cells: dict[tuple[float, float], Row], name_load: bool) -> Grid:
    first = next(iter(cells.values()))
    level = "high" if first.pin_edge == "rise" else "low"
    title = _WORDS[first.quantity].format(level=level, **{name: getattr(first, name) for name in _NAMES})
    if first.when:
        title += f" when {first.when}"
    if name_load:
        title += f" at {first.load_ff:g} fF"
    (row, column), _ = _axes(first)
    return Grid(
        title=title,
        corner=first.corner,
        quantity=first.quantity,
        row=row,
        column=column,
        rows=tuple(sorted({point for point, _ in cells})),
        columns=tuple(sorted({point for _, point in cells})),
        cells=cells,
    )


_NAMES = ("pin", "pin_edge", "related_pin", "related_edge", "output", "output_edge")
