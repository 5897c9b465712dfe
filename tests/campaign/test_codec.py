"""Trials, outcomes and rows survive the way to the store and back."""

from __future__ import annotations

import json
from typing import Any

from hypothesis import given
from hypothesis import strategies as st

from charflow.campaign.codec import outcome_from, outcome_to, row_from, row_to, seal, trial_from, trial_to
from charflow.plan.arcs import Kind
from charflow.plan.trial import Move, Outcome, Start, Swing, Trial
from charflow.solve.answer import Answer
from charflow.solve.row import Hint, RowResult

names = st.text(min_size=1, max_size=8)
numbers = st.floats(allow_nan=False, allow_infinity=False)
levels = st.lists(st.tuples(names, st.booleans()), min_size=1, max_size=3).map(tuple)
trials = st.builds(
    Trial,
    corner=names,
    start=st.builds(Start, st.lists(levels, min_size=1, max_size=4).map(tuple)),
    moves=st.lists(st.builds(Move, names, st.booleans(), numbers, numbers), max_size=3).map(tuple),
    loads=st.lists(st.tuples(names, numbers), max_size=3).map(tuple),
    until=numbers,
)
swings = st.builds(
    Swing,
    names,
    numbers,
    numbers,
    numbers,
    numbers,
    st.lists(numbers, max_size=3).map(tuple),
    st.lists(st.none() | numbers, max_size=3).map(tuple),
)
outcomes = st.builds(Outcome, st.lists(swings, max_size=3).map(tuple), names)
answers = st.builds(
    Answer,
    **dict.fromkeys(
        ("corner", "pin", "pin_edge", "related_pin", "related_edge", "output", "output_edge", "when"), names
    ),
    quantity=st.sampled_from(Kind),
    clock_slew=numbers,
    data_slew=st.none() | numbers,
    load=numbers,
    value=st.none() | numbers,
    bracket=st.none() | numbers,
    status=names,
    transients=st.integers(0, 999),
    key=names,
)
questions = st.tuples(names, names, st.booleans(), st.lists(st.tuples(names, st.booleans())).map(tuple))
rows = st.builds(
    RowResult,
    numbers,
    st.lists(answers, max_size=3).map(tuple),
    st.dictionaries(
        st.tuples(questions, numbers), st.builds(Hint, numbers, numbers, numbers, names), max_size=3
    ),
)


def through_json(value: Any) -> Any:
    return json.loads(json.dumps(value))


@given(trials)
def test_a_trial_comes_back_the_same_with_the_same_key(trial: Trial) -> None:
    back = trial_from(through_json(trial_to(trial)))
    assert back == trial
    assert back.key == trial.key


@given(outcomes)
def test_an_outcome_comes_back_the_same(outcome: Outcome) -> None:
    assert outcome_from(through_json(outcome_to(outcome))) == outcome


@given(rows)
def test_a_solved_row_comes_back_the_same(row: RowResult) -> None:
    back = row_from(through_json(row_to(row)))
    assert back == row
    assert all(isinstance(answer.quantity, Kind) for answer in back.answers)


@given(st.lists(st.text(max_size=20), min_size=1, max_size=4), st.data())
def test_a_seal_fits_no_other_text(fields: list[str], data: st.DataObject) -> None:
    others = data.draw(st.lists(st.text(max_size=20), min_size=1, max_size=4).filter(lambda o: o != fields))
    assert seal(*fields) == seal(*fields)
    assert seal(*others) != seal(*fields)
