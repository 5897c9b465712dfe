"""Setup and hold as the crossing of pushout over the data-to-clock offset."""

from __future__ import annotations

from dataclasses import dataclass

from charflow.errors import TrialError
from charflow.plan.arcs import Arc, Kind
from charflow.plan.stimulus import Condition, at_offset, ramp_time
from charflow.plan.trial import Trial
from charflow.sheet import Sheet
from charflow.solve.crossing import Crossing, Guess, Search
from charflow.solve.reference import Evaluate
from charflow.solve.verdict import NotSettled, Reference, pushout

PATIENCE = 4  # a window is lengthened at most this many times, each time doubled
LATE = 8.0  # how many times longer the passing side of a cliff is watched before it is believed


@dataclass(frozen=True)
class Constraint:
    """A setup or hold time [s], the search that found it, and the trial that decided it."""

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
    """Return the setup or hold time of ``arc`` at ``condition``.

    Every output that switches must capture and arrive within (1 + pushout) of its reference. The answer
    is the crossing next to the safe side. Raises :class:`TrialError` where the reference is not positive.
    """
    slowest = max(reference.delays.values())
    for pin, delay in reference.delays.items():
        if delay <= 0:
            raise TrialError(
                f"the reference delay of {pin} is {delay * 1e12:.3f} ps, so no pushout can be a fraction of it",
                todo="The clock slew is so slow that the output moves before the clock's 50 % point.",
            )
    fractions, limit = sheet.measure.slew_fractions, sheet.measure.pushout
    deciding: dict[float, Trial] = {}

    def measure(offset: float, longer: float = 1.0) -> float | None:
        until = window(sheet, arc, condition, reference, offset, longer)
        for _ in range(PATIENCE):
            trial = deciding[offset] = at_offset(sheet, arc, condition, offset, until)
            try:
                return pushout(arc, evaluate(trial), reference)
            except NotSettled:
                until *= 2
        return None

    ramps = ramp_time(condition.clock_slew, fractions) + ramp_time(condition.data_slew or 0.0, fractions)
    reach = slowest + ramps / 2
    search = Search(
        measure,
        limit,
        sheet.measure.resolution,
        safe=reach,
        unsafe=-reach,
        lookout=(reach / 2,) if lookout else (),
        confirm=lambda offset: measure(offset, longer=LATE),
    )
    crossing = search.run(guess)
    return Constraint(
        crossing.value, crossing, deciding.get(crossing.passes) if crossing.value is not None else None
    )


def window(
    sheet: Sheet, arc: Arc, condition: Condition, reference: Reference, offset: float, longer: float = 1.0
) -> float:
    """Return where [s] the transient of a trial at ``offset`` [s] may end.

    After the last ramp there is time for every output to be about as late again as the pushout allows,
    and to reach its rail twice over; so a capture that comes too late is still seen and measured.
    """
    fractions = sheet.measure.slew_fractions
    after = -offset if arc.kind is Kind.SETUP else offset  # when the data edge comes
    ramps = (
        ramp_time(condition.clock_slew, fractions) / 2,
        after + ramp_time(condition.data_slew or 0.0, fractions) / 2,
    )
    slowest, slowly = max(reference.delays.values()), max(reference.transitions.values())
    return max(ramps) + longer * (2 * (1 + sheet.measure.pushout) * slowest + 2 * slowly)
