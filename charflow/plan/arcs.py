"""The timing questions that can be asked of a register, and what each observes.

:mod:`charflow.plan.derive` finds which of them a cell has.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from charflow.plan.trial import Start


class Kind(StrEnum):
    """What an arc asks for; the values are the names used in ``tables.csv``."""

    CLK_TO_Q = "clk_to_q"
    GATE_TO_Q = "gate_to_q"
    DATA_TO_Q = "data_to_q"
    ASYNC_TO_Q = "async_to_q"
    TRANSITION = "transition"
    SETUP = "setup"
    HOLD = "hold"
    RECOVERY = "recovery"
    REMOVAL = "removal"
    PULSE_WIDTH = "pulse_width"
    MIN_PERIOD = "min_period"


DELAYS = frozenset({Kind.CLK_TO_Q, Kind.GATE_TO_Q, Kind.DATA_TO_Q, Kind.ASYNC_TO_Q})
BEFORE = frozenset({Kind.SETUP, Kind.RECOVERY})  # the edge must come before the related one
AFTER = frozenset({Kind.HOLD, Kind.REMOVAL})  # the edge must come after it
WIDTHS = frozenset({Kind.PULSE_WIDTH, Kind.MIN_PERIOD})  # a width of the pin's own waveform
PARTNER = {Kind.HOLD: Kind.SETUP, Kind.REMOVAL: Kind.RECOVERY}


def edge_name(rising: bool) -> str:
    """Return the word for an edge."""
    return "rise" if rising else "fall"


@dataclass(frozen=True)
class Arc:
    """One timing question.

    ``pin`` and ``rising`` are what moves (the data pin of a constraint, the input of a delay, the first
    edge of a pulse), ``related`` and ``related_rising`` the reference edge. ``observed`` are the outputs
    that must switch, and where to; ``quiet`` those that must stay, and at which level. Delays count from
    the related edge, or with ``since_pin`` from the pin's own edge (a latch that is open). With
    ``pulsed`` each observed output must make a whole pulse and come back.

    ``start`` is the rest the trial begins from, ``relaxed`` the rest with the right data there for long,
    ``contrary`` the rest with the wrong data (it tells how fast an output that must stay would move).
    ``when`` are the levels of side inputs, ``neighbours`` tells of the other bits of a multi-bit register.
    """

    kind: Kind
    pin: str
    rising: bool
    related: str
    related_rising: bool
    observed: tuple[tuple[str, bool], ...]
    start: Start
    relaxed: Start
    when: tuple[tuple[str, bool], ...] = ()
    quiet: tuple[tuple[str, bool], ...] = ()
    contrary: Start | None = None
    since_pin: bool = False
    pulsed: bool = False
    neighbours: str = ""
    data: tuple[str, bool] | None = None  # of a minimum period: the data pin and what is captured last

    @property
    def side(self) -> str:
        """The side condition as a logic expression, with what the neighbours do."""
        text = " & ".join(pin if level else f"!{pin}" for pin, level in self.when)
        return f"{text}; {self.neighbours}" if text and self.neighbours else text or self.neighbours

    @property
    def words(self) -> str:
        """Return the question in words a person can check."""
        moves = [
            f"{pin} {'pulses' if self.pulsed else 'rises' if up else 'falls'}" for pin, up in self.observed
        ]
        stays = [f"{pin} stays {int(level)}" for pin, level in self.quiet]
        outputs = ", ".join(moves + stays)
        side = f", when {self.side}" if self.side else ""
        edge = f"{self.related} {edge_name(self.related_rising)}"
        mover = f"{self.pin} {edge_name(self.rising)}"
        if self.kind in DELAYS:
            return f"delay and transition: {mover} until {outputs}{side}"
        if self.kind in BEFORE:
            return f"{self.kind.value}: {mover} this long before {edge}; {outputs}{side}"
        if self.kind in AFTER:
            return f"{self.kind.value}: {mover} this long after {edge}; {outputs}{side}"
        if self.kind is Kind.MIN_PERIOD:
            return f"minimum period of {self.pin}, {self.data and self.data[0]} toggling; {outputs}{side}"
        return f"minimum {'high' if self.rising else 'low'} pulse of {self.pin}; {outputs}{side}"
