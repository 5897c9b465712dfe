"""What a cell does, as Liberty says it: ff and latch groups, clock gates, functions of outputs."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import product

from charflow.plan.behaviour import Behaviour
from charflow.sheet import Role, Sheet
from charflow.tables.liberty.expression import expression, literal
from charflow.tables.liberty.syntax import Block, Simple


@dataclass(frozen=True)
class Names:
    """Liberty's variables for each stored bit: what it holds, and the opposite."""

    true: dict[str, str]
    false: dict[str, str]


def names_of(cell: Behaviour, taken: tuple[str, ...]) -> Names:
    """Return variable names that no pin has: IQ and IQN, numbered where there are several bits."""
    stem = "IQ"
    while any(pin.upper().startswith(stem) for pin in taken):
        stem = "I" + stem
    bits = [name for name, _ in cell.next_state]
    marks = [""] if len(bits) == 1 else [str(i) for i in range(len(bits))]
    pairs = list(zip(bits, marks, strict=True))
    return Names({b: f"{stem}{m}" for b, m in pairs}, {b: f"{stem}N{m}" for b, m in pairs})


def is_clock_gate(cell: Behaviour) -> bool:
    """Tell whether an output follows the control pin itself: a latch that gates a clock."""
    return cell.transparent and any(cell.control in logic.names for _, logic in cell.outputs)


def plain_output(cell: Behaviour, pin: str) -> tuple[int, bool] | None:
    """Return the (bit, polarity) that output ``pin`` shows, None where it shows something else.

    With clear and preset both active it may show anything; ``clear_preset_var`` says that.
    """
    candidates = set(product(range(len(cell.next_state)), (True, False)))
    for state, vector in product(cell.states(), cell.vectors()):
        if all(cell.asynchronous(vector)):
            continue
        clear, preset = cell.asynchronous(vector)
        bits = (preset,) * len(state) if clear or preset else state
        level = cell.shown(bits, vector)[pin]
        candidates = {(bit, polarity) for bit, polarity in candidates if level is (bits[bit] is polarity)}
    return min(candidates) if candidates else None


def output_function(cell: Behaviour, names: Names, pin: str) -> str:
    """Return the function of output ``pin`` over the stored bits and the inputs."""
    plain = plain_output(cell, pin)
    if plain is not None:
        bit, polarity = plain
        table = names.true if polarity else names.false
        return table[cell.next_state[bit][0]]
    return expression(dict(cell.outputs)[pin], names.true)


def next_state_text(
    cell: Behaviour, names: Names, bit: int = 0, fixed: Mapping[str, bool] | None = None
) -> str:
    """Return what bit number ``bit`` takes next, with the inputs in ``fixed`` held."""
    return expression(cell.next_state[bit][1], names.true, fixed)


def sequential(cell: Behaviour, names: Names, fixed: Mapping[str, bool] | None = None) -> Iterator[Block]:
    """Yield an ff or latch group for each stored bit."""
    control = literal(cell.control, cell.active_high)
    for index, (bit, _) in enumerate(cell.next_state):
        data = next_state_text(cell, names, index, fixed)
        items = (
            [Simple("enable", control), Simple("data_in", data)]
            if cell.transparent
            else [Simple("clocked_on", control), Simple("next_state", data)]
        )
        items += [
            Simple(word, " | ".join(literal(pin, level) for pin, level in pins))
            for word, pins in (("clear", cell.clears), ("preset", cell.presets))
            if pins
        ]
        if cell.clears and cell.presets:
            items += [
                Simple("clear_preset_var1", _while_both(cell, index, True)),
                Simple("clear_preset_var2", _while_both(cell, index, False)),
            ]
        yield Block("latch" if cell.transparent else "ff", (names.true[bit], names.false[bit]), tuple(items))


def _while_both(cell: Behaviour, bit: int, polarity: bool) -> str:
    """Return H, L or X: what outputs showing this bit show while clear and preset both act."""
    pins = [pin for pin, _ in cell.outputs if plain_output(cell, pin) == (bit, polarity)]
    levels = {
        cell.shown(cell.unknown, vector)[pin]
        for pin in pins
        for vector in cell.vectors()
        if all(cell.asynchronous(vector))
    }
    if len(levels) != 1:
        return "X"
    return {True: "H", False: "L", None: "X"}[levels.pop()]


def gate_kind(sheet: Sheet, cell: Behaviour) -> str:
    """Return the standard's name for a clock gate, empty where it has none for this one.

    A latch open at low with an AND gives ``latch_posedge``, one open at high with an OR
    ``latch_negedge``; a scan enable before the latch adds ``_precontrol``, behind it ``_postcontrol``.
    """
    ((_, before),) = cell.next_state if len(cell.next_state) == 1 else (("", None),)
    enables, tests = sheet.with_role(Role.ENABLE, Role.DATA), sheet.with_role(Role.SCAN_ENABLE)
    gated = [(pin, logic) for pin, logic in cell.outputs if cell.control in logic.names]
    if before is None or cell.asynchronous_pins or len(gated) != 1 or len(enables) != 1 or len(tests) > 1:
        return ""
    _, logic = gated[0]
    for state, vector in product((True, False), cell.vectors()):
        levels = {**vector, cell.next_state[0][0]: state}
        if vector[cell.control] is cell.active_high and logic.value(levels) is not cell.active_high:
            return ""  # open, yet the output does not rest
        high, low = (logic.value({**levels, cell.control: level}) for level in (True, False))
        if low and not high:
            return ""  # the clock comes out upside down
    kind = "latch_negedge" if cell.active_high else "latch_posedge"
    sides = (("_precontrol", before), ("_postcontrol", logic))
    where = [word for word, read in sides for test in tests if test in read.names]
    if len(where) != len(tests):
        return ""
    return kind + "".join(where)


def state_table(cell: Behaviour, node: str) -> Block:
    """Return the statetable of a gating latch: what internal ``node`` takes for every input level."""
    inputs = (cell.control, *cell.data_pins, *cell.asynchronous_pins)
    rows = []
    for values in product((False, True), repeat=len(inputs)):
        vector = {**dict.fromkeys(cell.inputs, False), **dict(zip(inputs, values, strict=True))}
        (bit,) = cell.after(cell.unknown, vector, vector)
        unknown = "X" if all(cell.asynchronous(vector)) else "N"
        result = unknown if bit is None else "HL"[not bit]
        rows.append(f"{' '.join('LH'[v] for v in values)} : - : {result}")
    table = Simple("table", ", ".join(rows))
    return Block("statetable", (" ".join(inputs), node), (table,))
