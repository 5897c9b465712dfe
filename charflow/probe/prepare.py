"""What is settled about a corner before its tables are measured: function proved, rest chosen."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from charflow.errors import FunctionError, TrialError
from charflow.plan.arcs import Arc, Kind
from charflow.plan.behaviour import behaviour_of
from charflow.plan.circuit import Circuit
from charflow.plan.derive import arcs_of
from charflow.plan.stimulus import Condition, ramp_time, relaxed
from charflow.plan.trial import Outcome, Trial
from charflow.probe.function import Mismatch, check_function
from charflow.probe.rest import Rest, leaks, proved_rest, shortest_working, stated_rest
from charflow.sheet import Sheet

MakeEvaluate = Callable[[Circuit], Callable[[Trial], Outcome]]


@dataclass(frozen=True)
class Prepared:
    """A circuit with its rest time set, and how that was proved."""

    circuit: Circuit
    rest: Rest


def prepare(make: MakeEvaluate, sheet: Sheet, circuit: Circuit) -> Prepared:
    """Prove the function of ``sheet`` at the corner of ``circuit`` and choose the rest time.

    ``make`` turns a circuit into a function from trial to outcome. Raises :class:`Mismatch` where
    the cell does something else than the sheet says, :class:`FunctionError` where it never comes to rest.
    """
    cell = behaviour_of(sheet)

    def works(rest: float) -> int:
        try:
            return check_function(make(circuit.rested(rest)), cell, sheet, circuit.corner, until=rest)
        except Mismatch as mismatch:
            mismatch.rest = rest
            raise

    def delays(rest: float) -> tuple[float, ...]:
        evaluate = make(circuit.rested(rest))
        return tuple(_delay(evaluate, sheet, arc, circuit.corner, rest) for arc in arcs)

    arcs = [arc for arc in arcs_of(sheet) if arc.kind in (Kind.CLK_TO_Q, Kind.GATE_TO_Q)]
    stated = sheet.measure.rest
    if stated is not None:
        try:
            rest = stated_rest(delays, stated, works(stated))
        except Mismatch as mismatch:
            raise _leak(mismatch, stated) if leaks(works, stated) else mismatch from None
    else:
        first, count = shortest_working(works)
        rest = proved_rest(delays, first, count)
    return Prepared(circuit.rested(rest.seconds), rest)


def _delay(evaluate: Callable[[Trial], Outcome], sheet: Sheet, arc: Arc, corner: str, until: float) -> float:
    axes = sheet.axes
    slew = axes.clock_slew[len(axes.clock_slew) // 2]
    condition = Condition(corner, slew, None, axes.constraint_load)
    end = until + ramp_time(slew, sheet.measure.slew_fractions)
    outcome = evaluate(relaxed(sheet, arc, condition, end))
    (pin, rising), *_ = arc.observed
    swing = outcome.of(pin)
    if not swing.settled(rising) or not swing.crossings:
        raise TrialError(f"{pin} does not {'rise' if rising else 'fall'} within {end:g} s of the clock edge")
    return swing.crossings[-1]


def _leak(mismatch: Mismatch, rest: float) -> Mismatch:
    """Return the mismatch in the words of a cell that forgets."""
    error = FunctionError(
        f"the cell loses what it stores within a rest of {rest:g} s: {mismatch.error.message}",
        where=mismatch.error.where,
        todo="It is dynamic: give measure.rest the longest pause its clock ever makes.",
    )
    leak = Mismatch(error, mismatch.flip)
    leak.rest = rest
    return leak
