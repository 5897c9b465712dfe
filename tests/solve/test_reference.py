"""The reference: clock-to-output delay and transition with the data at rest for long."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import pytest

from charflow.errors import ConvergenceError, TrialError
from charflow.plan.arcs import Arc, Kind
from charflow.plan.derive import arcs_of
from charflow.plan.stimulus import Condition
from charflow.plan.trial import Outcome, Trial
from charflow.sheet import Sheet
from charflow.solve.fake import Curve, FakeOutput, FakeRegister
from charflow.solve.reference import reference

PS = 1e-12
CONDITION = Condition("typical", 50 * PS, None, 5e-15)
Make = Callable[..., FakeRegister]


def setup_arc(sheet: Sheet) -> Arc:
    return next(arc for arc in arcs_of(sheet) if arc.kind is Kind.SETUP)


def test_it_is_the_delay_and_transition_of_every_observed_output(sheet: Sheet, register: Make) -> None:
    found = reference(register(Curve(0.0, PS)), sheet, setup_arc(sheet), CONDITION)
    assert found.delays == pytest.approx({"Q": 100 * PS, "QN": 80 * PS})
    assert found.transitions == pytest.approx({"Q": 30 * PS, "QN": 20 * PS})


def test_it_carries_the_load_of_the_condition(sheet: Sheet, register: Make) -> None:
    outputs = (FakeOutput("Q", 100 * PS, 30 * PS, per_farad=2e3), FakeOutput("QN", 80 * PS, 20 * PS))
    found = reference(register(Curve(0.0, PS), outputs=outputs), sheet, setup_arc(sheet), CONDITION)
    assert found.delays["Q"] == pytest.approx(110 * PS)  # 2 ps a femtofarad, 5 fF


def test_no_data_edge_moves_in_it(sheet: Sheet, register: Make) -> None:
    seen: list[Trial] = []
    cell = register(Curve(0.0, PS))

    def watched(trial: Trial) -> Outcome:
        seen.append(trial)
        return cell(trial)

    reference(watched, sheet, setup_arc(sheet), CONDITION)
    assert [[move.pin for move in trial.moves] for trial in seen] == [["CK"]]


@pytest.mark.parametrize("delay", [2e-9, 30e-9, 900e-9])
def test_a_slow_output_gets_a_longer_window(sheet: Sheet, register: Make, delay: float) -> None:
    outputs = (FakeOutput("Q", delay, delay / 2), FakeOutput("QN", 80 * PS, 20 * PS))
    found = reference(register(Curve(0.0, PS), outputs=outputs), sheet, setup_arc(sheet), CONDITION)
    assert found.delays["Q"] == pytest.approx(delay)
    assert found.transitions["Q"] == pytest.approx(delay / 2)
    assert found.until >= delay


def test_an_output_that_never_moves_is_named(sheet: Sheet, register: Make) -> None:
    outputs = (FakeOutput("Q", 1.0, 30 * PS), FakeOutput("QN", 80 * PS, 20 * PS))
    with pytest.raises(TrialError, match="Q does not rise after CK rises, all else relaxed"):
        reference(register(Curve(0.0, PS), outputs=outputs), sheet, setup_arc(sheet), CONDITION)


def test_an_output_that_stays_between_the_rails_is_named(sheet: Sheet, register: Make) -> None:
    cell = register(Curve(0.0, PS))

    def floating(trial: Trial) -> Outcome:
        first, second = cell(trial).swings
        return Outcome((replace(first, last=0.5), second))

    with pytest.raises(TrialError, match=r"Q, QN did not settle within 1e-05 s"):
        reference(floating, sheet, setup_arc(sheet), CONDITION)


def test_a_transient_without_an_answer_is_not_tried_again_with_a_longer_window(sheet: Sheet) -> None:
    tried: list[Trial] = []

    def broken(trial: Trial) -> Outcome:
        tried.append(trial)
        raise ConvergenceError("the time step became too small")

    with pytest.raises(ConvergenceError, match="time step"):
        reference(broken, sheet, setup_arc(sheet), CONDITION)
    assert len(tried) == 1
