"""From the map of a cell's states to its function: control pin, clear and preset, next state, outputs.

Every reading of the cell (which pin is the clock or gate, at which edge or level, which pins clear or
preset) is tried. Under a reading, places joined by flips that must not change what is stored form one
stored state; the flips of the control then give the next state. A reading stands only if the zero-delay
model of the sheet, walked along every flip of the map, never contradicts an output.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from itertools import combinations, product

from charflow.errors import NetlistError
from charflow.plan.behaviour import Behaviour, Bits
from charflow.probe.explore import Map, Vector
from charflow.probe.reading import Async, Reading, stored_states
from charflow.probe.truth import Function, function_of
from charflow.sheet.logic import parse_logic

MAX_ASYNCHRONOUS = 3
_NAME = re.compile(r"[A-Za-z_][\w.$\[\]<>]*")


def infer(reached: Map) -> Function:
    """Return the function of the cell whose states are ``reached``.

    Where several readings stand, the one with the shortest expressions is returned and the control pins
    of the others are named in it. Raises :class:`NetlistError` where none stands.
    """
    for pin in (*reached.inputs, *reached.outputs):
        if not _NAME.fullmatch(pin):
            raise NetlistError(
                f"the port {pin!r} cannot be named in a logic expression",
                todo="Rename it in the netlist: a letter first, then letters, digits and _ . $ [ ] < >.",
            )
    standing: list[Function] = []
    for reading in _readings(reached):
        states = stored_states(reached, reading)
        if states is None:
            continue
        function = function_of(reached, reading, states)
        if function is not None and _agrees(reached, function):
            standing.append(function)
    if not standing:
        raise _no_reading(reached)
    best = min(standing, key=lambda function: function.cost)
    rivals = {f.control for f in standing if f.cost == best.cost} - {best.control}
    return best.beside(tuple(sorted(rivals)))


def _readings(reached: Map) -> Iterator[Reading]:
    moving = {
        (pin, reached.places[after].vector[pin])
        for number, pin, after in reached.flips()
        if reached.places[after].outputs != reached.places[number].outputs
    }
    for control in sorted({pin for pin, _ in moving}):
        others = sorted(pair for pair in moving if pair[0] != control)
        for forced in _asynchronous(reached, control, others):
            for gate, active in product((False, True), (1, 0)):
                yield Reading(control, active, gate, forced)


def _asynchronous(reached: Map, control: int, movers: list[Async]) -> Iterator[tuple[Async, ...]]:
    """Yield the sets of (pin, level) that could clear and preset: acting alone, each fixes the outputs."""
    for size in range(min(MAX_ASYNCHRONOUS, len(movers)) + 1):
        for chosen in combinations(movers, size):
            if len({pin for pin, _ in chosen}) == size and _each_fixes(reached, control, chosen):
                yield chosen


def _each_fixes(reached: Map, control: int, chosen: tuple[Async, ...]) -> bool:
    seen: dict[tuple[Async, int], Vector] = {}
    for place in reached.places:
        acting = [pair for pair in chosen if place.vector[pair[0]] == pair[1]]
        if len(acting) == 1:
            key = (acting[0], place.vector[control])
            if seen.setdefault(key, place.outputs) != place.outputs:
                return False
    return True


def behaviour(function: Function) -> Behaviour:
    """Return the zero-delay model of ``function``."""
    return Behaviour(
        control=function.control,
        active_high=function.active_high,
        transparent=function.gate,
        next_state=tuple((state, parse_logic(text)) for state, text in function.next_state),
        outputs=tuple((pin, parse_logic(text)) for pin, text in function.shows),
        inputs=function.inputs,
        clears=function.clears,
        presets=function.presets,
    )


def _agrees(reached: Map, function: Function) -> bool:
    """Walk the model along every flip of the map; it must never show something else, nor stay blind."""
    cell = behaviour(function)
    levels = [
        {pin: bool(level) for pin, level in zip(cell.inputs, place.vector, strict=True)}
        for place in reached.places
    ]
    waiting: list[tuple[int, Bits]] = [
        (number, cell.after(cell.unknown, values, values)) for number, values in enumerate(levels)
    ]
    seen = set(waiting)
    while waiting:
        number, state = waiting.pop()
        place = reached.places[number]
        shown = cell.shown(state, levels[number])
        for pin, level in zip(reached.outputs, place.outputs, strict=True):
            if shown[pin] is not None and shown[pin] != bool(level):
                return False
        for after in place.next:
            if after >= 0:
                step = (after, cell.after(state, levels[number], levels[after]))
                if step not in seen:
                    seen.add(step)
                    waiting.append(step)
    known = {state for _, state in seen if None not in state}
    return len(known) >= function.stored


def _no_reading(reached: Map) -> NetlistError:
    by_vector: dict[Vector, set[Vector]] = {}
    for place in reached.places:
        by_vector.setdefault(place.vector, set()).add(place.outputs)
    if all(len(outputs) == 1 for outputs in by_vector.values()):
        return NetlistError(
            "the cell stores nothing: its outputs follow from its inputs alone",
            todo="charflow characterizes registers: flip-flops, latches and clock gates.",
        )
    moving = {
        reached.inputs[pin]
        for number, pin, after in reached.flips()
        if reached.places[after].outputs != reached.places[number].outputs
    }
    return NetlistError(
        "the cell stores something, but not as a register with one clock or gate pin, with or without "
        f"clear and preset; its outputs can be moved by {', '.join(sorted(moving))}",
        todo="A sheet describes cells with one clock or gate only.",
    )
