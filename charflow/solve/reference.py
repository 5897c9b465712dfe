"""Clock-to-output delay and output transition with data stable long before and long after the edge."""

from __future__ import annotations

from collections.abc import Callable

from charflow.errors import TrialError
from charflow.plan.arcs import Arc
from charflow.plan.stimulus import Condition, ramp_time, relaxed
from charflow.plan.trial import Outcome, Trial
from charflow.sheet import Sheet
from charflow.solve.verdict import NotSettled, Reference, begins_at_rest, delay_of

Evaluate = Callable[[Trial], Outcome]

FIRST_WINDOW = 1e-9  # s; doubled until every output is at its rail
LONGEST_WINDOW = 1e-5


def reference(evaluate: Evaluate, sheet: Sheet, arc: Arc, condition: Condition) -> Reference:
    """Return the relaxed delays and transitions [s] of the arc's outputs.

    Raises :class:`TrialError` where an output does not move, or its delay is not positive (the pushout is
    relative to it).
    """
    ramp = ramp_time(condition.clock_slew, sheet.measure.slew_fractions) / 2
    until = FIRST_WINDOW + ramp
    while True:
        outcome = evaluate(relaxed(sheet, arc, condition, until))
        try:
            delays, transitions = _read(arc, outcome)
        except (NotSettled, TrialError) as error:
            until = 2 * until
            if until > LONGEST_WINDOW:
                if isinstance(error, NotSettled):
                    names = ", ".join(pin for pin, _ in arc.observed)
                    raise TrialError(f"{names} did not settle within {LONGEST_WINDOW:g} s") from None
                raise
        else:
            return Reference(delays, transitions, until)


def _read(arc: Arc, outcome: Outcome) -> tuple[dict[str, float], dict[str, float]]:
    delays: dict[str, float] = {}
    transitions: dict[str, float] = {}
    for pin, rising in arc.observed:
        swing = outcome.of(pin)
        begins_at_rest(swing, rising)
        delay = delay_of(swing, rising)
        if delay is None:
            raise TrialError(
                f"{pin} does not {'rise' if rising else 'fall'} after the clock edge, data relaxed"
            )
        transition = swing.transitions[-1]
        if transition is None:
            raise NotSettled
        delays[pin], transitions[pin] = delay, transition
    return delays, transitions
