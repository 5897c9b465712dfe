"""The scan side of a register: which level of the scan enable means work, and the test_cell group."""

from __future__ import annotations

from collections.abc import Iterator

from charflow.plan.behaviour import Behaviour
from charflow.sheet import Role, Sheet
from charflow.tables.liberty.expression import folded
from charflow.tables.liberty.function import Names, output_function, plain_output, sequential
from charflow.tables.liberty.syntax import Block, Simple

Tree = tuple[object, ...]


def scan_level(sheet: Sheet, cell: Behaviour) -> bool | None:
    """Return the level of the scan enable at which the cell shifts; None where it has no scan path.

    It is the level that leaves the scan input alone to decide, while the other keeps it out.
    """
    data, enable = sheet.with_role(Role.SCAN_DATA), sheet.with_role(Role.SCAN_ENABLE)
    if len(data) != 1 or len(enable) != 1 or len(cell.next_state) != 1:
        return None
    tree = cell.next_state[0][1].tree
    for level in (True, False):
        shifting = _read(folded(tree, {enable[0]: level}))
        working = _read(folded(tree, {enable[0]: not level}))
        if shifting == {data[0]} and data[0] not in working:
            return level
    return None


def _read(tree: Tree) -> set[str]:
    if tree[0] == "name":
        return {str(tree[1])}
    return {name for part in tree[1:] if isinstance(part, tuple) for name in _read(part)}


def test_cell(sheet: Sheet, cell: Behaviour, names: Names) -> Block:
    """Return the test_cell group: the register as it is without scan, and what its pins are in a chain."""
    (scan_in,), (enable,) = sheet.with_role(Role.SCAN_DATA), sheet.with_role(Role.SCAN_ENABLE)
    level = bool(scan_level(sheet, cell))
    items: list[Block] = list(sequential(cell, names, {enable: not level, scan_in: False}))
    upright = folded(cell.next_state[0][1].tree, {enable: level}) == ("name", scan_in)
    signals = {
        scan_in: "test_scan_in" if upright else "test_scan_in_inverted",
        enable: "test_scan_enable" if level else "test_scan_enable_inverted",
    }
    for pin in sheet.inputs:
        told = (Simple("signal_type", signals[pin]),) if pin in signals else ()
        items.append(Block("pin", (pin,), (Simple("direction", "input"), *told)))
    items += _outputs(sheet, cell, names)
    return Block("test_cell", (), tuple(items))


def _outputs(sheet: Sheet, cell: Behaviour, names: Names) -> Iterator[Block]:
    for pin in sheet.outputs:
        function = Simple("function", output_function(cell, names, pin))
        plain = plain_output(cell, pin)
        word = {None: None, (0, True): "test_scan_out", (0, False): "test_scan_out_inverted"}[plain]
        told = (Simple("signal_type", word),) if word else ()
        yield Block("pin", (pin,), (Simple("direction", "output"), function, *told))
