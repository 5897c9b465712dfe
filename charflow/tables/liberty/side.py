"""The two sides of a comparison where either may be a Liberty file."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from charflow.errors import InputError
from charflow.tables.liberty.read import as_liberty_says, rows_from_liberty
from charflow.tables.sides import Side, read_side


def read_sides(old: Path, new: Path) -> tuple[Side, Side]:
    """Return both sides; where one is a ``.lib`` file, the other is put into the terms of Liberty.

    From the file the cell of the other side is taken, and its values are held against every corner that
    side has. Raises :class:`InputError` where a side cannot be read.
    """
    if not (_is_liberty(old) or _is_liberty(new)):
        return read_side(old), read_side(new)
    if _is_liberty(old) and _is_liberty(new):
        return _side(old, None, ()), _side(new, None, ())
    if _is_liberty(new):
        ours = read_side(old)
        return _reduced(ours), _side(new, ours.cell, _corners(ours))
    ours = read_side(new)
    return _side(old, ours.cell, _corners(ours)), _reduced(ours)


def _is_liberty(path: Path) -> bool:
    return path.suffix.lower() == ".lib"


def _corners(side: Side) -> tuple[str, ...]:
    return tuple(dict.fromkeys(row.corner for row in side.rows))


def _side(path: Path, cell: str | None, corners: tuple[str, ...]) -> Side:
    rows = rows_from_liberty(path, cell or None)
    if corners:
        rows = tuple(replace(row, corner=corner) for corner in corners for row in rows)
    return Side(str(path), rows, cell or "")


def _reduced(side: Side) -> Side:
    loads = {row.load_ff for row in side.rows if row.quantity in ("setup", "hold")}
    load = side.facts.get("constraint_load_ff")
    if load is None:
        if len(loads) > 1:
            raise InputError(
                "setup and hold at several loads cannot be held against a Liberty file",
                where=(side.name,),
                todo="Name the run folder, which says which load counts.",
            )
        load = loads.pop() if loads else 0.0
    return replace(side, rows=as_liberty_says(side.rows, round(float(load), 6)))
