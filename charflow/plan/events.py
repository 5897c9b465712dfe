"""Every input edge a cell can meet at rest: what energy, capacitance and leakage are measured on.

An event is one input edge from one settled state; it moves some outputs or none.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from charflow.plan.behaviour import Behaviour, Bits
from charflow.plan.trial import Start

MOST = 8  # settled states an edge of one pin is measured from; more are sampled evenly


@dataclass(frozen=True)
class Event:
    """An edge of ``pin`` from the rest of ``start``; ``moved`` are the outputs it moves, and where to.

    ``control`` is the level of the clock or gate meanwhile, None where it is the pin itself. ``idle``
    tells that what is stored is what the data inputs ask for, so nothing new waits behind a closed clock.
    """

    pin: str
    rising: bool
    start: Start
    moved: tuple[tuple[str, bool], ...]
    control: bool | None
    idle: bool


@dataclass(frozen=True)
class Resting:
    """A settled state: the way to it, its input levels, and what each output shows."""

    start: Start
    inputs: dict[str, bool]
    outputs: dict[str, bool]

    @property
    def condition(self) -> str:
        """The state as a logic expression over inputs and outputs."""
        shown = {**self.inputs, **self.outputs}
        return " & ".join(pin if level else f"!{pin}" for pin, level in shown.items())


def _settings(cell: Behaviour) -> Iterator[tuple[Bits, dict[str, bool], Start]]:
    for vector in cell.vectors():
        for state in cell.states():
            start = cell.reach(state, vector)
            if start is not None:
                yield state, vector, start


def resting_states(cell: Behaviour) -> list[Resting]:
    """Return every settled state that differs from the others in what is stored or in an input level."""
    found = []
    for state, vector, start in _settings(cell):
        shown = cell.shown(state, vector)
        known = {pin: level for pin, level in shown.items() if level is not None}
        if len(known) == len(shown):
            found.append(Resting(start, {pin: vector[pin] for pin in cell.inputs}, known))
    return found


def events_of(cell: Behaviour) -> list[Event]:
    """Return the events of a cell; of those alike in pin, edge, control and outputs at most :data:`MOST`."""
    together: dict[tuple[object, ...], list[Event]] = {}
    for state, vector, start in _settings(cell):
        before = cell.shown(state, vector)
        for pin in cell.inputs:
            now = {**vector, pin: not vector[pin]}
            after = cell.after(state, vector, now)
            shown = cell.shown(after, now)
            if None in after or None in shown.values() or None in before.values():
                continue
            moved = tuple((p, bool(v)) for p, v in shown.items() if v != before[p])
            control = None if pin == cell.control else vector[cell.control]
            idle = cell.captured(state, vector) == state
            event = Event(pin, now[pin], start, moved, control, idle)
            together.setdefault((pin, now[pin], control, moved, idle), []).append(event)
    return [event for events in together.values() for event in _sampled(events)]


def _sampled(events: list[Event]) -> Iterable[Event]:
    if len(events) <= MOST:
        return events
    return (events[round(i * (len(events) - 1) / (MOST - 1))] for i in range(MOST))
