"""The certificate in words and numbers."""

from __future__ import annotations

import csv
import io

import pytest
from rich.console import Console

from charflow.campaign.beyond import Refinement
from charflow.plan.arcs import Kind
from charflow.solve.answer import Answer
from charflow.solve.certificate import Certificate, Check, table_of
from charflow.solve.refine import Insertion
from charflow.tables.certificate import (
    facts_of,
    notes,
    print_certificate,
    refinement_facts,
    refinement_words,
    to_csv,
    to_markdown,
)


def check(slew: float, load: float, value: float | None, read: float | None) -> Check:
    answer = Answer(
        "slow", Kind.CLK_TO_Q, "", "", "CK", "rise", "Q", "fall", "SE", slew, None, load, value,
        None if value is None else 1e-16, "measured" if value else "no answer", 1, "k1",
    )  # fmt: skip
    return Check(answer, read, None if value is None else abs(value))


CHECKS = (
    check(20e-12, 2e-15, 100e-12, 101e-12),
    check(44.7e-12, 3e-15, 200e-12, 196e-12),
    check(80e-12, 4e-15, 50e-12, 52.5e-12),
    check(90e-12, 9e-15, None, 60e-12),
)
FOUND = Certificate(table_of(CHECKS[0].answer), ("clock_slew", "load"), CHECKS)


def test_facts_hold_the_largest_and_the_typical_error_and_where() -> None:
    (facts,) = facts_of([FOUND])
    assert (facts["points"], facts["without_answer"]) == (3, 1)
    assert (facts["largest_ps"], facts["typical_ps"]) == (4.0, 2.5)
    assert (facts["largest_pct"], facts["typical_pct"]) == (5.0, 2.0)
    assert facts["worst_at"] == {"clock_slew_ps": 44.7, "load_ff": 3.0}
    assert facts["along"] == ["clock_slew", "load"]


def test_the_csv_has_every_check_with_signed_errors_and_gaps_left_empty() -> None:
    lines = list(csv.DictReader(io.StringIO(to_csv([FOUND]))))
    assert [line["error_ps"] for line in lines] == ["1.0", "-4.0", "2.5", ""]
    assert [line["measured_ps"] for line in lines] == ["100.0", "200.0", "50.0", ""]
    assert lines[1]["error_pct"] == "2.0"
    assert lines[3]["status"] == "no answer"
    assert {line["key"] for line in lines} == {"k1"}


def test_markdown_and_terminal_say_the_same() -> None:
    facts = facts_of([FOUND])
    text = "\n".join(to_markdown(facts, str))
    screen = io.StringIO()
    print_certificate(Console(file=screen, width=80), facts)
    for shown in (text, screen.getvalue()):
        assert "clk_to_q Q fall, SE" in shown
        assert "4.00 ps" in shown
        assert "5.00 %" in shown
        assert "44.7 ps, 3 fF" in shown
        assert "1 points between the grid gave no answer" in shown


def test_an_axis_of_one_point_is_said() -> None:
    flat = Certificate(FOUND.table, ("load",), CHECKS[:1])
    assert any("only along load for clk_to_q" in note for note in notes(facts_of([flat])))
    none = Certificate(FOUND.table, (), ())
    assert "one point, nothing between" in "\n".join(to_markdown(facts_of([none]), str))


@pytest.mark.parametrize(
    ("reached", "left", "words"),
    [
        (
            True,
            0.0091,
            "refinement reached: largest error of delays and constraints at the points checked 0.91 %",
        ),
        (False, 0.031, "refinement NOT reached"),
        (False, None, "nothing is known"),
    ],
)
def test_the_outcome_of_refining_is_said_as_it_is(reached: bool, left: float | None, words: str) -> None:
    facts = refinement_facts(Refinement(0.01, (Insertion("load", 7.46e-15),), left, reached))
    assert facts is not None
    assert words in refinement_words(facts)
    if left is not None:
        assert "load 7.46 fF" in refinement_words(facts)
