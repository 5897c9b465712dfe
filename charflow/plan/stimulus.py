"""From a question and a condition to a trial, and from a trial to piecewise-linear waveforms."""

from __future__ import annotations

from dataclasses import dataclass

from charflow.plan.arcs import BEFORE, Arc, Kind
from charflow.plan.trial import Move, Trial
from charflow.sheet import Sheet

LEAD = 10e-12  # s of rest before the first ramp; the cell is settled, so this only keeps time zero clear


@dataclass(frozen=True)
class Condition:
    """Where in the tables a value stands: corner, slews [s] and the load [F] of the observed outputs.

    ``clock_slew`` is that of the control and asynchronous pins, ``data_slew`` that of data pins and of
    the edge a constraint is about; None where the arc has no such edge.
    """

    corner: str
    clock_slew: float | None
    data_slew: float | None
    load: float


def relaxed(sheet: Sheet, arc: Arc, condition: Condition, until: float) -> Trial:
    """Return the trial that shows the arc's outputs with everything right long before and long after."""
    if arc.kind is Kind.DATA_TO_Q or arc.since_pin:
        move = Move(arc.pin, arc.rising, 0.0, _given(condition.data_slew, sheet.axes.data_slew))
        return Trial(condition.corner, arc.start, (move,), _loads(sheet, arc, condition.load), until)
    move = Move(arc.related, arc.related_rising, 0.0, _given(condition.clock_slew, sheet.axes.clock_slew))
    return Trial(condition.corner, arc.relaxed, (move,), _loads(sheet, arc, condition.load), until)


def contrary(sheet: Sheet, arc: Arc, condition: Condition, until: float) -> tuple[Trial, ...]:
    """Return trials in which outputs that must stay do move: how fast they are sets the time scale."""
    loads = _loads(sheet, arc, condition.load)
    clock = Move(arc.related, arc.related_rising, 0.0, _given(condition.clock_slew, sheet.axes.clock_slew))
    data = Move(arc.pin, arc.rising, 0.0, _given(condition.data_slew, sheet.axes.data_slew))
    wrong = arc.contrary or arc.relaxed
    return (
        Trial(condition.corner, wrong, (clock,), loads, until),
        Trial(condition.corner, arc.start, (data,), loads, until),
    )


def at_offset(sheet: Sheet, arc: Arc, condition: Condition, offset: float, until: float) -> Trial:
    """Return the trial of a constraint arc at ``offset`` [s]; larger is safer.

    Setup, recovery: the pin's edge comes ``offset`` before the reference edge. Hold, removal: ``offset``
    after it. Pulse width: the pulse is ``offset`` wide between its 50 % points. Minimum period: the
    clock's edges repeat after ``offset``, the data changing half-way between two of them.
    """
    moves = _moves(sheet, arc, condition, offset)
    return Trial(condition.corner, arc.start, moves, _loads(sheet, arc, condition.load), until)


def _moves(sheet: Sheet, arc: Arc, condition: Condition, offset: float) -> tuple[Move, ...]:
    clock_slew = _given(condition.clock_slew, sheet.axes.clock_slew)
    data_slew = _given(condition.data_slew, sheet.axes.data_slew)
    reference = Move(arc.related, arc.related_rising, 0.0, clock_slew)
    if arc.kind is Kind.PULSE_WIDTH:
        other = offset if arc.rising is arc.related_rising else -offset
        return tuple(sorted((reference, Move(arc.pin, not arc.related_rising, other, clock_slew)), key=_when))
    if arc.kind is Kind.MIN_PERIOD:
        assert arc.data is not None
        pin, level = arc.data
        return (
            Move(arc.pin, arc.rising, -offset, clock_slew),
            Move(pin, level, -offset / 2, data_slew),
            Move(arc.pin, not arc.rising, -offset / 2, clock_slew),
            reference,
        )
    return (reference, Move(arc.pin, arc.rising, pin_time(arc, offset), data_slew))


def _when(move: Move) -> float:
    return move.at


def pin_time(arc: Arc, offset: float) -> float:
    """Return when [s] the pin's edge comes, relative to the reference edge, at a constraint's ``offset``."""
    return -offset if arc.kind in BEFORE else offset


def _given(slew: float | None, axis: tuple[float, ...]) -> float:
    return axis[0] if slew is None else slew


def _loads(sheet: Sheet, arc: Arc, load: float) -> tuple[tuple[str, float], ...]:
    watched = {pin for pin, _ in (*arc.observed, *arc.quiet)}
    return tuple((pin, load if pin in watched else sheet.axes.load[0]) for pin in sheet.outputs)


Waveform = tuple[tuple[float, float], ...]  # (time [s], level as a fraction of supply)


def ramp_time(slew: float, fractions: tuple[float, float]) -> float:
    """Return the rail-to-rail time [s] of a linear ramp of ``slew`` [s] between ``fractions``."""
    return slew / (fractions[1] - fractions[0])


def begins(trial: Trial, fractions: tuple[float, float]) -> float:
    """Return the time [s] at which the transient of ``trial`` starts: just before its first ramp."""
    return min((m.at - ramp_time(m.slew, fractions) / 2 for m in trial.moves), default=0.0) - LEAD


def waveform(trial: Trial, pin: str, fractions: tuple[float, float]) -> Waveform:
    """Return the piecewise-linear drive of input ``pin`` from the start of the transient on.

    Ramps of one pin that overlap meet where their lines cross, so a short pulse is a triangle that
    does not reach the rail.
    """
    level = float(trial.start.rest[pin])
    points: list[tuple[float, float]] = [(begins(trial, fractions), level)]
    ramp: tuple[float, float, float, float] | None = None
    for move in sorted((m for m in trial.moves if m.pin == pin), key=lambda m: m.at):
        half = ramp_time(move.slew, fractions) / 2
        t0, t1 = move.at - half, move.at + half
        v0, v1 = (0.0, 1.0) if move.rising else (1.0, 0.0)
        if ramp is not None and t0 < ramp[1] and v0 != ramp[2]:
            points[-1] = _meeting(ramp, (t0, t1, v0, v1))
        else:
            points.append((t0, v0))
        points.append((t1, v1))
        ramp = (t0, t1, v0, v1)
    return tuple(points)


def _meeting(
    a: tuple[float, float, float, float], b: tuple[float, float, float, float]
) -> tuple[float, float]:
    slope_a, slope_b = (a[3] - a[2]) / (a[1] - a[0]), (b[3] - b[2]) / (b[1] - b[0])
    time = (b[2] - a[2] + slope_a * a[0] - slope_b * b[0]) / (slope_a - slope_b)
    return time, a[2] + slope_a * (time - a[0])
