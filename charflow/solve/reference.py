"""Clock-to-output delay and output transition with data stable long before and long after the edge."""

from __future__ import annotations

from collections.abc import Callable

from charflow.errors import TrialError
from charflow.plan.arcs import Arc
from charflow.plan.stimulus import Condition, contrary, ramp_time, relaxed
from charflow.plan.trial import Outcome, Trial
from charflow.sheet import Sheet
from charflow.solve.verdict import NotSettled, Reference, begins_at_rest, delay_of, excursion

Evaluate = Callable[[Trial], Outcome]

FIRST_WINDOW = 1e-9  # s; doubled until every output is at its rail
LONGEST_WINDOW = 1e-5


def reference(evaluate: Evaluate, sheet: Sheet, arc: Arc, condition: Condition) -> Reference:
    """Return the relaxed delays and transitions [s] of the arc's outputs.

    Raises :class:`TrialError` where an output does not move that should, or one moves that should stay.
    """
    (move,) = relaxed(sheet, arc, condition, 0.0).moves
    until = FIRST_WINDOW + ramp_time(move.slew, sheet.measure.slew_fractions) / 2
    while True:
        outcome = evaluate(relaxed(sheet, arc, condition, until))
        for pin, rising in arc.observed:
            begins_at_rest(outcome.of(pin), rising)
        try:
            return _read(arc, outcome, until, sheet.measure.glitch)
        except _StaysError:
            return _scaled(evaluate, sheet, arc, condition, until)
        except (NotSettled, TrialError) as error:
            until = 2 * until
            if until > LONGEST_WINDOW:
                if isinstance(error, NotSettled):
                    names = ", ".join(pin for pin, _ in arc.observed)
                    raise TrialError(f"{names} did not settle within {LONGEST_WINDOW:g} s") from None
                raise


class _StaysError(Exception):
    """Internal: nothing moves, as it should; the time scale must come from another trial."""


def _read(arc: Arc, outcome: Outcome, until: float, glitch: float) -> Reference:
    delays: dict[str, float] = {}
    transitions: dict[str, float] = {}
    for pin, rising in arc.observed:
        swing = outcome.of(pin)
        delay = delay_of(swing, rising)
        if delay is None:
            edge = f"{arc.related} {'rises' if arc.related_rising else 'falls'}"
            raise TrialError(f"{pin} does not {'rise' if rising else 'fall'} after {edge}, all else relaxed")
        transition = swing.transitions[-1]
        if transition is None:
            raise NotSettled
        delays[pin], transitions[pin] = delay, transition
    excursions = {pin: excursion(outcome.of(pin), level) for pin, level in arc.quiet}
    for pin, found in excursions.items():
        if found > glitch:
            raise TrialError(f"{pin} should stay, but moves by {found:.0%} of supply with everything relaxed")
    if not delays:
        raise _StaysError
    return Reference(delays, transitions, until)


def _scaled(evaluate: Evaluate, sheet: Sheet, arc: Arc, condition: Condition, until: float) -> Reference:
    """Return the reference of an arc whose outputs all stay, with the time in which they would move."""
    for trial in contrary(sheet, arc, condition, until):
        swings = [evaluate(trial).of(pin) for pin, _ in arc.quiet]
        late = [swing.crossings[-1] for swing in swings if swing.crossings]
        slow = [t for swing in swings for t in swing.transitions if t is not None]
        if late:
            return Reference({}, {}, until, max(*late, *slow, 1e-12))
    raise TrialError(f"no trial moves {arc.quiet[0][0]}, so there is no time scale to search on")
