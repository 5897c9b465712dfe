"""The function a sheet claims: a zero-delay model that says what state and outputs must follow.

A cell stores one or more bits. They take their next value at the active edge of a clock, or follow it
while a gate is open; clear and preset force them at any time. None stands for an unknown level.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import product

from charflow.errors import SheetError
from charflow.plan.trial import Levels, Start, levels
from charflow.sheet import Role, Sheet
from charflow.sheet.logic import Bit, Logic, parse_logic

STATE = "state"
MOST_LEVELS = 12  # inputs and stored bits: the arcs of 12 take seconds to derive, each one more doubles that
Bits = tuple[Bit, ...]


@dataclass(frozen=True)
class Behaviour:
    """Zero-delay model of a register.

    ``control`` is the clock or gate pin; ``active_high`` tells whether its rising edge captures (clock)
    or its high level opens the cell (``transparent``). ``clears`` and ``presets`` are (pin, level at
    which it acts).
    """

    control: str
    active_high: bool
    transparent: bool
    next_state: tuple[tuple[str, Logic], ...]
    outputs: tuple[tuple[str, Logic], ...]
    inputs: tuple[str, ...]
    clears: tuple[tuple[str, bool], ...] = ()
    presets: tuple[tuple[str, bool], ...] = ()

    @property
    def data_pins(self) -> tuple[str, ...]:
        """Inputs that ``next_state`` reads, in the order of the sheet."""
        read = {name for _, logic in self.next_state for name in logic.names}
        return tuple(pin for pin in self.inputs if pin in read)

    @property
    def asynchronous_pins(self) -> tuple[str, ...]:
        """Clears and presets."""
        return tuple(pin for pin, _ in (*self.clears, *self.presets))

    @property
    def waits_at(self) -> bool:
        """The level of the control pin before the edge that captures: a clock inactive, a gate open."""
        return self.active_high if self.transparent else not self.active_high

    @property
    def unknown(self) -> Bits:
        """The state before anything is known."""
        return (None,) * len(self.next_state)

    def states(self) -> list[Bits]:
        """Return every fully known state."""
        return [tuple(bits) for bits in product((False, True), repeat=len(self.next_state))]

    def vectors(self) -> list[dict[str, bool]]:
        """Return every combination of input levels."""
        return [
            dict(zip(self.inputs, values, strict=True))
            for values in product((False, True), repeat=len(self.inputs))
        ]

    def asynchronous(self, values: Mapping[str, bool]) -> tuple[bool, bool]:
        """Return whether clear and preset act."""
        clear = any(values[pin] is level for pin, level in self.clears)
        return clear, any(values[pin] is level for pin, level in self.presets)

    def after(self, state: Bits, before: Mapping[str, bool], now: Mapping[str, bool]) -> Bits:
        """Return the state after the inputs step from ``before`` to ``now`` and everything settles."""
        clear, preset = self.asynchronous(now)
        if clear or preset:
            return (None if clear and preset else preset,) * len(state)
        active = now[self.control] is self.active_high
        if self.transparent:
            return self.captured(state, now) if active else state
        edge = active and before[self.control] != now[self.control]
        return self.captured(state, before) if edge else state

    def captured(self, state: Bits, values: Mapping[str, Bit]) -> Bits:
        """Return what an active clock edge (or an open gate) stores."""
        everything = self._with_state(state, values)
        return tuple(logic.value(everything) for _, logic in self.next_state)

    def shown(self, state: Bits, values: Mapping[str, Bit]) -> dict[str, Bit]:
        """Return the level of each output."""
        everything = self._with_state(state, values)
        return {pin: logic.value(everything) for pin, logic in self.outputs}

    def _with_state(self, state: Bits, values: Mapping[str, Bit]) -> dict[str, Bit]:
        names = (name for name, _ in self.next_state)
        return {**values, **dict(zip(names, state, strict=True))}

    def reach(self, state: Bits, rest: Mapping[str, bool]) -> Start | None:
        """Return the shortest way from an unknown state to ``state`` with the inputs at ``rest``.

        One input changes at a time, so the way holds no race. None where there is no way.
        """
        goal = (state, levels({pin: rest[pin] for pin in self.inputs}))
        return self._ways().get(goal)

    def _ways(self) -> dict[tuple[Bits, Levels], Start]:
        cached = _WAYS.get(self)
        if cached is None:
            cached = _WAYS[self] = _search(self)
        return cached


_WAYS: dict[Behaviour, dict[tuple[Bits, Levels], Start]] = {}


def _search(cell: Behaviour) -> dict[tuple[Bits, Levels], Start]:
    """Breadth-first search over (state, inputs) from every vector with the cell closed and nothing known.

    A flip-flop begins with its clock inactive: what it stores takes a clock pulse, as in a running circuit.
    A latch that is open stores without one, so its gate first moves once: else nodes that nothing drives
    would have the infinite age of an operating point.
    """
    ways: dict[tuple[Bits, Levels], Start] = {}
    queue: deque[tuple[Bits, dict[str, bool], Start]] = deque()
    for vector in cell.vectors():
        if vector[cell.control] is cell.active_high:
            continue
        other = {**vector, cell.control: not vector[cell.control]}
        state = cell.after(cell.unknown, other, vector)
        begin = (levels(other), levels(vector)) if cell.transparent else (levels(vector),)
        queue.append((state, vector, Start(begin)))
    while queue:
        state, vector, start = queue.popleft()
        key = (state, levels(vector))
        if key in ways:
            continue
        ways[key] = start
        for pin in cell.inputs:
            now = {**vector, pin: not vector[pin]}
            queue.append((cell.after(state, vector, now), now, Start((*start.vectors, levels(now)))))
    return ways


def behaviour_of(sheet: Sheet) -> Behaviour:
    """Return the function the sheet claims. Raises :class:`SheetError` where roles do not add up."""
    try:
        return _behaviour_of(sheet)
    except SheetError as error:
        raise error.at(str(sheet.path)) from None


def _behaviour_of(sheet: Sheet) -> Behaviour:
    controls = sheet.with_role(Role.CLOCK, Role.GATE)
    if len(controls) != 1:
        found = "none" if not controls else ", ".join(controls)
        raise SheetError(
            f"pins: a register has one pin of role 'clock' (edge) or 'gate' (level), found {found}",
            todo="Give the pin that makes the cell capture one of these roles.",
        )
    control = controls[0]
    transparent = sheet.pins[control].role is Role.GATE
    next_state = _next_state(sheet)
    if len(sheet.inputs) + len(next_state) > MOST_LEVELS:
        raise SheetError(
            f"pins: {len(sheet.inputs)} inputs and {len(next_state)} stored bits; "
            f"at most {MOST_LEVELS} together can be worked through",
            todo="Every combination of their levels is tried; describe a register of fewer bits.",
        )
    outputs = tuple(
        (pin, _logic(f"pins.{pin}.shows", sheet.pins[pin].shows or STATE)) for pin in sheet.outputs
    )
    states = {name for name, _ in next_state}
    for name, logic in next_state:
        _check_names(f"cell.next_state ({name})", logic, {*sheet.inputs, *states} - {control})
    for pin, logic in outputs:
        _check_names(f"pins.{pin}.shows", logic, {*sheet.inputs, *states})
    return Behaviour(
        control=control,
        active_high=sheet.pins[control].active in ("rise", "high"),
        transparent=transparent,
        next_state=next_state,
        outputs=outputs,
        inputs=sheet.inputs,
        clears=_asynchronous(sheet, Role.CLEAR),
        presets=_asynchronous(sheet, Role.PRESET),
    )


def _asynchronous(sheet: Sheet, role: Role) -> tuple[tuple[str, bool], ...]:
    return tuple((pin, sheet.pins[pin].active == "high") for pin in sheet.with_role(role))


def _logic(what: str, text: str) -> Logic:
    try:
        return parse_logic(text)
    except SheetError as error:
        raise error.at(what) from None


def _check_names(what: str, logic: Logic, known: set[str]) -> None:
    for name in logic.names:
        if name not in known:
            raise SheetError(
                f"{what}: {logic.text!r} names {name!r}, which is not one of {', '.join(sorted(known))}"
            )


def _next_state(sheet: Sheet) -> tuple[tuple[str, Logic], ...]:
    given = sheet.cell.next_state
    if given is None:
        return ((STATE, parse_logic(_default_next_state(sheet))),)
    table = {STATE: given} if isinstance(given, str) else given
    for name in table:
        if name in sheet.pins:
            raise SheetError(f"cell.next_state: the state {name!r} has the name of a pin")
    return tuple((name, _logic(f"cell.next_state ({name})", text)) for name, text in table.items())


def _default_next_state(sheet: Sheet) -> str:
    """Return what the roles alone say: data, through an enable, through a scan multiplexer."""

    def one(role: Role) -> str | None:
        pins = sheet.with_role(role)
        if len(pins) > 1:
            raise SheetError(
                f"pins: more than one pin has the role {role.value!r} ({', '.join(pins)})",
                todo='Write the function, for example next_state = "A & B".',
            )
        return pins[0] if pins else None

    data, enable = one(Role.DATA), one(Role.ENABLE)
    scan_in, scan_on = one(Role.SCAN_DATA), one(Role.SCAN_ENABLE)
    if data is None:
        raise SheetError(
            "pins: none has the role 'data'", todo="Give one that role, or write cell.next_state yourself."
        )
    text = data if enable is None else f"({enable} ? {data} : {STATE})"
    if (scan_in is None) != (scan_on is None):
        raise SheetError("pins: scan_data and scan_enable come together, only one of them is there")
    return text if scan_on is None else f"{scan_on} ? {scan_in} : {text}"
