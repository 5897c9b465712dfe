"""Rows as labelled grids: one xarray array a table, over clock slew and load or data slew."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from charflow.tables.flat import Row

if TYPE_CHECKING:
    import xarray

_WORDS = {
    "clk_to_q": "delay of {output} {output_edge} from {related_pin} {related_edge}",
    "transition": "transition of {output} {output_edge} from {related_pin} {related_edge}",
    "setup": "setup of {pin} {pin_edge} before {related_pin} {related_edge}",
    "hold": "hold of {pin} {pin_edge} after {related_pin} {related_edge}",
}


@dataclass(frozen=True)
class Grid:
    """One table: what it holds, and its values [ps] over ``clock_slew`` and ``column`` (ps or fF)."""

    title: str
    corner: str
    quantity: str
    column: str
    clock_slews: tuple[float, ...]
    columns: tuple[float, ...]
    cells: dict[tuple[float, float], Row]

    def at(self, clock_slew: float, column: float) -> Row | None:
        """Return the row at a grid point, None where there is none."""
        return self.cells.get((clock_slew, column))

    def to_xarray(self) -> xarray.DataArray:
        """Return values [ps] of shape (clock_slew, column), NaN where there is no answer, units in attrs."""
        import numpy as np
        import xarray

        values = [[_number(self.at(slew, column)) for column in self.columns] for slew in self.clock_slews]
        array = xarray.DataArray(
            np.array(values, dtype=float),
            dims=("clock_slew", self.column),
            coords={"clock_slew": list(self.clock_slews), self.column: list(self.columns)},
            name=self.quantity,
            attrs={"units": "ps", "long_name": self.title, "corner": self.corner},
        )
        array["clock_slew"].attrs["units"] = "ps"
        array[self.column].attrs["units"] = "fF" if self.column == "load" else "ps"
        return array


def _number(row: Row | None) -> float:
    return float("nan") if row is None or row.value_ps is None else row.value_ps


def grids_of(rows: Iterable[Row]) -> list[Grid]:
    """Return the rows as grids, in their order."""
    tables: dict[tuple[str, ...], dict[tuple[float, float], Row]] = {}
    for row in rows:
        arc = (row.corner, row.quantity, row.pin, row.pin_edge, row.related_pin, row.related_edge)
        key = (*arc, row.output, row.output_edge, row.when)
        column = row.load_ff if row.data_slew_ps is None else row.data_slew_ps
        tables.setdefault(key, {})[row.clock_slew_ps, column] = row
    return [_grid(cells) for cells in tables.values()]


def _grid(cells: dict[tuple[float, float], Row]) -> Grid:
    first = next(iter(cells.values()))
    title = _WORDS[first.quantity].format(**{name: getattr(first, name) for name in _NAMES})
    if first.when:
        title += f" when {first.when}"
    return Grid(
        title=title,
        corner=first.corner,
        quantity=first.quantity,
        column="load" if first.data_slew_ps is None else "data_slew",
        clock_slews=tuple(sorted({slew for slew, _ in cells})),
        columns=tuple(sorted({column for _, column in cells})),
        cells=cells,
    )


_NAMES = ("pin", "pin_edge", "related_pin", "related_edge", "output", "output_edge")
