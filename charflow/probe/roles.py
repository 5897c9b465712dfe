"""Roles of a cell's pins, from the shape of its function; names only where two shapes are the same.

``E ? D : state`` can only be an enable, and in ``S ? A : (E ? D : state)`` only ``A`` can be scan data.
But ``S ? A : B`` is a scan multiplexer or any other: there the names decide, or nobody does.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field

from charflow.probe.expression import Table, cofactor, names_read, table_of
from charflow.probe.truth import Function
from charflow.sheet import Role

_SCAN_ENABLE = re.compile(
    r"(?:s|sc|scan|t|test|shift)_?(?:e|en|enable|mode|m)(?:_?[nb])?\d*|test|scan|sel_?scan", re.IGNORECASE
)
_SCAN_DATA = re.compile(r"(?:s|sc|scan|t|test|sd)_?(?:d|i|in|data|di)\d*", re.IGNORECASE)


@dataclass(frozen=True)
class PinRole:
    """The role of a pin, at which edge or level it acts, and in words how that was found.

    ``sure`` is false where the words are a doubt the user must settle.
    """

    role: Role
    active: str | None
    words: str
    sure: bool = True


@dataclass
class _Shape:
    """Roles found so far by pin, with the words why; ``open`` are multiplexers that names must settle."""

    roles: dict[str, tuple[Role, str]] = field(default_factory=dict)
    open: list[tuple[str, str, str]] = field(default_factory=list)


def roles_of(function: Function) -> dict[str, PinRole]:
    """Return the role of every input of ``function``, in the order of its inputs."""
    found: dict[str, PinRole] = {function.control: _control(function)}
    for role, pairs in ((Role.CLEAR, function.clears), (Role.PRESET, function.presets)):
        for pin, level in pairs:
            stores = "zero" if role is Role.CLEAR else "one"
            words = f"{'high' if level else 'low'} stores {stores}, whatever {function.control} does"
            found[pin] = PinRole(role, "high" if level else "low", words)
    found |= _enables(function) if function.gates_clock else _data(function)
    for pin in function.inputs:
        if pin not in found:
            shows = [out for out, text in function.shows if pin in names_read(text)]
            words = f"is not stored; {', '.join(shows)} reads it" if shows else "no effect of it was seen"
            found[pin] = PinRole(Role.DATA, None, words, sure=False)
    return {pin: found[pin] for pin in function.inputs}


def _control(function: Function) -> PinRole:
    sure = not function.rivals
    doubt = "" if sure else f"; {', '.join(function.rivals)} could be called so with as much right"
    if not function.gate:
        edge = "rise" if function.active_high else "fall"
        return PinRole(Role.CLOCK, edge, f"the state changes at its {edge} only{doubt}", sure)
    level = "high" if function.active_high else "low"
    if function.gates_clock:
        shut = "low" if function.active_high else "high"
        words = f"the enable is taken in while {level} and kept while {shut}"
        return PinRole(Role.GATE, level, words + doubt, sure)
    return PinRole(Role.GATE, level, f"open while {level}: outputs follow the data{doubt}", sure)


def _enables(function: Function) -> dict[str, PinRole]:
    """Return the roles of what a clock gate stores: all enable; a test pin is told by its name alone."""
    found = {}
    for variables, _ in function.tables:
        pins = [name for name in variables if name not in function.states]
        for pin in pins:
            if len(pins) > 1 and _SCAN_ENABLE.fullmatch(pin):
                words = "a test pin by its name alone; by function one more enable"
                found[pin] = PinRole(Role.SCAN_ENABLE, None, words)
            else:
                found[pin] = PinRole(Role.ENABLE, None, "decides whether the next pulse passes")
    return found


def _data(function: Function) -> dict[str, PinRole]:
    shapes = _Shape()
    odd: list[str] = []
    for (state, _), (variables, rows) in zip(function.next_state, function.tables, strict=True):
        table = table_of(rows, len(variables))
        if not _match(shapes, table, variables, state, function.states):
            odd += [name for name in variables if name not in function.states]
    found = {pin: PinRole(role, None, words) for pin, (role, words) in shapes.roles.items()}
    for select, high, low in shapes.open:
        found |= _by_name(select, high, low, found)
    for pin in odd:
        if pin not in found:
            found[pin] = PinRole(Role.DATA, None, "one of the pins that decide what is stored")
    return found


def _by_name(select: str, high: str, low: str, found: dict[str, PinRole]) -> dict[str, PinRole]:
    """Return roles for ``select ? high : low``, of which the function does not tell the scan side."""
    known = found.get(select)
    scan = [pin for pin in (high, low) if _SCAN_DATA.fullmatch(pin)]
    if known is not None and known.role is Role.SCAN_ENABLE and not scan:
        scan = [high if "high" in known.words else low]
    if len(scan) != 1:
        words = (
            f"{select} chooses between {high} and {low}; whether that is a scan path, and which side, "
            "cannot be told from the function"
        )
        return {pin: PinRole(Role.DATA, None, words, sure=False) for pin in (select, high, low)}
    side = "high" if scan[0] == high else "low"
    data = low if side == "high" else high
    named = "which side is scan is told by the names alone"
    return {
        select: PinRole(Role.SCAN_ENABLE, None, f"stores {scan[0]} while {side}, else {data}"),
        scan[0]: PinRole(Role.SCAN_DATA, None, f"stored while {select} is {side} ({named})"),
        data: PinRole(Role.DATA, None, f"stored while {select} is {'low' if side == 'high' else 'high'}"),
    }


def _match(
    shape: _Shape, table: Table, variables: tuple[str, ...], state: str, states: tuple[str, ...]
) -> bool:
    """Add the roles that one bit's next state settles; False where it has no known shape."""
    pin = _single(table, variables)
    if pin is not None:
        if pin not in states:
            shape.roles.setdefault(pin, (Role.DATA, "is stored as it is"))
        return True
    for select, level, chosen, other, rest in _choices(table, variables, states):
        held = _single(other, rest)
        if held == state and _match(shape, chosen, rest, state, states):
            words = f"the state is kept while {'low' if level else 'high'}"
            shape.roles[select] = (Role.ENABLE, words)
            return True
    for select, level, chosen, other, rest in _choices(table, variables, states):
        taken, plain = _single(chosen, rest), _single(other, rest)
        if taken is None or taken == state:
            continue
        side = "high" if level else "low"
        if plain is not None and plain not in states and taken not in states:
            high, low = (taken, plain) if level else (plain, taken)
            shape.open.append((select, high, low))
            return True
        if (plain is None or taken in states) and _match(shape, other, rest, state, states):
            shape.roles[select] = (Role.SCAN_ENABLE, f"stores {taken} while {side}")
            if taken not in states:
                shape.roles[taken] = (Role.SCAN_DATA, f"stored while {select} is {side}")
            return True
    return False


def _choices(
    table: Table, variables: tuple[str, ...], states: tuple[str, ...]
) -> Iterator[tuple[str, int, Table, Table, tuple[str, ...]]]:
    """Yield (pin, level, the function at that level, the function at the other, variables left)."""
    for at, name in enumerate(variables):
        if name in states:
            continue
        rest = variables[:at] + variables[at + 1 :]
        low, high = (cofactor(table, at, len(variables), level) for level in (0, 1))
        yield name, 1, high, low, rest
        yield name, 0, low, high, rest


def _single(table: Table, variables: tuple[str, ...]) -> str | None:
    """Return the variable whose level the function is, if it is one."""
    for at, name in enumerate(variables):
        bit = 1 << (len(variables) - 1 - at)
        if all(value is bool(index & bit) for index, value in enumerate(table)):
            return name
    return None
