"""From a question and a condition to a trial, and from a trial to piecewise-linear waveforms."""

from __future__ import annotations

from dataclasses import dataclass

from charflow.plan.arcs import Arc, Kind
from charflow.plan.trial import Move, Trial
from charflow.sheet import Sheet

LEAD = 10e-12  # s of rest before the first ramp; the cell is settled, so this only keeps time zero clear


@dataclass(frozen=True)
class Condition:
    """Where in the tables a value stands: corner, slews [s] and the load [F] of the observed outputs."""

    corner: str
    clock_slew: float
    data_slew: float | None
    load: float


def relaxed(sheet: Sheet, arc: Arc, condition: Condition, until: float) -> Trial:
    """Return the trial whose data is right long before the reference edge and long after it."""
    clock = Move(arc.related, arc.related_rising, 0.0, condition.clock_slew)
    return Trial(condition.corner, arc.relaxed, (clock,), _loads(sheet, arc, condition.load), until)


def at_offset(sheet: Sheet, arc: Arc, condition: Condition, offset: float, until: float) -> Trial:
    """Return the trial of a setup or hold arc with the data edge ``offset`` [s] to the safe side.

    Setup: the data edge comes ``offset`` before the reference edge. Hold: ``offset`` after it.
    """
    if condition.data_slew is None:
        raise ValueError("a constraint needs a data slew")
    at = -offset if arc.kind is Kind.SETUP else offset
    clock = Move(arc.related, arc.related_rising, 0.0, condition.clock_slew)
    data = Move(arc.pin, arc.rising, at, condition.data_slew)
    return Trial(condition.corner, arc.start, (clock, data), _loads(sheet, arc, condition.load), until)


def _loads(sheet: Sheet, arc: Arc, load: float) -> tuple[tuple[str, float], ...]:
    watched = {pin for pin, _ in arc.observed}
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
        if ramp is not None and t0 < ramp[1]:
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
