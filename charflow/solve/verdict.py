"""Reading outcomes: did every output that should switch capture and hold, and how late was it."""

from __future__ import annotations

from dataclasses import dataclass

from charflow.errors import TrialError
from charflow.plan.arcs import Arc
from charflow.plan.trial import Outcome, Swing


@dataclass(frozen=True)
class Reference:
    """Clock-to-output delay and output transition [s] with data relaxed, and the window [s] they needed."""

    delays: dict[str, float]
    transitions: dict[str, float]
    until: float


class NotSettled(Exception):
    """Internal: an output is between the rails at the end of the window, which must be longer."""


def delay_of(swing: Swing, rising: bool) -> float | None:
    """Return the delay [s] of the output's final move to the rail of ``rising``; None if it is not there.

    An output that moved, came back and moved again is as late as its last crossing.
    Raises :class:`NotSettled` where the window ends with the output between the rails.
    """
    if not swing.settled(rising) and not swing.settled(not rising):
        raise NotSettled
    if not swing.settled(rising) or not swing.crossings:
        return None
    return swing.crossings[-1]


def pushout(arc: Arc, outcome: Outcome, reference: Reference) -> float | None:
    """Return the largest delay over its reference, less one, among the observed outputs.

    None where one of them did not capture or did not hold. Raises :class:`TrialError` where an output
    did not begin at the old value: then the trial says nothing.
    """
    worst: float | None = None
    for pin, rising in arc.observed:
        swing = outcome.of(pin)
        begins_at_rest(swing, rising)
        delay = delay_of(swing, rising)
        if delay is None:
            return None
        push = delay / reference.delays[pin] - 1
        worst = push if worst is None else max(worst, push)
    return worst


def begins_at_rest(swing: Swing, rising: bool) -> None:
    """Raise :class:`TrialError` unless the output begins at the rail it is to leave."""
    if abs(swing.first - (not rising)) > 0.1:
        raise TrialError(
            f"{swing.pin} should begin {'low' if rising else 'high'}, but begins at {swing.first:.3f} of supply",
            todo="The cell did not keep what it stored until the trial began.",
        )
