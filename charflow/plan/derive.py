"""Which arcs a cell has, derived from its function; none is listed by hand.

Everything follows from the zero-delay model: an input edge that moves an output is a delay; two edges
whose order decides what an output ends at constrain each other; a pulse that changes what is stored has a
least width.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from charflow.errors import SheetError
from charflow.plan.arcs import Arc, Kind
from charflow.plan.behaviour import Behaviour, Bits, behaviour_of
from charflow.sheet import Sheet

Vector = dict[str, bool]
Shown = dict[str, bool | None]


def arcs_of(sheet: Sheet) -> tuple[Arc, ...]:
    """Return every arc of the cell: delays, constraints of each input, pulse widths.

    Raises :class:`SheetError` where the sheet's function leaves nothing to measure.
    """
    cell = behaviour_of(sheet)
    arcs = (*delays(cell), *constraints(cell), *pulses(cell), *periods(cell))
    if not any(arc.observed for arc in arcs):
        raise SheetError(
            "no input edge can move any output, so there is nothing to measure", where=(str(sheet.path),)
        )
    return arcs


@dataclass(frozen=True)
class Step:
    """A known state and inputs, one after another: what two edges in a given order lead through."""

    states: tuple[Bits, ...]
    vectors: tuple[Vector, ...]
    outputs: tuple[Shown, ...]


def _through(cell: Behaviour, state: Bits, vector: Vector, *pins: str) -> Step:
    """Return what the cell goes through when ``pins`` are flipped one after another."""
    states, vectors = [state], [vector]
    for pin in pins:
        now = {**vectors[-1], pin: not vectors[-1][pin]}
        states.append(cell.after(states[-1], vectors[-1], now))
        vectors.append(now)
    shown = tuple(cell.shown(s, v) for s, v in zip(states, vectors, strict=True))
    return Step(tuple(states), tuple(vectors), shown)


def _settings(cell: Behaviour) -> Iterator[tuple[Bits, Vector]]:
    """Yield every known state with every input vector at which it can rest, active inputs high first."""
    for vector in reversed(cell.vectors()):
        for state in cell.states():
            if cell.reach(state, vector) is not None:
                yield state, vector


def delays(cell: Behaviour) -> Iterator[Arc]:
    """Yield a delay for each input edge and output edge it causes, under the first side condition found."""
    seen = set()
    for state, vector in _settings(cell):
        start = cell.reach(state, vector)
        assert start is not None
        for pin in cell.inputs:
            step = _through(cell, state, vector, pin)
            for output, rising in _moved(step.outputs[0], step.outputs[1]):
                edge = (pin, not vector[pin])
                if (edge, output, rising) not in seen:
                    seen.add((edge, output, rising))
                    yield Arc(_delay_kind(cell, pin), *edge, *edge, ((output, rising),), start, start)


def _delay_kind(cell: Behaviour, pin: str) -> Kind:
    if pin == cell.control:
        return Kind.GATE_TO_Q if cell.transparent else Kind.CLK_TO_Q
    return Kind.ASYNC_TO_Q if pin in cell.asynchronous_pins else Kind.DATA_TO_Q


def _moved(before: Shown, after: Shown) -> list[tuple[str, bool]]:
    """Return the outputs known on both sides that differ, with where they go."""
    return [
        (pin, level)
        for pin, level in after.items()
        if level is not None and before[pin] is not None and level != before[pin]
    ]


def constraints(cell: Behaviour) -> Iterator[Arc]:
    """Yield setup and hold of each data pin, recovery and removal of each asynchronous one."""
    for kind in (Kind.SETUP, Kind.HOLD, Kind.RECOVERY, Kind.REMOVAL):
        data = kind in (Kind.SETUP, Kind.HOLD)
        for pin in cell.data_pins if data else cell.asynchronous_pins:
            for rising in (True, False):
                found = list(_constraint(cell, kind, pin, rising))
                switching = [arc for arc in found if arc.observed]
                # Measured with an output switching where that can be; else what must stay is watched.
                yield from switching if switching and not cell.transparent else found


def _constraint(cell: Behaviour, kind: Kind, pin: str, rising: bool) -> Iterator[Arc]:
    """Yield an arc for each side condition in which the order of the two edges decides."""
    early = kind in (Kind.SETUP, Kind.RECOVERY)
    seen = set()
    for state, vector in _settings(cell):
        if vector[pin] is rising or vector[cell.control] is not cell.waits_at:
            continue
        if kind in (Kind.SETUP, Kind.HOLD) and any(cell.asynchronous(vector)):
            continue
        pins = (pin, cell.control) if early else (cell.control, pin)
        right = _through(cell, state, vector, *pins)
        wrong = _through(cell, state, vector, *reversed(pins))
        arc = _judged(cell, kind, pin, rising, right, wrong)
        if arc is None:
            continue
        identity = (arc.when, arc.neighbours, arc.observed, arc.quiet)
        if identity not in seen:
            seen.add(identity)
            yield arc


def _judged(cell: Behaviour, kind: Kind, pin: str, rising: bool, right: Step, wrong: Step) -> Arc | None:
    """Return the arc that tells ``right`` from ``wrong``, None where they end alike or are not known."""
    first, second, last = right.outputs
    decided = [
        p
        for p, level in last.items()
        if None not in (level, wrong.outputs[2][p]) and level != wrong.outputs[2][p]
    ]
    if not decided or any(None in (first[p], second[p]) for p in decided):
        return None
    since_pin = kind in (Kind.SETUP, Kind.RECOVERY) and any(second[p] != first[p] for p in decided)
    observed = tuple((p, bool(last[p])) for p in decided if last[p] != first[p])
    quiet = tuple((p, bool(last[p])) for p in decided if last[p] == first[p])
    neighbours = _neighbours(cell, pin, right)
    if neighbours is None:
        return None
    early = kind in (Kind.SETUP, Kind.RECOVERY)
    start = cell.reach(right.states[0], right.vectors[0])
    relaxed = cell.reach(right.states[1], right.vectors[1]) if early else start
    contrary = start if early else cell.reach(wrong.states[1], wrong.vectors[1])
    if start is None or relaxed is None or contrary is None:
        return None
    return Arc(
        kind,
        pin,
        rising,
        cell.control,
        not cell.waits_at,
        observed,
        start,
        start if since_pin else relaxed,
        when=tuple((p, right.vectors[0][p]) for p in _beside(cell, pin)),
        quiet=quiet,
        contrary=contrary if quiet and not observed else None,
        since_pin=since_pin,
        neighbours=neighbours,
    )


def _beside(cell: Behaviour, pin: str) -> tuple[str, ...]:
    """Return the side inputs whose level ``pin`` meets in the same stored bit."""
    if pin in cell.asynchronous_pins:
        return ()
    names = {name for _, logic in cell.next_state if pin in logic.names for name in logic.names}
    return tuple(p for p in cell.data_pins if p in names and p != pin)


def _neighbours(cell: Behaviour, pin: str, right: Step) -> str | None:
    """Return what the other bits of a register do, None where it is neither all quiet nor all switching."""
    own = [pin in logic.names or pin in cell.asynchronous_pins for _, logic in cell.next_state]
    others = [
        before != after
        for before, after, mine in zip(right.states[0], right.states[2], own, strict=True)
        if not mine
    ]
    if not others or not any(others):
        return ""
    return "other bits switching" if all(others) else None


def pulses(cell: Behaviour) -> Iterator[Arc]:
    """Yield the pulse widths of control and asynchronous pins that do something."""
    seen = set()
    for state, vector in _settings(cell):
        for pin in (cell.control, *cell.asynchronous_pins):
            step = _through(cell, state, vector, pin, pin)
            arc = _pulse(cell, pin, step)
            if arc is None:
                continue
            identity = (pin, arc.rising, arc.observed[0])
            if identity not in seen:
                seen.add(identity)
                yield arc


def _pulse(cell: Behaviour, pin: str, step: Step) -> Arc | None:
    first, middle, last = step.outputs
    start = cell.reach(step.states[0], step.vectors[0])
    lasting = tuple(_moved(first, last))
    passing = tuple(p for p in _moved(first, middle) if middle[p[0]] != last[p[0]])
    if start is None or None in step.states[1] or None in step.states[2]:
        return None
    if pin in cell.asynchronous_pins and (
        step.states[1] == step.states[0] or any(cell.asynchronous(step.vectors[0]))
    ):
        return None
    if lasting and not passing:
        by_first = all(middle[p] == level for p, level in lasting)
        by_second = all(middle[p] != level for p, level in lasting)
        if by_first or by_second:
            rising = not step.vectors[0][pin]
            relaxed = start if by_first else cell.reach(step.states[1], step.vectors[1])
            if relaxed is None:
                return None
            return Arc(
                Kind.PULSE_WIDTH,
                pin,
                rising,
                pin,
                rising if by_first else not rising,
                lasting,
                start,
                relaxed,
            )
    if passing and not lasting and pin == cell.control:
        rising = not step.vectors[0][pin]
        return Arc(Kind.PULSE_WIDTH, pin, rising, pin, rising, passing, start, start, pulsed=True)
    return None


def periods(cell: Behaviour) -> Iterator[Arc]:
    """Yield the minimum period of an edge-triggered register, its first data pin toggling."""
    if cell.transparent:
        return
    for captured in (True, False):
        found = (
            arc
            for pin in cell.data_pins
            for state, vector in _settings(cell)
            if (arc := _period(cell, state, vector, pin, captured)) is not None
        )
        first = next(found, None)
        if first is not None:
            yield first


def _period(cell: Behaviour, state: Bits, vector: Vector, pin: str, captured: bool) -> Arc | None:
    """Return the arc of: edge, back and data changed, edge; the two edges capture opposite values."""
    if vector[cell.control] is not cell.waits_at or any(cell.asynchronous(vector)) or vector[pin] is captured:
        return None
    step = _through(cell, state, vector, cell.control, pin, cell.control, cell.control)
    first, _, _, before, last = step.outputs
    observed = tuple(_moved(before, last))
    start, relaxed = cell.reach(state, vector), cell.reach(step.states[3], step.vectors[3])
    if not observed or start is None or relaxed is None or first[observed[0][0]] == before[observed[0][0]]:
        return None
    edge = (cell.control, not cell.waits_at)
    return Arc(Kind.MIN_PERIOD, *edge, *edge, observed, start, relaxed, data=(pin, captured))
