"""One table entry, with everything needed to doubt it: bracket, status, cost and deciding trial."""

from __future__ import annotations

from dataclasses import dataclass

from charflow.plan.arcs import DELAYS, WIDTHS, Arc, Kind, edge_name
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
    clock_slew: float | None
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
    delay = arc.kind in DELAYS
    width = arc.kind in WIDTHS
    output, rising = arc.observed[0] if arc.observed and (delay or width) else ("", False)
    return Answer(
        corner=condition.corner,
        quantity=quantity,
        pin="" if delay else arc.pin,
        pin_edge="" if delay else edge_name(arc.rising),
        related_pin="" if width else arc.related,
        related_edge="" if width else edge_name(arc.related_rising),
        output=output,
        output_edge=edge_name(rising) if output else "",
        when=arc.side,
        clock_slew=condition.clock_slew,
        data_slew=condition.data_slew,
        load=condition.load,
        value=value,
        bracket=bracket,
        status=status,
        transients=transients,
        key=key,
    )
