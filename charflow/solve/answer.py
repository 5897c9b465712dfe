"""One table entry, with everything needed to doubt it: bracket, status, cost and the trial that decided it."""

from __future__ import annotations

from dataclasses import dataclass

from charflow.plan.arcs import Arc, Kind, edge_name
from charflow.plan.stimulus import Condition


@dataclass(frozen=True)
class Answer:
    """A measured quantity. Times in seconds, load in farads; ``value`` is None where there is no answer.

    ``status`` says how the value was reached, or why there is none. ``bracket`` is the width of the
    interval known to hold the value. ``transients`` counts those first run for this entry. ``key`` names
    the deciding trial.
    """

    corner: str
    quantity: Kind
    pin: str
    pin_edge: str
    related_pin: str
    related_edge: str
    output: str
    output_edge: str
    when: str
    clock_slew: float
    data_slew: float | None
    load: float
    value: float | None
    bracket: float | None
    status: str
    transients: int
    key: str


def answer(
    arc: Arc,
    condition: Condition,
    quantity: Kind,
    value: float | None,
    bracket: float | None,
    status: str,
    transients: int,
    key: str,
) -> Answer:
    """Return the table entry for ``arc`` at ``condition``; pins that do not apply stay empty."""
    constraint = quantity in (Kind.SETUP, Kind.HOLD)
    output, rising = arc.observed[0]
    return Answer(
        corner=condition.corner,
        quantity=quantity,
        pin=arc.pin if constraint else "",
        pin_edge=edge_name(arc.rising) if constraint else "",
        related_pin=arc.related,
        related_edge=edge_name(arc.related_rising),
        output="" if constraint else output,
        output_edge="" if constraint else edge_name(rising),
        when=" & ".join(pin if level else f"!{pin}" for pin, level in arc.when),
        clock_slew=condition.clock_slew,
        data_slew=condition.data_slew,
        load=condition.load,
        value=value,
        bracket=bracket,
        status=status,
        transients=transients,
        key=key,
    )
