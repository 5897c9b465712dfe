"""Truth tables become short expressions that mean the same."""

from __future__ import annotations

from itertools import product

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.probe.expression import express, names_read, support
from charflow.sheet.logic import parse_logic


def _table(names: str, text: str) -> tuple[bool, ...]:
    logic, every = parse_logic(text), names.split()
    return tuple(
        bool(logic.value(dict(zip(every, levels, strict=True))))
        for levels in product((False, True), repeat=len(every))
    )


@settings(max_examples=200, deadline=None)
@given(st.integers(1, 5).flatmap(lambda n: st.lists(st.booleans(), min_size=2**n, max_size=2**n)))
def test_an_expression_has_the_table_it_was_made_from(table: list[bool]) -> None:
    names = ["A", "B", "C", "D", "E"][: (len(table) - 1).bit_length()]
    assert _table(" ".join(names), express(tuple(table), names)) == tuple(table)


@pytest.mark.parametrize(
    ("names", "text"),
    [
        ("D", "D"),
        ("D", "!D"),
        ("SE SI D", "SE ? SI : D"),
        ("SE SI E D state", "SE ? SI : (E ? D : state)"),
        ("E TE", "E | TE"),
        ("state CK", "state & CK"),
        ("state CK", "!state | CK"),
        ("A B", "A ^ B"),
        ("A B C D", "A & B | C & D"),
        ("A0 A1 A2 A3 A4 A5 A6 A7 A8", "A0 & A1 & A2 | A3 & A4 & A5 | A6 & A7 & A8"),
        ("J K state", "state ? !K : J"),
    ],
)
def test_common_functions_are_written_as_people_write_them(names: str, text: str) -> None:
    assert express(_table(names, text), names.split()) == text


def test_a_constant_is_a_digit() -> None:
    assert express((True, True), ["A"]) == "1"


def test_names_are_counted_as_often_as_they_are_read() -> None:
    assert names_read("SE ? SI : (E ? D[0] : state & !SE)") == ["SE", "SI", "E", "D[0]", "state", "SE"]


def test_a_variable_without_effect_is_not_in_the_support() -> None:
    rows = {levels: bool(levels[0]) for levels in product((0, 1), repeat=3)}
    assert support(rows, 3) == [0]
