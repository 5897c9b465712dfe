"""One way to read a cell, and what it stores when it is read so."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from charflow.probe.explore import Map, Place, Vector

MAX_STORED = 64

Async = tuple[int, int]  # input by number, the level at which it acts
Rows = Mapping[Vector, bool]  # levels of some variables -> value


@dataclass(frozen=True)
class Reading:
    """A guess to be tested: ``control`` acts at its edge to ``active`` or, with ``gate``, while it is there.

    ``forced`` are the inputs that clear or preset, and at which level.
    """

    control: int
    active: int
    gate: bool
    forced: tuple[Async, ...]

    def acting(self, vector: Vector) -> list[int]:
        """Return the inputs that clear or preset under ``vector``."""
        return [pin for pin, level in self.forced if vector[pin] == level]

    def holds(self, vector: Vector) -> bool:
        """Tell whether the cell keeps what it stores while its other inputs change."""
        return not self.acting(vector) and not (self.gate and vector[self.control] == self.active)


@dataclass(frozen=True)
class Stored:
    """The stored states of a cell under a reading, numbered from 0.

    ``at`` is the stored state of each place, None where it is not known; ``follows`` maps (stored state,
    input levels before the control acts) to the state stored then; ``fixed`` is what each clear or preset
    stores.
    """

    count: int
    at: tuple[int | None, ...]
    follows: Mapping[tuple[int, Vector], int]
    fixed: tuple[int, ...]


def stored_states(reached: Map, reading: Reading) -> Stored | None:
    """Return what the cell stores under ``reading``; None if that reading cannot be right."""
    joined = _joined(reached, reading)
    if len(set(joined.values())) < 2:
        return None
    shown = _shown(reached, joined)
    if shown is None:
        return None
    captured = _captured(reached, reading, joined)
    block = _blocks(shown, captured)
    count = len(set(block.values()))
    if not 2 <= count <= MAX_STORED:
        return None
    follows: dict[tuple[int, Vector], int] = {}
    for (state, vector), after in captured.items():
        for new in after:
            if follows.setdefault((block[state], vector), block[new]) != block[new]:
                return None
    known = {number: block[state] for number, state in joined.items()}
    at = tuple(_label(reached, reading, number, known) for number in range(len(reached.places)))
    fixed = []
    for pin, _ in reading.forced:
        there = {
            state
            for place, state in zip(reached.places, at, strict=True)
            if reading.acting(place.vector) == [pin] and state is not None
        }
        if len(there) != 1:
            return None
        fixed.append(there.pop())
    return Stored(count, at, follows, tuple(fixed))


def _joined(reached: Map, reading: Reading) -> dict[int, int]:
    """Return, for each place that holds, a number of the group of places with the same stored state."""
    parent = {n: n for n, place in enumerate(reached.places) if reading.holds(place.vector)}

    def root(number: int) -> int:
        while parent[number] != number:
            parent[number] = parent[parent[number]]
            number = parent[number]
        return number

    for number, pin, after in reached.flips():
        captures = pin == reading.control and reached.places[after].vector[pin] == reading.active
        if number in parent and after in parent and not captures:
            parent[root(number)] = root(after)
    return {number: root(number) for number in parent}


def _shown(reached: Map, joined: Mapping[int, int]) -> dict[int, dict[Vector, Vector]] | None:
    shown: dict[int, dict[Vector, Vector]] = {}
    for number, state in joined.items():
        place = reached.places[number]
        if shown.setdefault(state, {}).setdefault(place.vector, place.outputs) != place.outputs:
            return None
    return shown


def _captured(
    reached: Map, reading: Reading, joined: Mapping[int, int]
) -> dict[tuple[int, Vector], set[int]]:
    """Return the states stored after the control acts, by state and input levels before it."""
    captured: dict[tuple[int, Vector], set[int]] = {}
    for number, state in joined.items():
        place = reached.places[number]
        if place.vector[reading.control] == reading.active:
            continue
        after: int = place.next[reading.control]
        if after >= 0 and reading.gate:
            after = reached.places[after].next[reading.control]
        if after >= 0 and after in joined:
            captured.setdefault((state, place.vector), set()).add(joined[after])
    return captured


def _blocks(
    shown: Mapping[int, Mapping[Vector, Vector]], captured: Mapping[tuple[int, Vector], set[int]]
) -> dict[int, int]:
    """Join states that no sequence of inputs tells apart (Moore's partition refinement, 1956)."""
    ways: dict[int, list[tuple[Vector, set[int]]]] = {state: [] for state in shown}
    for (state, vector), after in captured.items():
        ways[state].append((vector, after))
    kinds: dict[object, int] = {}
    block = {s: kinds.setdefault(tuple(sorted(seen.items())), len(kinds)) for s, seen in shown.items()}
    while True:
        finer: dict[object, int] = {}
        following = {}
        for state in shown:
            leads = tuple(sorted((v, tuple(sorted({block[a] for a in after}))) for v, after in ways[state]))
            following[state] = finer.setdefault((block[state], leads), len(finer))
        if len(finer) == len(kinds):
            return block
        block, kinds = following, finer


def _label(reached: Map, reading: Reading, number: int, known: Mapping[int, int]) -> int | None:
    """Return the stored state of a place: its own, or the one it has once closed and released."""
    place: Place = reached.places[number]
    acting = reading.acting(place.vector)
    if len(acting) > 1:
        return None
    if reading.gate and place.vector[reading.control] == reading.active:
        number = place.next[reading.control]
        if number < 0:
            return None
        place = reached.places[number]
    if acting:
        number = place.next[acting[0]]
    return known.get(number)
