"""Grids for people: Markdown for files, rich tables for the terminal."""

from __future__ import annotations

import html
import re
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from charflow.errors import visible
from charflow.tables.certificate import to_markdown as certificate_lines
from charflow.tables.flat import Row
from charflow.tables.grid import Grid, axis_unit, grids_of, worst_of

if TYPE_CHECKING:
    from rich.console import Console

CAUTION = (
    "These tables are only as good as the transistor models and the netlist they were measured on. "
    "Sign-off belongs to the foundry's qualified flow and the responsible engineer."
)


def value_text(row: Row | None) -> str:
    """Return a cell's value in ps to two decimals, or a dash."""
    return "-" if row is None or row.value_ps is None else f"{row.value_ps:.2f}"


def _heading(grid: Grid, column: float) -> str:
    return f"{column:g} {axis_unit(grid.column)}"


def _corner_cell(grid: Grid) -> str:
    words = {"load": "output load", "clock_slew": "input slew", "data_slew": "data slew"}
    down = "clock slew" if grid.column == "data_slew" else words[grid.row]
    return f"{down} \\ {words[grid.column]}"


def to_markdown(
    cell: str, conditions: Sequence[str], rows: Sequence[Row], facts: Mapping[str, Any] | None = None
) -> str:
    """Return a document with a table a grid; ``conditions`` are lines about corners and definitions.

    ``facts`` are those of the tables: with a certificate in them, it follows.
    """
    lines = [f"# {_plain(cell)}", "", *[f"- {_plain(text)}" for text in conditions], "", CAUTION, ""]
    corner = None
    for grid in _shown(rows):
        if grid.corner != corner:
            corner = grid.corner
            lines += [f"## Corner {_plain(corner)}", ""]
        lines += [f"### {_plain(grid.title[0].upper() + grid.title[1:])} [ps]", ""]
        lines.append(f"| {_corner_cell(grid)} | {' | '.join(_heading(grid, c) for c in grid.columns)} |")
        lines.append("|---:" * (len(grid.columns) + 1) + "|")
        for slew in grid.rows:
            cells = " | ".join(value_text(grid.at(slew, column)) for column in grid.columns)
            lines.append(f"| {slew:g} ps | {cells} |")
        lines.append("")
        holes = [row for row in grid.cells.values() if row.value_ps is None]
        for row in holes:
            lines.append(f"- no value at {_place(row)}: {_plain(row.status)}")
        if holes:
            lines.append("")
    lines += certificate_lines((facts or {}).get("certificate", ()), _plain)
    return "\n".join(lines)


def _shown(rows: Sequence[Row]) -> list[Grid]:
    """Return every grid and, behind the last of its family, the worst of its side conditions."""
    grids = grids_of(rows)
    worst = worst_of(grids)
    shown: list[Grid] = []
    for index, grid in enumerate(grids):
        shown.append(grid)
        for extra in worst:
            family = extra.title.partition(", worst of ")[0]
            later = any(_family(other) == (extra.corner, family) for other in grids[index + 1 :])
            if _family(grid) == (extra.corner, family) and not later:
                shown.append(extra)
    return shown


def _family(grid: Grid) -> tuple[str, str]:
    return grid.corner, grid.title.partition(" when ")[0]


def _place(row: Row) -> str:
    slews = (("clock slew", row.clock_slew_ps), ("data slew", row.data_slew_ps))
    return ", ".join(
        [f"{name} {value:g} ps" for name, value in slews if value is not None] + [f"{row.load_ff:g} fF"]
    )


def _plain(text: str) -> str:
    """Return ``text`` so that Markdown shows it as it is: no tags, links, emphasis or line of its own."""
    shown = " ".join("".join(c if c.isprintable() else " " for c in text).split())
    return html.escape(_MARKS.sub(r"\\\g<0>", shown), quote=False)


_MARKS = re.compile(r"[\\`*\[\]!|~#$]|(?<![A-Za-z0-9])_|_(?![A-Za-z0-9])")


def print_tables(console: Console, rows: Sequence[Row]) -> None:
    """Print every grid to the terminal, one table a pair of arcs."""
    from rich import box
    from rich.table import Table
    from rich.text import Text

    for grid in _shown(rows):
        table = Table(
            title=Text(visible(f"{grid.corner}: {grid.title} [ps]")),
            title_justify="left",
            box=box.SIMPLE_HEAD,
            title_style="",
        )
        table.add_column(_corner_cell(grid), justify="right")
        for column in grid.columns:
            table.add_column(_heading(grid, column), justify="right")
        for slew in grid.rows:
            table.add_row(f"{slew:g} ps", *(value_text(grid.at(slew, column)) for column in grid.columns))
        console.print(table)
    for row in rows:
        if row.value_ps is None:
            console.print(
                Text(
                    visible(f"no value: {row.quantity} {row.pin or row.output} at {row.corner}: {row.status}")
                )
            )
