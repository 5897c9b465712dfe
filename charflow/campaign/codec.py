"""Trials, outcomes and answers as plain JSON values and back, exactly."""

from __future__ import annotations

import hashlib
from dataclasses import asdict, astuple
from typing import Any

from charflow.plan.arcs import Kind
from charflow.plan.deck import Settings
from charflow.plan.trial import Move, Outcome, Start, Swing, Trial
from charflow.solve.accuracy import Accuracy
from charflow.solve.answer import Answer
from charflow.solve.row import Hint, Question, RowResult


def seal(*fields: object) -> str:
    """Return a short digest that goes with ``fields`` where they are kept, so that damage shows."""
    return hashlib.blake2b(repr(fields).encode("utf-8", "backslashreplace"), digest_size=8).hexdigest()


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
        "hints": [[*key, asdict(hint)] for key, hint in row.hints.items()],
    }


def row_from(raw: dict[str, Any]) -> RowResult:
    """Return the row that :func:`row_to` wrote."""
    hints = {(_question(asked), slew): _hint(hint) for asked, slew, hint in raw["hints"]}
    return RowResult(raw["clock_slew"], tuple(answer_from(a) for a in raw["answers"]), hints)


def _question(raw: list[Any]) -> Question:
    kind, pin, rising, when = raw
    return kind, pin, rising, tuple((name, level) for name, level in when)


def _hint(raw: dict[str, Any]) -> Hint:
    return Hint(**{**raw, "shape": tuple((height, offset) for height, offset in raw["shape"])})


def accuracy_to(accuracy: Accuracy) -> dict[str, Any]:
    """Return chosen settings as JSON values."""
    return {**asdict(accuracy), "settings": asdict(accuracy.settings), "taught": row_to(accuracy.taught)}


def accuracy_from(raw: dict[str, Any]) -> Accuracy:
    """Return the settings that :func:`accuracy_to` wrote."""
    settings = settings_from(raw["settings"])
    return Accuracy(**{**raw, "settings": settings, "taught": row_from(raw["taught"])})


def settings_from(raw: dict[str, Any]) -> Settings:
    """Return the settings whose fields are ``raw``."""
    return Settings(**{**raw, "extra": tuple((name, value) for name, value in raw["extra"])})
