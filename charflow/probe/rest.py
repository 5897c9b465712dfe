"""How long is long: the rest before a trial, doubled until doubling it once more changes nothing.

A register at rest keeps moving slowly: internal nodes that no transistor drives creep by leakage, and
the clock-to-output delay follows them a little. The rest is part of the definition of a measured time,
so it is found by evidence, recorded, and the same for every trial of a corner.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from charflow.errors import FunctionError, TrialError
from charflow.plan.trial import Outcome, Trial
from charflow.probe.function import Mismatch

FIRST_REST = 1e-9  # s
LONGEST_REST = 1e-6
ENOUGH = 1e-3  # relative change of a delay on doubling the rest
_STEP = 4.0

Evaluate = Callable[[Trial], Outcome]


@dataclass(frozen=True)
class Rest:
    """The rest time [s] in use and how far the delays moved, relative, when it was reached by doubling."""

    seconds: float
    moved: float
    flips: int


def shortest_working(works: Callable[[float], int], first: float = FIRST_REST) -> tuple[float, int]:
    """Return the shortest rest [s] of a coarse ladder at which the function check ``works``, and its count.

    Raises the check's own error from the longest rest tried: then it is the cell, not the patience.
    """
    rest = first
    while True:
        try:
            return rest, works(rest)
        except (Mismatch, FunctionError, TrialError):
            rest *= _STEP
            if rest > LONGEST_REST:
                raise


def leaks(works: Callable[[float], int], rest: float) -> bool:
    """Tell whether a cell that fails its function check after ``rest`` [s] passes after a shorter one."""
    shorter = rest / _STEP
    while shorter >= FIRST_REST / 2:
        try:
            works(shorter)
        except (Mismatch, TrialError):
            shorter /= _STEP
        else:
            return True
    return False


def proved_rest(delays: Callable[[float], tuple[float, ...]], rest: float, flips: int) -> Rest:
    """Return the rest [s] at which doubling moved every relaxed delay by less than :data:`ENOUGH`.

    ``delays`` returns the relaxed delays [s] after resting that long. Raises :class:`FunctionError` where
    they never come to rest: the cell does not hold its state.
    """
    before = delays(rest)
    while rest <= LONGEST_REST:
        rest *= 2
        now = delays(rest)
        moved = max(abs(a / b - 1) for a, b in zip(now, before, strict=True))
        if moved < ENOUGH:
            return Rest(rest, moved, flips)
        before = now
    raise FunctionError(
        f"the relaxed delay still moves by {moved:.2%} when the rest before it is doubled to {rest:g} s",
        todo="The cell leaks away what it stores; it is dynamic, or a model is wrong.",
    )


def stated_rest(delays: Callable[[float], tuple[float, ...]], rest: float, flips: int) -> Rest:
    """Return the rest [s] the sheet states, with how far half of it would move the delays."""
    now, before = delays(rest), delays(rest / 2)
    return Rest(rest, max(abs(a / b - 1) for a, b in zip(now, before, strict=True)), flips)
