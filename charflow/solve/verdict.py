"""Reading outcomes: did every output that should switch capture and hold, and how late was it."""

from __future__ import annotations

from dataclasses import dataclass

from charflow.errors import TrialError
from charflow.plan.arcs import Arc, Kind
from charflow.plan.trial import Outcome, Swing


@dataclass(frozen=True)
class Reference:
    """What a relaxed trial shows, times in seconds: delay and transition of each output that moves.

    ``scale`` is a time in which the cell's outputs move, ``until`` the window that was needed.
    """

    delays: dict[str, float]
    transitions: dict[str, float]
    until: float
    scale: float = 0.0

    @property
    def slowest(self) -> float:
        """The largest delay [s], or the time scale where no output should move."""
        return max(self.delays.values(), default=self.scale)

    @property
    def slowly(self) -> float:
        """The longest transition [s], or the time scale where no output should move."""
        return max(self.transitions.values(), default=self.scale)


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


def excursion(swing: Swing, level: bool) -> float:
    """Return how far an output that must stay at ``level`` moved towards the other rail, of supply."""
    if swing.crossings:
        return 1.0
    return max(0.0, 1 - swing.low if level else swing.high)


def pushout(
    arc: Arc,
    outcome: Outcome,
    reference: Reference,
    glitch: float = 0.1,
    limit: float = 0.1,
    since: float = 0.0,
) -> float | None:
    """Return the largest delay over its reference, less one, among the observed outputs.

    ``since`` [s] is the edge the delay counts from. An output that must stay, and a pulse that must be
    whole, count by how much of the ``glitch`` allowance (a fraction of supply) they use, on the scale of
    the pushout ``limit``. None where an output did not capture or did not hold. Raises
    :class:`TrialError` where an output did not begin at the old value: then the trial says nothing.
    """
    worst: float | None = None
    for pin, rising in arc.observed:
        swing = outcome.of(pin)
        if (
            arc.kind is Kind.MIN_PERIOD
        ):  # it shows what the last edge captures, gives it up, and takes it again
            begins_at_rest(swing, not rising)
            if len(swing.crossings) < 2:
                return None
        else:
            begins_at_rest(swing, rising)
        push = (
            _pulse(swing, rising, reference, glitch, limit, since)
            if arc.pulsed
            else _late(swing, rising, reference, since)
        )
        if push is None:
            return None
        worst = push if worst is None else max(worst, push)
    for pin, level in arc.quiet:
        swing = outcome.of(pin)
        begins_at_rest(swing, not level)
        worst = max(worst or 0.0, excursion(swing, level) / glitch * limit)
    return worst


def _late(swing: Swing, rising: bool, reference: Reference, since: float) -> float | None:
    delay = delay_of(swing, rising)
    return None if delay is None else (delay - since) / reference.delays[swing.pin] - 1


def _pulse(
    swing: Swing, rising: bool, reference: Reference, glitch: float, limit: float, since: float
) -> float | None:
    """Return how late a pulse is, or how much of its height is missing, whichever is worse."""
    if not swing.settled(not rising):
        raise NotSettled
    if len(swing.crossings) < 2:
        return None
    missing = 1 - swing.high if rising else swing.low
    late = (swing.crossings[0] - since) / reference.delays[swing.pin] - 1
    return max(late, missing / glitch * limit)


def begins_at_rest(swing: Swing, rising: bool) -> None:
    """Raise :class:`TrialError` unless the output begins at the rail it is to leave."""
    if abs(swing.first - (not rising)) > 0.1:
        level = "low" if rising else "high"
        raise TrialError(
            f"{swing.pin} should begin {level}, but begins at {swing.first:.3f} of supply",
            todo="The cell did not keep what it stored until the trial began.",
        )
