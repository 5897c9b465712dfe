"""Trials, outcomes and answers as plain JSON values and back, exactly."""

from __future__ import annotations

from dataclasses import asdict, astuple
from typing import Any

from charflow.plan.arcs import Kind
from charflow.plan.trial import Move, Outcome, Start, Swing, Trial
from charflow.solve.answer import Answer
from charflow.solve.row import Hint, RowResult


def trial_to(trial: Trial) -> dict[str, Any]:
    """Return ``trial`` as JSON values."""
    return asdict(trial)


def trial_from(raw: dict[str, Any]) -> Trial:
    """Return the trial that :func:`trial_to` wrote."""
    vectors = tuple(tuple((pin, bool(level)) for pin, level in vector) for vector in raw["start"]["vectors"])
    return Trial(
        corner=raw["corner"],
        start=Start(vectors),
        moves=tuple(Move(**move) for move in raw["moves"]),
        loads=tuple((pin, load) for pin, load in raw["loads"]),
        until=raw["until"],
    )


def outcome_to(outcome: Outcome) -> list[Any]:
    """Return ``outcome`` as JSON values."""
    return [[list(astuple(swing)) for swing in outcome.swings], outcome.rung]


def outcome_from(raw: list[Any]) -> Outcome:
    """Return the outcome that :func:`outcome_to` wrote."""
    swings, rung = raw
    return Outcome(tuple(_swing(*item) for item in swings), rung)


def _swing(
    pin: str,
    first: float,
    last: float,
    low: float,
    high: float,
    crossings: list[float],
    transitions: list[float | None],
) -> Swing:
    return Swing(pin, first, last, low, high, tuple(crossings), tuple(transitions))


def answer_from(raw: dict[str, Any]) -> Answer:
    """Return the answer whose fields are ``raw``."""
    return Answer(**{**raw, "quantity": Kind(raw["quantity"])})


def row_to(row: RowResult) -> dict[str, Any]:
    """Return a solved row as JSON values."""
    return {
        "clock_slew": row.clock_slew,
        "answers": [asdict(item) for item in row.answers],
        "hints": [[number, slew, *astuple(hint)] for (number, slew), hint in row.hints.items()],
    }


def row_from(raw: dict[str, Any]) -> RowResult:
    """Return the row that :func:`row_to` wrote."""
    hints = {(number, slew): Hint(*rest) for number, slew, *rest in raw["hints"]}
    return RowResult(raw["clock_slew"], tuple(answer_from(a) for a in raw["answers"]), hints)
