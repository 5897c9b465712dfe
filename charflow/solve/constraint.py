"""Setup, hold and their kin as the crossing of pushout over the offset between two edges."""

from __future__ import annotations

from dataclasses import dataclass

from charflow.errors import TrialError
from charflow.plan.arcs import WIDTHS, Arc, Kind
from charflow.plan.stimulus import Condition, at_offset, pin_time, ramp_time
from charflow.plan.trial import Trial
from charflow.sheet import Sheet
from charflow.solve.crossing import Crossing, Ending, Guess, Sample, Search
from charflow.solve.reference import Evaluate
from charflow.solve.verdict import NotSettled, Reference, pushout

PATIENCE = 4  # a window is lengthened at most this many times, each time doubled
LATE = 8.0  # how many times longer the passing side of a cliff is watched before it is believed


@dataclass(frozen=True)
class Constraint:
    """A constrained time [s], the search that found it, and the trial that decided it."""

    value: float | None
    crossing: Crossing
    deciding: Trial | None


def solve_constraint(
    evaluate: Evaluate,
    sheet: Sheet,
    arc: Arc,
    condition: Condition,
    reference: Reference,
    guess: Guess | None = None,
    lookout: bool = True,
) -> Constraint:
    """Return the setup, hold, recovery, removal, pulse width or period of ``arc`` at ``condition``.

    Every output that switches must capture and arrive within (1 + pushout) of its reference, every output
    that must stay must stay within the glitch allowance. The answer is the crossing next to the safe side.
    Raises :class:`TrialError` where a reference delay is not positive.
    """
    for pin, delay in reference.delays.items():
        if delay <= 0:
            raise TrialError(
                f"the reference delay of {pin} is {delay * 1e12:.3f} ps; no pushout is a fraction of that",
                todo="The input slew is so slow that the output moves before the input's 50 % point.",
            )
    limit = sheet.measure.pushout
    deciding: dict[float, Trial] = {}

    def measure(offset: float, longer: float = 1.0) -> float | None:
        until = window(sheet, arc, condition, reference, offset, longer)
        for _ in range(PATIENCE):
            trial = deciding[offset] = at_offset(sheet, arc, condition, offset, until)
            since = pin_time(arc, offset) if arc.since_pin else 0.0
            try:
                return pushout(arc, evaluate(trial), reference, sheet.measure.glitch, limit, since)
            except NotSettled:
                until *= 2
        return None

    clock, data = _ramps(sheet, condition)
    reach = reference.slowest + (clock + data) / 2
    search = Search(
        measure,
        limit,
        sheet.measure.resolution,
        safe=reach,
        unsafe=-reach,
        lookout=(reach / 2,) if lookout else (),
        confirm=lambda offset: measure(offset, longer=LATE),
    )
    if arc.kind in WIDTHS:
        return _width(search, arc, deciding, clock, reference)
    crossing = search.run(guess)
    return Constraint(
        crossing.value, crossing, deciding.get(crossing.passes) if crossing.value is not None else None
    )


def _width(
    search: Search, arc: Arc, deciding: dict[float, Trial], ramp: float, reference: Reference
) -> Constraint:
    """Return the least width of a pulse whose ramps meet the rails, or of a period made of two such."""
    least = ramp if arc.kind is Kind.PULSE_WIDTH else 2 * ramp
    search.lookout = ()
    first = search.measure(least)
    if first is not None and first <= search.limit:
        sample = (Sample(least, first),)
        return Constraint(least, Crossing(Ending.RAMPS, least, least, least, sample, 0.0), deciding[least])
    search.samples.append(Sample(least, first))
    search.safe = least + 4 * (reference.slowest + ramp)
    search.unsafe = least
    crossing = search.run(None)
    return Constraint(
        crossing.value, crossing, deciding.get(crossing.passes) if crossing.value is not None else None
    )


def _ramps(sheet: Sheet, condition: Condition) -> tuple[float, float]:
    """Return the rail-to-rail times [s] of the clock's and the data's ramps."""
    fractions = sheet.measure.slew_fractions
    return ramp_time(condition.clock_slew or 0.0, fractions), ramp_time(condition.data_slew or 0.0, fractions)


def window(
    sheet: Sheet, arc: Arc, condition: Condition, reference: Reference, offset: float, longer: float = 1.0
) -> float:
    """Return where [s] the transient of a trial at ``offset`` [s] may end.

    After the last ramp there is time for every output to be about as late again as the pushout allows,
    and to reach its rail twice over; so a capture that comes too late is still seen and measured.
    """
    trial = at_offset(sheet, arc, condition, offset, 0.0)
    ends = (move.at + ramp_time(move.slew, sheet.measure.slew_fractions) / 2 for move in trial.moves)
    return max(ends) + longer * (2 * (1 + sheet.measure.pushout) * reference.slowest + 2 * reference.slowly)
