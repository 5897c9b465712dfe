"""A register made of formulas: it answers trials without a simulator, and its setup and hold are known.

For testing solvers, and for trying a sheet or a script in no time. Times in seconds, loads in farads,
pushout as a fraction of the reference delay.

The pushout of one data edge falls exponentially with the offset, ``amplitude * exp(-(offset - knee) / tau)``,
the small-signal law of a bistable circuit (Veendrick, "The Behavior of Flip-Flops Used as Synchronizers and
Prediction of Their Failure Rate", IEEE JSSC 15(2), 1980). Straight lines added to it make what real curves
show besides: a dip below zero, or a bump that passes the limit and turns back.
"""

from __future__ import annotations

import math
from bisect import bisect_right
from dataclasses import dataclass
from itertools import pairwise

from charflow.plan.arcs import Kind
from charflow.plan.behaviour import Behaviour, Bits
from charflow.plan.trial import Outcome, Swing, Trial
from charflow.sheet.logic import Bit

NEVER = -math.inf


@dataclass(frozen=True)
class Curve:
    """Pushout of one data edge over its offset [s]; larger offsets are safer.

    ``knee`` [s] is where the exponential is ``amplitude`` and ``tau`` [s] how fast it falls. ``shape``
    is added to it: (offset [s], pushout) points in rising order, joined by straight lines, nothing
    outside. Below ``cliff`` [s] nothing is captured. Below ``lost`` [s] the new value arrives in time and
    goes again ``lost_after`` [s] later. The knee, and everything with it, moves by ``per_data_slew`` and
    ``per_clock_slew`` seconds a second of slew.
    """

    knee: float
    tau: float
    amplitude: float = 1.0
    shape: tuple[tuple[float, float], ...] = ()
    cliff: float = NEVER
    lost: float = NEVER
    lost_after: float = 0.0
    per_data_slew: float = 0.0
    per_clock_slew: float = 0.0

    def shift(self, data_slew: float, clock_slew: float) -> float:
        """Return how far the curve moves to larger offsets at these slews [s]."""
        return self.per_data_slew * data_slew + self.per_clock_slew * clock_slew

    def push(self, offset: float) -> float | None:
        """Return the pushout at ``offset`` [s] of the unshifted curve, None where nothing is captured."""
        if offset < self.cliff:
            return None
        return self._falling(offset) + self._extra(offset)

    def crossing(self, limit: float, *, patient: bool = True) -> float:
        """Return the offset [s] next to the safe side below which the curve fails ``limit``.

        ``patient`` counts a value that is lost again as a failure. Minus infinity where nothing fails.
        """
        lost = self.lost if patient else NEVER
        return max(self._rise_above(limit), self.cliff, lost)

    def _falling(self, offset: float) -> float:
        return self.amplitude * math.exp(min(-(offset - self.knee) / self.tau, 700.0))

    def _extra(self, offset: float) -> float:
        places = [place for place, _ in self.shape]
        if not places or not places[0] <= offset <= places[-1]:
            return 0.0
        right = min(bisect_right(places, offset), len(places) - 1)
        (x0, y0), (x1, y1) = self.shape[right - 1], self.shape[right]
        return y0 + (y1 - y0) * (offset - x0) / (x1 - x0)

    def _rise_above(self, limit: float) -> float:
        """Return the largest offset at which the pushout exceeds ``limit``.

        Between two points of the shape the pushout is convex (an exponential and a line), so where the
        right end passes, the part that passes is one interval and bisection finds its left end.
        """
        plain = self.knee + self.tau * math.log(self.amplitude / limit) if self.amplitude > 0 else NEVER
        if not self.shape:
            return plain
        if plain > self.shape[-1][0]:
            return plain
        for (right, extra), (left, _) in pairwise(reversed(self.shape)):
            if self._falling(right) + extra > limit:
                return right
            if self._falling(left) + self._extra(left) > limit:
                return self._bisect(left, right, limit)
        return min(plain, self.shape[0][0])

    def _bisect(self, fails: float, passes: float, limit: float) -> float:
        for _ in range(200):
            middle = (fails + passes) / 2
            if not fails < middle < passes:
                break
            if self._falling(middle) + self._extra(middle) > limit:
                fails = middle
            else:
                passes = middle
        return passes


@dataclass(frozen=True)
class FakeOutput:
    """One output: reference delay and transition [s], more of both per farad, its share of the pushout."""

    pin: str
    delay: float
    transition: float
    per_farad: float = 0.0
    share: float = 1.0


@dataclass(frozen=True)
class _Race:
    """A data edge and a clock edge: outputs before and after, pushout, and when the value is lost [s]."""

    before: dict[str, Bit]
    after: dict[str, Bit]
    push: float | None
    lost: float | None

    def times(self, pin: str, delay: float, share: float) -> tuple[bool, list[float]]:
        """Return the first level of output ``pin`` and when it crosses [s]."""
        first = bool(self.before[pin])
        if first is bool(self.after[pin]) or self.push is None:
            return first, []
        arrival = delay * (1 + share * self.push)
        return first, [arrival] if self.lost is None else [arrival, arrival + self.lost]


@dataclass(frozen=True)
class FakeRegister:
    """A function from trial to outcome that follows ``cell`` and known curves.

    ``curves`` is keyed by (setup or hold, data pin, whether its edge rises). A capture that comes after
    the trial's window shows as an output at its old rail, or on its way. :meth:`true_crossing` is the
    answer a solver must find. Latches, sets and clears follow their function with no constraint of their own.
    """

    cell: Behaviour
    outputs: tuple[FakeOutput, ...]
    curves: dict[tuple[Kind, str, bool], Curve]
    fractions: tuple[float, float] = (0.2, 0.8)

    def __call__(self, trial: Trial) -> Outcome:
        """Return what ``trial`` shows.

        Where the active clock edge at time zero meets one other edge, and their order matters, the curve
        decides. All else follows the zero-delay model, each output a delay after the edge that moves it.
        """
        state = self._stored(trial)
        race = self._race(trial, state)
        loads = dict(trial.loads)
        swings = []
        for output in self.outputs:
            extra = output.per_farad * loads[output.pin]
            delay = output.delay + extra
            if race is None:
                high, times = self._followed(trial, state, output.pin, delay)
            else:
                high, times = race.times(output.pin, delay, output.share)
            swings.append(self._swing(output.pin, high, times, output.transition + extra, trial.until))
        return Outcome(tuple(swings), "formula")

    def true_crossing(
        self,
        kind: Kind,
        pin: str,
        rising: bool,
        limit: float,
        *,
        data_slew: float = 0.0,
        clock_slew: float = 0.0,
        patient: bool = True,
    ) -> float:
        """Return the setup or hold time [s] for the pushout ``limit``: the latest output decides."""
        curve = self.curves[kind, pin, rising]
        share = max(output.share for output in self.outputs)
        found = curve.crossing(limit / share, patient=patient) if share > 0 else curve.cliff
        return found + curve.shift(data_slew, clock_slew)

    def _stored(self, trial: Trial) -> Bits:
        """Return the state after the vectors of the trial's start."""
        vectors = [dict(vector) for vector in trial.start.vectors]
        state = self.cell.after(self.cell.unknown, vectors[0], vectors[0])
        for before, now in pairwise(vectors):
            state = self.cell.after(state, before, now)
        return state

    def _followed(self, trial: Trial, state: Bits, pin: str, delay: float) -> tuple[bool, list[float]]:
        """Return the first level of output ``pin`` and when it crosses [s], by the zero-delay model."""
        inputs = trial.start.rest
        first = level = bool(self.cell.shown(state, inputs)[pin])
        times: list[float] = []
        for move in sorted(trial.moves, key=lambda move: move.at):
            now = inputs | {move.pin: move.rising}
            state = self.cell.after(state, inputs, now)
            inputs = now
            if bool(self.cell.shown(state, inputs)[pin]) is not level:
                level = not level
                times.append(move.at + delay)
        return first, times

    def _race(self, trial: Trial, state: Bits) -> _Race | None:
        clocks = [move for move in trial.moves if move.pin == self.cell.control]
        others = [move for move in trial.moves if move.pin != self.cell.control]
        if len(clocks) != 1 or len(others) != 1 or self.cell.transparent:
            return None
        (clock,), (data,) = clocks, others
        if clock.at != 0.0 or clock.rising is not self.cell.active_high:
            return None
        rest = trial.start.rest
        after = rest | {data.pin: data.rising}
        early, late = self.cell.captured(state, rest), self.cell.captured(state, after)
        if early == late:
            return None
        kind = Kind.SETUP if early == state else Kind.HOLD
        curve = self.curves[kind, data.pin, data.rising]
        offset = (-data.at if kind is Kind.SETUP else data.at) - curve.shift(data.slew, clock.slew)
        final = after | {clock.pin: clock.rising}
        return _Race(
            before=self.cell.shown(state, rest),
            after=self.cell.shown(late if kind is Kind.SETUP else early, final),
            push=curve.push(offset),
            lost=curve.lost_after if offset < curve.lost else None,
        )

    def _swing(self, pin: str, high: bool, times: list[float], transition: float, until: float) -> Swing:
        """Return an output that begins ``high`` or low and crosses at ``times``, each with a linear ramp."""
        lower, upper = self.fractions
        rails = transition / (upper - lower)
        level = float(high)
        last = level
        crossings: list[float] = []
        transitions: list[float | None] = []
        for at in times:
            begin = at - rails / 2
            if until <= begin:
                break
            done = min((until - begin) / rails, 1.0)
            last = level + (1 - 2 * level) * done
            if until >= at:
                crossings.append(at)
                far = begin + rails * (1 - lower if level else upper)
                transitions.append(transition if until >= far else None)
            level = 1 - level
        reached = (
            [last, 0.5, *(1.0 - float(high) for _ in crossings[:-1])] if crossings else [float(high), last]
        )
        return Swing(pin, float(high), last, min(reached), max(reached), tuple(crossings), tuple(transitions))
