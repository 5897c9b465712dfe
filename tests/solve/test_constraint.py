"""Setup and hold of a flip-flop whose answers are known in closed form."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.errors import TrialError
from charflow.plan.arcs import Arc, Kind
from charflow.plan.derive import arcs_of
from charflow.plan.stimulus import Condition
from charflow.plan.trial import Outcome, Swing, Trial
from charflow.sheet import Sheet
from charflow.solve.constraint import Constraint, solve_constraint
from charflow.solve.crossing import Ending, Guess
from charflow.solve.fake import Curve, FakeOutput, FakeRegister
from charflow.solve.reference import reference

PS = 1e-12
LIMIT = 0.1
RESOLUTION = 0.1 * PS
CONDITION = Condition("typical", 50 * PS, 50 * PS, 5e-15)
EDGES = [(kind, rising) for kind in (Kind.SETUP, Kind.HOLD) for rising in (True, False)]

Make = Callable[..., FakeRegister]
laws = settings(derandomize=True, deadline=None, max_examples=40)


@dataclass
class Counted:
    evaluate: Callable[[Trial], Outcome]
    times: int = 0

    def __call__(self, trial: Trial) -> Outcome:
        self.times += 1
        return self.evaluate(trial)


def arc_of(sheet: Sheet, kind: Kind, rising: bool) -> Arc:
    (arc,) = (arc for arc in arcs_of(sheet) if arc.kind is kind and arc.rising is rising)
    return arc


def solve(
    sheet: Sheet, cell: Callable[[Trial], Outcome], kind: Kind, rising: bool, guess: Guess | None = None
) -> tuple[Constraint, int]:
    arc = arc_of(sheet, kind, rising)
    counted = Counted(cell)
    base = reference(cell, sheet, arc, CONDITION)
    return solve_constraint(counted, sheet, arc, CONDITION, base, guess), counted.times


def holds(result: Constraint, truth: float) -> bool:
    """Tell whether the bracket holds ``truth``; time is exact to rounding (1e-9 ps)."""
    slack = 1e-9 * PS
    return result.crossing.fails - slack < truth <= result.crossing.passes + slack


class TestValue:
    @pytest.mark.parametrize(("kind", "rising"), EDGES)
    @laws
    @given(knee=st.floats(-60, 60), tau=st.floats(0.5, 15))
    def test_each_edge_gets_its_own_answer_within_the_resolution(
        self, sheet: Sheet, register: Make, kind: Kind, rising: bool, knee: float, tau: float
    ) -> None:
        other = Curve(500 * PS, 7 * PS)
        cell = register(other, {(kind, "D", rising): Curve(knee * PS, tau * PS)})
        result, _ = solve(sheet, cell, kind, rising)
        truth = cell.true_crossing(kind, "D", rising, LIMIT)
        assert holds(result, truth)
        assert result.crossing.bracket <= RESOLUTION * (1 + 1e-9)
        assert result.value == pytest.approx(truth, abs=RESOLUTION)
        assert result.crossing.ending is Ending.PUSHOUT

    @pytest.mark.parametrize(("kind", "rising"), EDGES)
    def test_negative_setup_and_hold_are_answers(
        self, sheet: Sheet, register: Make, kind: Kind, rising: bool
    ) -> None:
        cell = register(Curve(-60 * PS, 4 * PS))
        truth = cell.true_crossing(kind, "D", rising, LIMIT)
        assert truth < -50 * PS
        result, _ = solve(sheet, cell, kind, rising)
        assert holds(result, truth)

    @pytest.mark.parametrize(("kind", "rising"), EDGES)
    def test_a_cliff_before_the_limit_is_named(
        self, sheet: Sheet, register: Make, kind: Kind, rising: bool
    ) -> None:
        cell = register(Curve(-60 * PS, 4 * PS, cliff=12.345 * PS))
        result, _ = solve(sheet, cell, kind, rising)
        assert holds(result, 12.345 * PS)
        assert result.crossing.ending is Ending.CLIFF

    @pytest.mark.parametrize("first", [0.1, 1.0, 3.0])
    @pytest.mark.parametrize("second", [0.1, 1.0, 3.0])
    def test_the_output_that_is_pushed_out_most_decides(
        self, sheet: Sheet, register: Make, first: float, second: float
    ) -> None:
        outputs = (
            FakeOutput("Q", 100 * PS, 30 * PS, share=first),
            FakeOutput("QN", 80 * PS, 20 * PS, share=second),
        )
        cell = register(Curve(0.0, 4 * PS), outputs=outputs)
        result, _ = solve(sheet, cell, Kind.SETUP, True)
        alone = Curve(0.0, 4 * PS).crossing(LIMIT / max(first, second))
        assert holds(result, alone)

    def test_an_output_that_never_captures_leaves_no_answer_though_the_other_does(
        self, sheet: Sheet, register: Make
    ) -> None:
        cell = register(Curve(0.0, 4 * PS))
        arc = arc_of(sheet, Kind.SETUP, True)
        base = reference(cell, sheet, arc, CONDITION)

        def half(trial: Trial) -> Outcome:
            first, second = cell(trial).swings
            return Outcome((first, Swing(second.pin, 1.0, 1.0, 1.0, 1.0, (), ())))

        result = solve_constraint(half, sheet, arc, CONDITION, base)
        assert (result.value, result.deciding) == (None, None)
        assert result.crossing.ending is Ending.NEVER_PASSES


class TestCost:
    @laws
    @given(knee=st.floats(-60, 60), tau=st.floats(1, 15), miss=st.floats(-0.3, 0.3))
    def test_a_good_guess_needs_few_transients(
        self, sheet: Sheet, register: Make, knee: float, tau: float, miss: float
    ) -> None:
        cell = register(Curve(knee * PS, tau * PS))
        truth = cell.true_crossing(Kind.SETUP, "D", True, LIMIT)
        guess = Guess(truth + miss * tau * PS, 2 * tau * PS, tau * PS)
        result, times = solve(sheet, cell, Kind.SETUP, True, guess)
        assert holds(result, truth)
        assert times <= 7  # six, and one to look out for a curve that turns back

    @laws
    @given(knee=st.floats(-60, 60), tau=st.floats(1, 15), guess=st.floats(-300, 300))
    def test_a_wrong_guess_costs_transients_but_not_the_answer(
        self, sheet: Sheet, register: Make, knee: float, tau: float, guess: float
    ) -> None:
        cell = register(Curve(knee * PS, tau * PS))
        result, times = solve(sheet, cell, Kind.HOLD, False, Guess(guess * PS, 10 * PS, 5 * PS))
        assert holds(result, cell.true_crossing(Kind.HOLD, "D", False, LIMIT))
        assert times <= 60  # forty offsets at worst, some of them with a longer window


class TestWindow:
    def test_a_capture_later_than_the_limit_is_a_failure_even_if_it_comes(
        self, sheet: Sheet, register: Make
    ) -> None:
        # at offsets below zero the output arrives two or more delays late: outside or inside the window
        cell = register(Curve(0.0, 30 * PS, amplitude=1.0))
        result, _ = solve(sheet, cell, Kind.SETUP, True)
        truth = cell.true_crossing(Kind.SETUP, "D", True, LIMIT)
        assert holds(result, truth)
        assert result.crossing.ending is Ending.PUSHOUT

    def test_an_output_still_on_its_way_at_the_end_gets_a_longer_window(
        self, sheet: Sheet, register: Make
    ) -> None:
        # one output is so slow to reach its rail that the first window cuts its ramp
        outputs = (FakeOutput("Q", 100 * PS, 30 * PS), FakeOutput("QN", 300 * PS, 300 * PS))
        cell = register(Curve(0.0, 5 * PS), outputs=outputs)
        result, _ = solve(sheet, cell, Kind.SETUP, True)
        assert holds(result, cell.true_crossing(Kind.SETUP, "D", True, LIMIT))

    @pytest.mark.parametrize(("kind", "rising"), EDGES)
    def test_a_value_lost_after_the_window_is_not_believed_at_a_cliff(
        self, sheet: Sheet, register: Make, kind: Kind, rising: bool
    ) -> None:
        # the first window ends before 600 ps, so the loss shows only to a longer look
        cell = register(Curve(-60 * PS, 4 * PS, cliff=0.0, lost=9 * PS, lost_after=600 * PS))
        impatient = cell.true_crossing(kind, "D", rising, LIMIT, patient=False)
        patient = cell.true_crossing(kind, "D", rising, LIMIT)
        assert (impatient, patient) == (0.0, 9 * PS)
        result, _ = solve(sheet, cell, kind, rising)
        assert holds(result, patient)

    def test_the_window_ends_after_the_data_edge_and_the_slowest_output(
        self, sheet: Sheet, register: Make
    ) -> None:
        cell = register(Curve(0.0, 5 * PS))
        seen: list[Trial] = []

        def watched(trial: Trial) -> Outcome:
            seen.append(trial)
            return cell(trial)

        solve(sheet, watched, Kind.HOLD, False)
        for trial in seen:
            last = max(move.at + move.slew / 0.6 / 2 for move in trial.moves)
            assert trial.until >= last + (1 + LIMIT) * 100 * PS


class TestDeciding:
    @pytest.mark.parametrize(("kind", "rising"), EDGES)
    def test_the_deciding_trial_is_the_passing_end_of_the_bracket(
        self, sheet: Sheet, register: Make, kind: Kind, rising: bool
    ) -> None:
        result, _ = solve(sheet, register(Curve(0.0, 5 * PS)), kind, rising)
        assert result.deciding is not None
        (data,) = (move for move in result.deciding.moves if move.pin == "D")
        offset = -data.at if kind is Kind.SETUP else data.at
        assert offset == result.crossing.passes
        assert data.rising is rising
        assert data.slew == CONDITION.data_slew

    def test_never_failing_and_never_passing_have_no_value_and_no_trial(
        self, sheet: Sheet, register: Make
    ) -> None:
        for curve, ending in (
            (Curve(0.0, PS, 0.0), Ending.NEVER_FAILS),
            (Curve(0.0, PS, 0.0, cliff=1.0), Ending.NEVER_PASSES),
        ):
            result, _ = solve(sheet, register(curve), Kind.SETUP, True)
            assert (result.crossing.ending, result.value, result.deciding) == (ending, None, None)

    def test_a_reference_that_is_not_positive_is_refused_with_its_reason(
        self, sheet: Sheet, register: Make
    ) -> None:
        cell = register(Curve(0.0, 5 * PS))
        arc = arc_of(sheet, Kind.SETUP, True)
        base = reference(cell, sheet, arc, CONDITION)
        wrong = replace(base, delays=base.delays | {"QN": -3 * PS})
        with pytest.raises(TrialError, match=r"reference delay of QN is -3\.000 ps"):
            solve_constraint(cell, sheet, arc, CONDITION, wrong)

    def test_a_cell_that_does_not_begin_at_rest_is_an_error_not_a_failed_capture(
        self, sheet: Sheet, register: Make
    ) -> None:
        cell = register(Curve(0.0, 5 * PS))
        arc = arc_of(sheet, Kind.SETUP, True)
        base = reference(cell, sheet, arc, CONDITION)

        def leaking(trial: Trial) -> Outcome:
            return Outcome(tuple(replace(swing, first=0.4) for swing in cell(trial).swings))

        with pytest.raises(TrialError, match="should begin"):
            solve_constraint(leaking, sheet, arc, CONDITION, base)
