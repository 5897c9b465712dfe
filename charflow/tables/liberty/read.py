"""A Liberty file of anybody's as rows in charflow's terms, to compare with: ps, fF, edges of each pin.

Delays, transitions, setup, hold, recovery, removal, pulse widths and periods; other groups are passed over.
A transition time of the file times its ``slew_derate_from_library`` is the time between its thresholds.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from itertools import product
from pathlib import Path

from charflow.errors import InputError, SheetError
from charflow.plan.arcs import Kind
from charflow.tables.flat import COLUMNS, Row
from charflow.tables.liberty.bus import pin_blocks
from charflow.tables.liberty.check import floats
from charflow.tables.liberty.expression import side_levels
from charflow.tables.liberty.parse import parse_library
from charflow.tables.liberty.syntax import Block
from charflow.tables.liberty.timing import pins_of

_TIME = {"ps": 1.0, "ns": 1e3, "us": 1e6, "fs": 1e-3}
_LOAD = {"ff": 1.0, "pf": 1e3}
_CONSTRAINT = re.compile(r"(setup|hold|recovery|removal)_(rising|falling)")
_EDGE = {"rising": "rise", "falling": "fall"}
_OTHER = {"rise": "fall", "fall": "rise"}
_WIDTHS = {"min_pulse_width": Kind.PULSE_WIDTH, "minimum_period": Kind.MIN_PERIOD}
_SLEWS = {
    "related_pin_transition": "clock",
    "input_net_transition": "input",
    "constrained_pin_transition": "data",
    "input_transition_time": "input",
}
_LOADS = {"total_output_net_capacitance", "related_out_total_output_net_capacitance"}


@dataclass(frozen=True)
class _Units:
    """Factors from the file's numbers to ps and fF, and from its slews to times between thresholds."""

    time: float
    load: float
    derate: float


@dataclass(frozen=True)
class _Place:
    """Where in the file a table stands: library, corner, cell and pin."""

    templates: dict[str, Block]
    units: _Units
    corner: str
    cell: Block
    pin: Block

    @property
    def level_sensitive(self) -> bool:
        """Whether the cell is a latch or a gate of clocks."""
        gated = self.cell.text("clock_gating_integrated_cell")
        return bool(gated) or any(self.cell.blocks("latch", "latch_bank"))

    def is_clock(self, pin: str) -> bool:
        """Tell whether ``pin`` is the cell's clock or gate."""
        block = next((b for b in pin_blocks(self.cell) if b.argument == pin), None)
        return block is not None and True in (block.simple("clock"), block.simple("clock_gate_clock_pin"))


def rows_from_liberty(path: Path, cell: str | None = None, corner: str | None = None) -> tuple[Row, ...]:
    """Return the rows of one cell of the Liberty file ``path``.

    ``cell`` may stay open where the file has one only. ``corner`` names the rows' corner, else the
    default operating conditions do. Constraints carry no load there, so their load is 0. Raises
    :class:`InputError` where the file, or what it says, cannot be understood.
    """
    library = parse_library(path, cell)
    try:
        block = _cell(library, cell)
        name = corner or library.text("default_operating_conditions") or library.argument
        templates = {b.argument: b for b in library.blocks("lu_table_template")}
        units = _units(library)
        found: list[Row] = []
        for pin in pin_blocks(block):
            place = _Place(templates, units, name, block, pin)
            for group in pin.blocks("timing"):
                found += _rows(place, group)
    except (InputError, SheetError) as error:
        raise InputError(error.message, where=(*error.where, str(path)), todo=error.todo) from None
    return tuple(found)


def _cell(library: Block, name: str | None) -> Block:
    cells = {block.argument: block for block in library.blocks("cell")}
    if name is None and len(cells) == 1:
        return next(iter(cells.values()))
    if name is None:
        shown = ", ".join(list(cells)[:8]) + (", ..." if len(cells) > 8 else "")
        found = f"{len(cells)} cells ({shown}): say which one" if cells else "no cell"
        raise InputError(f"the library has {found}")
    if name not in cells:
        raise InputError(f"the library has no cell {name!r}")
    return cells[name]


def _units(library: Block) -> _Units:
    match = re.fullmatch(r"([\d.]+)\s*([a-z]+)", library.text("time_unit").lower())
    load = library.complex("capacitive_load_unit")
    if match is None or match[2] not in _TIME:
        raise InputError(f"time_unit is {library.text('time_unit')!r}, expected such as 1ns")
    if load is None or len(load) != 2 or str(load[1]).lower() not in _LOAD:
        raise InputError(f"capacitive_load_unit is {load!r}, expected such as (1, pf)")
    derate = library.simple("slew_derate_from_library")
    return _Units(
        float(match[1]) * _TIME[match[2]],
        float(load[0]) * _LOAD[str(load[1]).lower()],
        float(derate) if derate is not None else 1.0,
    )


def _rows(place: _Place, group: Block) -> Iterator[Row]:
    kind = group.text("timing_type") or "combinational"
    for related in group.text("related_pin").split():
        for table in group.blocks():
            quantity, _, word = table.name.partition("_")
            match = _CONSTRAINT.fullmatch(kind)
            if match and table.name.endswith("_constraint"):
                pins = (place.pin.argument, quantity, related, _EDGE[match[2]], "", "")
                yield from _points(place, group, table, match[1], pins)
            elif kind in _WIDTHS and table.name.endswith("_constraint"):
                pins = (place.pin.argument, quantity, "", "", "", "")
                yield from _points(place, group, table, _WIDTHS[kind].value, pins)
            elif table.name in ("cell_rise", "cell_fall", "rise_transition", "fall_transition"):
                edge, delay = (word, True) if quantity == "cell" else (quantity, False)
                own = _delay_kind(place, kind, related)
                wanted = own if delay else Kind.TRANSITION
                for cause in _causes(kind, group.text("timing_sense"), edge):
                    pins = ("", "", related, cause, place.pin.argument, edge)
                    yield from _points(place, group, table, wanted.value, pins, own is Kind.DATA_TO_Q)


def _causes(kind: str, sense: str, edge: str) -> tuple[str, ...]:
    """Return the edges of the related pin that a delay to output ``edge`` can count from."""
    if kind in ("rising_edge", "falling_edge"):
        return (_EDGE[kind.partition("_")[0]],)
    table = {"positive_unate": (edge,), "negative_unate": (_OTHER[edge],), "non_unate": ("rise", "fall")}
    return table.get(sense, ())


def _delay_kind(place: _Place, kind: str, related: str) -> Kind:
    if kind in ("clear", "preset"):
        return Kind.ASYNC_TO_Q
    if kind in ("rising_edge", "falling_edge") or place.is_clock(related):
        return Kind.GATE_TO_Q if place.level_sensitive else Kind.CLK_TO_Q
    return Kind.DATA_TO_Q


def _points(
    place: _Place,
    group: Block,
    table: Block,
    quantity: str,
    pins: tuple[str, str, str, str, str, str],
    by_data: bool = False,
) -> Iterator[Row]:
    pin, pin_edge, related, related_edge, output, output_edge = pins
    template = place.templates.get(table.argument)
    axes: list[tuple[str, list[float]]] = []
    for i in (1, 2, 3):
        points = table.complex(f"index_{i}") or (template and template.complex(f"index_{i}"))
        if points:
            variable = template.text(f"variable_{i}") if template else ""
            axes.append((variable, [v for part in points for v in floats(part)]))
    values = [v for part in table.complex("values") or () for v in floats(part)]
    at = list(product(*(axis for _, axis in axes)))
    if len(at) != len(values):
        what = f"cell {place.cell.argument}, pin {place.pin.argument}: {table.name}"
        raise InputError(f"{what} has {len(values)} values where its axes have {len(at)} points")
    units = place.units
    slow = units.derate if quantity == Kind.TRANSITION else 1.0
    for point, value in zip(at, values, strict=True):
        clock, data, load = _coordinates(place, quantity, [v for v, _ in axes], point, by_data)
        yield Row(
            corner=place.corner,
            quantity=quantity,
            pin=pin,
            pin_edge=pin_edge,
            related_pin=related,
            related_edge=related_edge,
            output=output,
            output_edge=output_edge,
            when=_condition(place, group.text("when")),
            clock_slew_ps=clock,
            data_slew_ps=data,
            load_ff=load,
            value_ps=round(value * units.time * slow, 6) + 0.0,
            bracket_ps=None,
            status="read from Liberty",
            transients=0,
            key="",
        )


def _coordinates(
    place: _Place, quantity: str, variables: list[str], point: tuple[float, ...], by_data: bool
) -> tuple[float | None, float | None, float]:
    """Return clock slew and data slew [ps] and load [fF] of a point, in the columns charflow uses."""
    clock: float | None = None
    data: float | None = None
    load = 0.0
    for variable, value in zip(variables, point, strict=True):
        slew = round(value * place.units.time * place.units.derate, 6)
        if variable in _LOADS:
            load = round(value * place.units.load, 6)
        elif variable in _SLEWS:
            of_data = _SLEWS[variable] == "data" and quantity not in _WIDTHS.values()
            clock, data = (clock, slew) if of_data or by_data else (slew, data)
        else:
            raise InputError(f"a table runs over {variable or 'something unnamed'!r}, not understood")
    return clock, data, load


def _condition(place: _Place, when: str) -> str:
    """Return a side condition as charflow writes it, its pins in the order of the cell."""
    levels = side_levels(when.replace('"', ""))
    if levels is None:
        return when
    order = [block.argument for block in pin_blocks(place.cell)]
    ranked = sorted(levels, key=lambda pin: order.index(pin) if pin in order else len(order))
    return " & ".join(pin if levels[pin] else f"!{pin}" for pin in ranked)


def as_liberty_says(rows: Iterable[Row], constraint_load: float) -> tuple[Row, ...]:
    """Return charflow's own ``rows`` as a Liberty file can say them, to hold them against one.

    Constraints are those at ``constraint_load`` [fF] and lose the load; a pulse width loses the output it
    was seen at, a constraint what the other bits do, and of rows that then coincide the largest stays,
    or one without a value.
    """
    kept: dict[tuple[object, ...], Row] = {}
    for row in rows:
        said = row
        if row.pin:
            if row.load_ff != constraint_load:
                continue
            said = replace(row, load_ff=0.0, output="", output_edge="", when=pins_of(row.when))
        key = tuple(getattr(said, name) for name in _IDENTITY)
        before = kept.get(key)
        if before is None or _worse(said, before):
            kept[key] = said
    return tuple(kept.values())


_IDENTITY = COLUMNS[: COLUMNS.index("value_ps")]


def _worse(row: Row, other: Row) -> bool:
    if row.value_ps is None or other.value_ps is None:
        return other.value_ps is not None
    return row.value_ps > other.value_ps
