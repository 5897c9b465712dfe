"""What readers of Liberty let pass and should not: a library is checked here before it is written.

The rules are those of the Liberty User Guides (Liberty Technical Advisory Board, IEEE-ISTO) that decide
what a number means: units, thresholds, axes, which pin and edge a table is about.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from itertools import pairwise

from charflow.errors import SheetError
from charflow.sheet.logic import parse_logic
from charflow.tables.liberty.bus import pin_blocks
from charflow.tables.liberty.syntax import Block, Complex, Simple, Value

_UNITS = ("time_unit", "voltage_unit", "current_unit", "pulling_resistance_unit", "leakage_power_unit")
_THRESHOLDS = tuple(
    f"{stem}_{edge}"
    for stem in (
        "input_threshold_pct",
        "output_threshold_pct",
        "slew_lower_threshold_pct",
        "slew_upper_threshold_pct",
    )
    for edge in ("rise", "fall")
)
_NEEDS_SENSE = {"clear", "preset", "combinational", "combinational_rise", "combinational_fall"}
_LOGIC = (
    *("function", "state_function", "when"),
    *("next_state", "clocked_on", "data_in", "enable", "clear", "preset"),
)
_DELAYS = ("cell_rise", "cell_fall", "rise_transition", "fall_transition")
_CONSTRAINTS = ("rise_constraint", "fall_constraint")
_POWERS = ("rise_power", "fall_power", "power")
_TABLES = (*_DELAYS, *_CONSTRAINTS, *_POWERS)


def liberty_check(library: Block) -> tuple[str, ...]:
    """Return what is wrong with ``library``, a sentence each; empty where nothing is."""
    return tuple(dict.fromkeys([*_header(library), *_numbers(library, ""), *_cells(library)]))


def _header(library: Block) -> Iterator[str]:
    for name in (*_UNITS, *_THRESHOLDS, "delay_model", "nom_voltage", "nom_temperature", "nom_process"):
        if library.simple(name) is None:
            yield f"the library has no {name}"
    if library.complex("capacitive_load_unit") is None:
        yield "the library has no capacitive_load_unit"
    conditions = {block.argument for block in library.blocks("operating_conditions")}
    if library.text("default_operating_conditions") not in conditions:
        yield "the library has no operating_conditions group that is the default"
    if not any(isinstance(item, Complex) and item.name == "voltage_map" for item in library.items):
        yield "the library has no voltage_map"


def _numbers(block: Block, place: str) -> Iterator[str]:
    """Yield every number that is none, in attributes and in tables."""
    here = f"{place} {block.name} {block.argument}".strip()
    for item in block.items:
        if isinstance(item, Block):
            yield from _numbers(item, here)
            continue
        values = item.values if isinstance(item, Complex) else (item.value,)
        table = item.name == "values" or item.name.startswith("index_")
        for value in values:
            numbers = floats(value) if table or not isinstance(value, str) else []
            if not all(map(math.isfinite, numbers)):
                yield f"{here}: {item.name} holds something that is no finite number"


def floats(value: Value) -> list[float]:
    """Return the numbers in an attribute value; what is no number comes as NaN."""
    if not isinstance(value, str):
        return [float(value)]
    found = []
    for word in re.split(r"[,\s]+", value.strip()):
        try:
            found.append(float(word))
        except ValueError:
            found.append(math.nan)
    return found


def _cells(library: Block) -> Iterator[str]:
    voltages = {str(i.values[0]) for i in library.items if isinstance(i, Complex) and i.name == "voltage_map"}
    templates = {block.argument: block for block in library.blocks("lu_table_template", "power_lut_template")}
    names = [block.argument for block in library.blocks("cell")]
    yield from (f"the cell {name} is there twice" for name in set(names) if names.count(name) > 1)
    for cell in library.blocks("cell"):
        place = f"cell {cell.argument}"
        for problem in (*_cell(cell, voltages), *_tables(cell, templates)):
            yield f"{place}: {problem}"


def _cell(cell: Block, voltages: set[str]) -> Iterator[str]:
    pins = [block.argument for block in (*pin_blocks(cell), *cell.blocks("pg_pin"))]
    yield from (f"the pin {name} is there twice" for name in set(pins) if pins.count(name) > 1)
    for pin in cell.blocks("pg_pin"):
        if pin.text("voltage_name") not in voltages:
            yield f"pg_pin {pin.argument}: voltage_map does not have {pin.text('voltage_name')!r}"
    known = {*pins, *(name for block in cell.blocks("ff", "latch") for name in block.arguments)}
    for block in cell.blocks("ff", "latch"):
        if block.text("clear") and block.text("preset"):
            for name in ("clear_preset_var1", "clear_preset_var2"):
                if not block.text(name):
                    yield f"{block.name} has clear and preset but no {name}"
    yield from _expressions(cell, known)
    for pin in pin_blocks(cell):
        if not pin.text("direction"):
            yield f"pin {pin.argument} has no direction"
        for group in pin.blocks("timing"):
            for problem in _timing(group, set(pins)):
                yield f"pin {pin.argument}: {problem}"


def _expressions(block: Block, known: set[str]) -> Iterator[str]:
    for item in block.items:
        if isinstance(item, Block) and item.name != "test_cell":
            yield from _expressions(item, known)
        elif isinstance(item, Simple) and item.name in _LOGIC and isinstance(item.value, str):
            try:
                names = parse_logic(item.value.replace('"', "")).names
            except SheetError as error:
                yield f"{item.name} cannot be read: {error.message.splitlines()[0]}"
                continue
            for name in names:
                if name not in known:
                    yield f"{item.name} names {name!r}, which is no pin and no variable of the cell"


def _timing(group: Block, pins: set[str]) -> Iterator[str]:
    kind, related = group.text("timing_type"), group.text("related_pin")
    what = f"timing {kind or 'without a type'}"
    if not related:
        yield f"{what} has no related_pin"
    for pin in related.split():
        if pin not in pins:
            yield f"{what} names the related pin {pin!r}, which the cell does not have"
    tables = {block.name for block in group.blocks()}
    if not tables:
        yield f"{what} has no table"
    if kind in _NEEDS_SENSE and not group.text("timing_sense"):
        yield f"{what} has no timing_sense"
    if group.text("when") and not group.text("sdf_cond"):
        yield f"{what} has when but no sdf_cond"
    for edge in ("rise", "fall"):
        if (f"cell_{edge}" in tables) != (f"{edge}_transition" in tables):
            yield f"{what} has only one of cell_{edge} and {edge}_transition"


def _tables(block: Block, templates: dict[str, Block]) -> Iterator[str]:
    for inner in block.blocks():
        if inner.name in _TABLES:
            yield from (f"{block.name} {inner.name}: {problem}" for problem in _table(inner, templates))
        else:
            yield from _tables(inner, templates)


def _table(table: Block, templates: dict[str, Block]) -> Iterator[str]:
    if table.argument != "scalar" and table.argument not in templates:
        yield f"there is no template {table.argument!r}"
        return
    template = templates.get(table.argument)
    size = 1
    for index in ("index_1", "index_2", "index_3"):
        points = table.complex(index) or (template.complex(index) if template else None)
        if points is None:
            continue
        axis = [number for part in points for number in floats(part)]
        size *= len(axis)
        if any(after <= before for before, after in pairwise(axis)):
            yield f"{index} does not increase"
    count = sum(len(floats(part)) for part in table.complex("values") or ())
    if count != size:
        yield f"{count} values where the axes have {size} points"
    values = [number for part in table.complex("values") or () for number in floats(part)]
    if table.name.endswith("_transition") and any(value <= 0 for value in values):
        yield "a transition time is not greater than zero"
