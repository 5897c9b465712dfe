"""What flows into a cell during one transient, and at rest. Charge in coulombs, current in amperes."""

from __future__ import annotations

from dataclasses import dataclass

from charflow.plan.trial import Swing


@dataclass(frozen=True)
class Flow:
    """The charge [C] each source delivered into the cell, by pin, less what leaks at the end throughout.

    ``still`` tells whether the currents had come to rest when the window ended.
    """

    charges: dict[str, float]
    still: bool
    swings: tuple[Swing, ...]


@dataclass(frozen=True)
class Standing:
    """A cell at rest: current [A] each source delivers and output levels as fractions of supply."""

    currents: dict[str, float]
    levels: dict[str, float]
