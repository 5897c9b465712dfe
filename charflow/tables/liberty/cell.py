"""One cell as a Liberty group: supplies, function, pins, timing."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from charflow.plan.behaviour import Behaviour
from charflow.sheet import Role, Sheet
from charflow.tables.flat import Row
from charflow.tables.liberty.bus import BusTypes, with_buses
from charflow.tables.liberty.expression import expression
from charflow.tables.liberty.function import (
    Names,
    gate_kind,
    is_clock_gate,
    names_of,
    output_function,
    sequential,
    state_table,
)
from charflow.tables.liberty.limits import largest_load, largest_slew
from charflow.tables.liberty.power import (
    PowerWriter,
    capacitance_items,
    input_power,
    leakage_items,
    output_power,
)
from charflow.tables.liberty.scan import scan_level, test_cell
from charflow.tables.liberty.syntax import Block, Complex, Simple
from charflow.tables.liberty.timing import Writer, constraint_groups, delay_groups, width_items

Item = Simple | Complex | Block

_NEXT_STATE_TYPE = {
    Role.DATA: "data",
    Role.ENABLE: "load",
    Role.SCAN_DATA: "scan_in",
    Role.SCAN_ENABLE: "scan_enable",
}


@dataclass(frozen=True)
class CellFacts:
    """What one run folder says of a cell at one corner."""

    name: str
    sheet: Sheet
    cell: Behaviour
    rows: tuple[Row, ...]


def cell_block(facts: CellFacts, writer: Writer, power: PowerWriter, types: BusTypes) -> Block:
    """Return the cell group."""
    sheet, cell = facts.sheet, facts.cell
    names = names_of(cell, tuple(sheet.pins))
    node = names.true[cell.next_state[0][0]]
    gating = is_clock_gate(cell)
    items: list[Item] = []
    kind = gate_kind(sheet, cell) if gating else ""
    if kind:
        items.append(Simple("clock_gating_integrated_cell", kind))
    items += _supplies(sheet)
    if kind:
        items.append(state_table(cell, node))
        internal = (Simple("direction", "internal"), Simple("internal_node", node))
        items.append(Block("pin", (node,), internal))
    else:
        items += sequential(cell, names)
    items += leakage_items(power)
    pins = [Block("pin", (pin,), tuple(_input(facts, writer, power, pin, kind))) for pin in sheet.inputs]
    pins += [
        Block("pin", (pin,), tuple(_output(facts, writer, power, names, pin, kind))) for pin in sheet.outputs
    ]
    items += with_buses(pins, types)
    if scan_level(sheet, cell) is not None:
        items.append(test_cell(sheet, cell, names))
    return Block("cell", (facts.name,), tuple(items))


def _supplies(sheet: Sheet) -> Iterator[Block]:
    for role, kind in ((Role.POWER, "primary_power"), (Role.GROUND, "primary_ground")):
        for pin in sheet.with_role(role):
            yield Block("pg_pin", (pin,), (Simple("voltage_name", pin), Simple("pg_type", kind)))


def _related_supplies(sheet: Sheet) -> Iterator[Simple]:
    """Yield the supplies of a signal pin, where there is only one of each and so no doubt."""
    for role, word in ((Role.POWER, "power"), (Role.GROUND, "ground")):
        pins = sheet.with_role(role)
        if len(pins) == 1:
            yield Simple(f"related_{word}_pin", pins[0])


def _input(facts: CellFacts, writer: Writer, power: PowerWriter, pin: str, kind: str) -> Iterator[Item]:
    sheet, cell = facts.sheet, facts.cell
    yield Simple("direction", "input")
    yield from _related_supplies(sheet)
    if pin == cell.control:
        yield Simple("clock", True)
    role = sheet.pins[pin].role
    if kind:
        word = "clock" if pin == cell.control else "test" if role is Role.SCAN_ENABLE else "enable"
        yield Simple(f"clock_gate_{word}_pin", True)
    elif not cell.transparent and pin in cell.data_pins and role in _NEXT_STATE_TYPE:
        yield Simple("nextstate_type", _NEXT_STATE_TYPE[role])
    yield from capacitance_items(power, pin)
    slew = largest_slew(cell, facts.rows, pin)
    if slew is not None:
        yield Simple("max_transition", slew)
    widths = list(width_items(writer, facts.rows, pin))
    yield from (item for item in widths if isinstance(item, Simple))
    yield from constraint_groups(writer, facts.rows, pin)
    yield from (item for item in widths if not isinstance(item, Simple))
    yield from input_power(power, pin)


def _output(
    facts: CellFacts, writer: Writer, power: PowerWriter, names: Names, pin: str, kind: str
) -> Iterator[Item]:
    yield Simple("direction", "output")
    yield from _related_supplies(facts.sheet)
    shows = dict(facts.cell.outputs)[pin]
    if kind:
        yield Simple("state_function", expression(shows, names.true))
        if facts.cell.control in shows.names:
            yield Simple("clock_gate_out_pin", True)
    else:
        yield Simple("function", output_function(facts.cell, names, pin))
    load = largest_load(facts.rows, pin)
    if load is not None:
        yield Simple("max_capacitance", load)
    yield from delay_groups(writer, facts.rows, pin)
    yield from output_power(power, pin)
