"""Stored states written as bits, and next state and outputs written as expressions over pins and bits."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import combinations, count

from charflow.plan.behaviour import STATE
from charflow.probe.explore import Map, Vector
from charflow.probe.expression import express, names_read, support, table_of
from charflow.probe.reading import Reading, Rows, Stored

MAX_VARIABLES = 9  # of one expression; a longer one nobody would read


@dataclass(frozen=True)
class Function:
    """What a cell does. ``clears`` and ``presets`` are (pin, level at which it acts).

    ``control`` captures at its edge to high (``active_high``) or low; with ``gate`` the cell is open at
    that level. ``tables`` holds the next state of each bit as (variables, rows) beside its expression.
    ``rivals`` are pins that could be called the control just as well.
    """

    control: str
    active_high: bool
    gate: bool
    inputs: tuple[str, ...]
    clears: tuple[tuple[str, bool], ...]
    presets: tuple[tuple[str, bool], ...]
    next_state: tuple[tuple[str, str], ...]
    shows: tuple[tuple[str, str], ...]
    tables: tuple[tuple[tuple[str, ...], Rows], ...]
    stored: int
    rivals: tuple[str, ...] = ()

    @property
    def states(self) -> tuple[str, ...]:
        """Names of the stored bits."""
        return tuple(state for state, _ in self.next_state)

    @property
    def gates_clock(self) -> bool:
        """Whether an output reads the control pin, as that of a clock gate does."""
        return any(self.control in names_read(text) for _, text in self.shows)

    @property
    def cost(self) -> tuple[int, int]:
        """How far from a plain description: a clock gate is a latch, anything else as short as it can be."""
        odd = self.gates_clock and not self.gate
        texts = (*self.next_state, *self.shows)
        return int(odd), sum(len(names_read(text)) for _, text in texts)

    def beside(self, rivals: tuple[str, ...]) -> Function:
        """Return the same function with its rivals named."""
        return replace(self, rivals=rivals)


def function_of(reached: Map, reading: Reading, stored: Stored) -> Function | None:
    """Return the function under ``reading``, or None where it cannot be written as one."""
    codes = _codes(reached, stored)
    width = len(codes[0])
    taken = {pin.lower() for pin in (*reached.inputs, *reached.outputs)}
    word = next(w for w in _words() if not any(pin.startswith(w) for pin in taken))
    states = (word,) if width == 1 else tuple(f"{word}{bit}" for bit in range(width))
    forced = {pin for pin, _ in reading.forced}
    data = [pin for pin in range(len(reached.inputs)) if pin != reading.control and pin not in forced]
    codes = _upright(stored, data, codes)
    clears, presets = _forced(reached, reading, stored, codes) or (None, None)
    if clears is None or presets is None:
        return None
    names = (*(reached.inputs[pin] for pin in data), *states)
    written = [_written(rows, names) for rows in _next_rows(stored, data, codes)]
    shown = [_written(rows, (*states, *reached.inputs)) for rows in _shown_rows(reached, stored, codes)]
    if None in written or None in shown:
        return None
    bits = [found for found in written if found is not None]
    if reading.gate and all(set(variables) <= set(states) for _, variables, _ in bits):
        return None  # nothing to take in: a set and clear pair, not a latch
    return Function(
        control=reached.inputs[reading.control],
        active_high=bool(reading.active),
        gate=reading.gate,
        inputs=reached.inputs,
        clears=clears,
        presets=presets,
        next_state=tuple((s, text) for s, (text, _, _) in zip(states, bits, strict=True)),
        shows=tuple((pin, found[0]) for pin, found in zip(reached.outputs, shown, strict=True) if found),
        tables=tuple((variables, rows) for _, variables, rows in bits),
        stored=stored.count,
    )


def _words() -> Iterator[str]:
    """Yield names for the state, until one is no pin's."""
    yield from (STATE, "stored")
    yield from (f"stored_{number}_" for number in count(2))


def _codes(reached: Map, stored: Stored) -> list[Vector]:
    """Return the bits of each stored state: the fewest outputs that tell the states apart, else a count."""
    levels: list[list[set[int]]] = [[set() for _ in reached.outputs] for _ in range(stored.count)]
    for place, state in zip(reached.places, stored.at, strict=True):
        if state is not None:
            for output, level in enumerate(place.outputs):
                levels[state][output].add(level)
    steady = [
        output
        for output in range(len(reached.outputs))
        if all(len(levels[state][output]) == 1 for state in range(stored.count))
    ]
    for size in range(1, len(steady) + 1):
        for chosen in combinations(steady, size):
            codes = [tuple(min(levels[s][output]) for output in chosen) for s in range(stored.count)]
            if len(set(codes)) == stored.count:
                return codes
    width = (stored.count - 1).bit_length()
    return [tuple(state >> bit & 1 for bit in range(width)) for state in range(stored.count)]


def _upright(stored: Stored, data: list[int], codes: list[Vector]) -> list[Vector]:
    """Invert bits so that they store their data as it is: a rising pin never makes a bit fall.

    Bits that read no pin follow the bits they read.
    """
    width = len(codes[0])
    settled: set[int] = set()
    for _ in range(2):
        for bit in range(width):
            if bit in settled:
                continue
            rows = _next_rows(stored, data, codes)[bit]
            watched = [*range(len(data)), *(len(data) + other for other in settled)]
            score = sum(_direction(rows, variable) for variable in watched)
            if score:
                settled.add(bit)
            if score < 0:
                codes = [(*code[:bit], 1 - code[bit], *code[bit + 1 :]) for code in codes]
    return codes


def _direction(rows: Rows, variable: int) -> int:
    """Return 1 where the value only rises with a variable, -1 where it only falls, else 0."""
    found = set()
    for levels, value in rows.items():
        if levels[variable] == 0:
            other = rows.get((*levels[:variable], 1, *levels[variable + 1 :]), value)
            if other != value:
                found.add(1 if other else -1)
    return found.pop() if len(found) == 1 else 0


def _next_rows(stored: Stored, data: list[int], codes: Sequence[Vector]) -> list[dict[Vector, bool]]:
    rows: list[dict[Vector, bool]] = [{} for _ in codes[0]]
    for (state, vector), after in stored.follows.items():
        levels = (*(vector[pin] for pin in data), *codes[state])
        for bit, level in enumerate(codes[after]):
            rows[bit][levels] = bool(level)
    return rows


def _shown_rows(reached: Map, stored: Stored, codes: Sequence[Vector]) -> list[dict[Vector, bool] | None]:
    rows: list[dict[Vector, bool] | None] = [{} for _ in reached.outputs]
    for place, state in zip(reached.places, stored.at, strict=True):
        if state is None:
            continue
        levels = (*codes[state], *place.vector)
        for output, level in enumerate(place.outputs):
            table = rows[output]
            if table is not None and table.setdefault(levels, bool(level)) != bool(level):
                rows[output] = None
    return rows


def _forced(
    reached: Map, reading: Reading, stored: Stored, codes: Sequence[Vector]
) -> tuple[tuple[tuple[str, bool], ...], tuple[tuple[str, bool], ...]] | None:
    """Return clears and presets; None where one stores neither all zeros nor all ones."""
    sides: dict[int, list[tuple[str, bool]]] = {0: [], 1: []}
    for (pin, level), state in zip(reading.forced, stored.fixed, strict=True):
        if len(set(codes[state])) != 1:
            return None
        sides[codes[state][0]].append((reached.inputs[pin], bool(level)))
    return tuple(sides[0]), tuple(sides[1])


def _written(
    rows: Mapping[Vector, bool] | None, names: tuple[str, ...]
) -> tuple[str, tuple[str, ...], Rows] | None:
    """Return the expression of ``rows``, the variables it reads, and its rows over those."""
    if rows is None:
        return None
    read = support(rows, len(names))
    short: dict[Vector, bool] = {}
    for levels, value in rows.items():
        if short.setdefault(tuple(levels[at] for at in read), value) != value:
            return None
    if len(read) > MAX_VARIABLES:
        return None
    variables = tuple(names[at] for at in read)
    return express(table_of(short, len(read)), variables), variables, short
