"""The timing questions of a cell, derived from its function; none is listed by hand."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from enum import StrEnum

from charflow.errors import SheetError
from charflow.plan.behaviour import Behaviour, Bits, behaviour_of
from charflow.plan.trial import Start
from charflow.sheet import Sheet


class Kind(StrEnum):
    """What an arc asks for; the values are the names used in ``tables.csv``."""

    CLK_TO_Q = "clk_to_q"
    TRANSITION = "transition"
    SETUP = "setup"
    HOLD = "hold"


def edge_name(rising: bool) -> str:
    """Return the word for an edge."""
    return "rise" if rising else "fall"


@dataclass(frozen=True)
class Arc:
    """One timing question.

    ``pin`` and ``rising`` are what moves (the data pin of a constraint, the clock of a delay),
    ``related`` and ``related_rising`` the reference edge, ``observed`` the outputs that must move and
    where to. ``start`` is the rest the trial begins from, ``relaxed`` the rest with the right data there
    for long, ``when`` the levels of side inputs.
    """

    kind: Kind
    pin: str
    rising: bool
    related: str
    related_rising: bool
    observed: tuple[tuple[str, bool], ...]
    start: Start
    relaxed: Start
    when: tuple[tuple[str, bool], ...] = ()

    @property
    def words(self) -> str:
        """Return the question in words a person can check."""
        outputs = ", ".join(f"{pin} {'rises' if up else 'falls'}" for pin, up in self.observed)
        side = "".join(f", {pin}={int(level)}" for pin, level in self.when)
        edge = f"{self.related} {edge_name(self.related_rising)}"
        data = f"{self.pin} {edge_name(self.rising)}"
        match self.kind:
            case Kind.SETUP:
                return f"setup: {data} this long before {edge}; {outputs}{side}"
            case Kind.HOLD:
                return f"hold: {data} this long after {edge}; {outputs}{side}"
            case _:
                return f"delay and transition: {edge} until {outputs}{side}"


def arcs_of(sheet: Sheet) -> tuple[Arc, ...]:
    """Return every arc of the cell: delays first, then setup and hold of each data pin and edge.

    Raises :class:`SheetError` where the sheet's function leaves nothing to measure.
    """
    cell = behaviour_of(sheet)
    if cell.transparent or cell.clears or cell.presets:
        pin = cell.control if cell.transparent else (*cell.clears, *cell.presets)[0][0]
        raise SheetError(
            f"pins.{pin}: the role {sheet.pins[pin].role.value!r} is known but not measured by this version",
            where=(str(sheet.path),),
        )
    arcs = (*_delays(cell), *_constraints(cell))
    if not arcs:
        raise SheetError(
            "no clock edge can move any output, so there is nothing to measure", where=(str(sheet.path),)
        )
    return arcs


def _moved(cell: Behaviour, old: Bits, new: Bits, values: dict[str, bool]) -> tuple[tuple[str, bool], ...]:
    before, after = cell.shown(old, values), cell.shown(new, values)
    return tuple((pin, bool(after[pin])) for pin in after if after[pin] != before[pin])


def _resting(cell: Behaviour) -> Iterator[dict[str, bool]]:
    """Yield the input vectors with the clock at its inactive level and no asynchronous input acting."""
    for vector in cell.vectors():
        if vector[cell.control] is not cell.active_high and not any(cell.asynchronous(vector)):
            yield vector


def _delays(cell: Behaviour) -> Iterator[Arc]:
    """Yield one arc for each output and direction, under the first side condition that makes it move."""
    seen = set()
    for vector in reversed(list(_resting(cell))):
        for old in cell.states():
            new = cell.captured(old, vector)
            start = cell.reach(old, vector)
            if None in new or start is None:
                continue
            for output in _moved(cell, old, new, vector):
                if output not in seen:
                    seen.add(output)
                    edge = (cell.control, cell.active_high)
                    yield Arc(Kind.CLK_TO_Q, *edge, *edge, (output,), start, start)


def _constraints(cell: Behaviour) -> Iterator[Arc]:
    for kind in (Kind.SETUP, Kind.HOLD):
        for pin in cell.data_pins:
            for rising in (True, False):
                yield from _constraint(cell, kind, pin, rising)


def _constraint(cell: Behaviour, kind: Kind, pin: str, rising: bool) -> Iterator[Arc]:
    """Yield one arc for each side condition in which ``pin`` decides what is captured."""
    for vector in _resting(cell):
        if vector[pin] is not rising:
            continue
        before, after = {**vector, pin: not rising}, vector
        right = after if kind is Kind.SETUP else before  # the data that must be captured
        wrong = before if kind is Kind.SETUP else after
        for old in cell.states():
            new = cell.captured(old, right)
            if None in new or new == old or cell.captured(old, wrong) != old:
                continue
            start, relaxed = cell.reach(old, before), cell.reach(old, right)
            if start is None or relaxed is None:
                continue
            when = tuple((p, vector[p]) for p in cell.data_pins if p != pin)
            observed = _moved(cell, old, new, right)
            if observed:
                edge = (cell.control, cell.active_high)
                yield Arc(kind, pin, rising, *edge, observed, start, relaxed, when)
