"""The cell's function, proved by simulation before any timing: every state, every input edge.

For each stored state and input vector that can be reached, each input is flipped once, alone. The
zero-delay model says what every output must show at the start and at the end; the transient says what it
does. So a capture at the wrong edge, a transparent moment, a leak or a dead clock all show.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

from charflow.errors import FunctionError, TrialError
from charflow.plan.behaviour import Behaviour, Bits
from charflow.plan.trial import Move, Outcome, Swing, Trial
from charflow.sheet import Sheet

Evaluate = Callable[[Trial], Outcome]
TOLERANCE = 0.1  # of supply: how near its rail an output must begin and end


@dataclass(frozen=True)
class Flip:
    """One input flipped from a known state: the trial and what each output must show before and after."""

    words: str
    trial: Trial
    before: tuple[tuple[str, bool | None], ...]
    after: tuple[tuple[str, bool | None], ...]


class Mismatch(Exception):  # not an error of its own: it carries one to where it can be shown
    """A flip that does not do what the sheet says: the ``error`` for the user and the ``flip`` to look at."""

    def __init__(self, error: FunctionError, flip: Flip) -> None:
        super().__init__(str(error))
        self.error = error
        self.flip = flip
        self.rest = 0.0  # s, where the caller knows it


def flips(cell: Behaviour, sheet: Sheet, corner: str, until: float) -> Iterator[Flip]:
    """Yield every single-input flip of the cell. ``until`` [s] is the window after the flip."""
    slew = sheet.axes.clock_slew[0]
    loads = tuple((pin, sheet.axes.load[-1]) for pin in sheet.outputs)
    for state in cell.states():
        for vector in cell.vectors():
            start = cell.reach(state, vector)
            if start is None:
                continue
            for pin in cell.inputs:
                now = {**vector, pin: not vector[pin]}
                after = cell.after(state, vector, now)
                yield Flip(
                    words=_words(cell, state, vector, pin, now[pin]),
                    trial=Trial(corner, start, (Move(pin, now[pin], 0.0, slew),), loads, until),
                    before=tuple(cell.shown(state, vector).items()),
                    after=tuple(cell.shown(after, now).items()),
                )


def _words(cell: Behaviour, state: Bits, vector: dict[str, bool], pin: str, rising: bool) -> str:
    side = ", ".join(f"{p}={int(level)}" for p, level in vector.items() if p != pin)
    stored = ", ".join(
        f"{name}={int(bool(bit))}" for (name, _), bit in zip(cell.next_state, state, strict=True)
    )
    return f"stored {stored}" + (f", {side}" if side else "") + f": {pin} {'rises' if rising else 'falls'}"


def check_function(evaluate: Evaluate, cell: Behaviour, sheet: Sheet, corner: str, until: float) -> int:
    """Prove the cell's function at one corner and return how many flips were tried.

    Raises :class:`Mismatch` at the first vector that does not do what the sheet says, and
    :class:`FunctionError` where an output should never move at all.
    """
    tried = 0
    moved: set[str] = set()
    for flip in flips(cell, sheet, corner, until):
        try:
            outcome = evaluate(flip.trial)
        except TrialError as error:
            raise error.at(f"checking the function, {flip.words}") from None
        tried += 1
        for swing in outcome.swings:
            try:
                _compare(flip, swing, dict(flip.before)[swing.pin], dict(flip.after)[swing.pin], corner)
            except FunctionError as error:
                raise Mismatch(error, flip) from None
            if dict(flip.before)[swing.pin] != dict(flip.after)[swing.pin]:
                moved.add(swing.pin)
    still = [pin for pin in sheet.outputs if pin not in moved]
    if still:
        raise FunctionError(
            f"the output {still[0]} never moves, by what the sheet says", where=(f"corner {corner!r}",)
        )
    return tried


def _compare(flip: Flip, swing: Swing, before: bool | None, after: bool | None, corner: str) -> None:
    where = (flip.words, f"corner {corner!r}")
    if before is not None and abs(swing.first - before) > TOLERANCE:
        raise FunctionError(
            f"{swing.pin} should show {int(before)} before this, but is at {swing.first:.2f} of supply",
            where=where,
            todo=_TODO,
        )
    if after is None:
        return
    if abs(swing.last - after) > TOLERANCE:
        raise FunctionError(
            f"expected {swing.pin}={int(after)} afterwards, saw {swing.last:.2f} of supply",
            where=where,
            todo=_TODO,
        )
    if before == after and swing.crossings:
        raise FunctionError(
            f"{swing.pin} should stay at {int(after)}, but crossed half of supply "
            f"{len(swing.crossings)} time(s), first {swing.crossings[0] * 1e12:.1f} ps after the edge",
            where=where,
            todo=_TODO,
        )


_TODO = "Check the pins' roles, 'active' and 'shows', and next_state; or the netlist does something else."
