"""One transient as a value: what drives the cell, and what was seen. Times in seconds, loads in farads.

Time zero of a trial is the 50 % point of its reference edge (for a flip-flop the active clock edge).
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, replace

Levels = tuple[tuple[str, bool], ...]  # input pin -> level, in the order of the sheet


def levels(values: Mapping[str, bool]) -> Levels:
    """Return ``values`` as the hashable form used in trials."""
    return tuple(values.items())


@dataclass(frozen=True)
class Start:
    """How the cell is brought to rest: input vectors applied in turn, each left alone for a while.

    The last vector is what the inputs hold when the trial begins.
    """

    vectors: tuple[Levels, ...]

    @property
    def rest(self) -> dict[str, bool]:
        """Input levels at the beginning of the trial."""
        return dict(self.vectors[-1])


@dataclass(frozen=True)
class Move:
    """One input edge: its 50 % point ``at`` [s] and its ``slew`` [s] between the sheet's slew fractions."""

    pin: str
    rising: bool
    at: float
    slew: float


@dataclass(frozen=True)
class Trial:
    """One transient of one cell at one corner; ``until`` [s] is where the window ends."""

    corner: str
    start: Start
    moves: tuple[Move, ...]
    loads: tuple[tuple[str, float], ...]
    until: float

    @property
    def key(self) -> str:
        """Return a short digest of what decides the waveforms, for a given cell and corner."""
        return hashlib.sha256(repr(self).encode()).hexdigest()[:24]

    def longer(self, until: float) -> Trial:
        """Return the same trial with another end."""
        return replace(self, until=until)


@dataclass(frozen=True)
class Swing:
    """What one output did. Levels are fractions of supply; times [s] count from the reference edge.

    ``crossings`` are the 50 % points in order, alternating in direction from the ``first`` level;
    ``transitions`` the time between the slew fractions around each of them, None where the output turned
    back before reaching the far fraction. ``low`` and ``high`` are the extremes after the first crossing
    (or of the whole window if there is none).
    """

    pin: str
    first: float
    last: float
    low: float
    high: float
    crossings: tuple[float, ...]
    transitions: tuple[float | None, ...]

    @property
    def starts_high(self) -> bool:
        """Whether the output was above 50 % when the window began."""
        return self.first > 0.5

    def settled(self, rising: bool, margin: float = 0.05) -> bool:
        """Tell whether the output ended within ``margin`` of the rail that ``rising`` leads to."""
        return self.last > 1 - margin if rising else self.last < margin


@dataclass(frozen=True)
class Outcome:
    """What one trial showed, and the ``rung`` of simulator settings that produced it."""

    swings: tuple[Swing, ...]
    rung: str = "standard"

    def of(self, pin: str) -> Swing:
        """Return the swing of output ``pin``."""
        for swing in self.swings:
            if swing.pin == pin:
                return swing
        raise KeyError(pin)
