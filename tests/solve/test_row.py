"""A row of the tables: every answer of a formula register is found, whatever the neighbours say."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import pytest

from charflow.errors import ConvergenceError
from charflow.plan.arcs import Kind
from charflow.plan.trial import Outcome, Trial
from charflow.sheet import Sheet
from charflow.solve.answer import Answer
from charflow.solve.fake import Curve, FakeOutput, FakeRegister
from charflow.solve.row import RowResult, groups_of, lost_row, solve_row

PS = 1e-12
Make = Callable[..., FakeRegister]


@dataclass
class Counted:
    """What a campaign gives a row: each trial is run once, and counted."""

    evaluate: Callable[[Trial], Outcome]
    ran: int = 0

    def __post_init__(self) -> None:
        self.known: dict[Trial, Outcome] = {}

    def __call__(self, trial: Trial) -> Outcome:
        if trial not in self.known:
            self.known[trial] = self.evaluate(trial)
            self.ran += 1
        return self.known[trial]


def rows(
    sheet: Sheet, cell: Callable[[Trial], Outcome], *, teach: bool = True
) -> tuple[list[RowResult], Counted]:
    """Solve every row in order; with ``teach`` each gets all the rows before it as neighbours."""
    counted = Counted(cell)
    done: list[RowResult] = []
    for group in groups_of(sheet):
        for slew in group.slews(sheet.axes):
            near = tuple(reversed(done)) if teach else ()
            result = solve_row(
                counted, lambda: counted.ran, lambda trial: trial.key, sheet, group, "typical", slew, near
            )
            done.append(result)
    return done, counted


def answers(done: list[RowResult], *kinds: Kind) -> list[Answer]:
    return [answer for row in done for answer in row.answers if answer.quantity in kinds]


def with_slews(curve: Curve, data: float, clock: float) -> Curve:
    return replace(curve, per_data_slew=data, per_clock_slew=clock)


@pytest.fixture
def plain(register: Make) -> FakeRegister:
    setup = with_slews(Curve(20 * PS, 5 * PS), 0.15, -0.3)
    hold = with_slews(Curve(-15 * PS, 4 * PS), -0.15, 0.3)
    edges = {
        (kind, "D", rising): curve
        for kind, curve in ((Kind.SETUP, setup), (Kind.HOLD, hold))
        for rising in (True, False)
    }
    return register(curves=edges)


def truth(cell: FakeRegister, answer: Answer) -> float:
    assert answer.data_slew is not None
    assert answer.clock_slew is not None
    return cell.true_crossing(
        answer.quantity,
        "D",
        answer.pin_edge == "rise",
        0.1,
        data_slew=answer.data_slew,
        clock_slew=answer.clock_slew,
    )


@pytest.mark.parametrize("teach", [True, False])
def test_every_setup_and_hold_is_right_with_and_without_neighbours(
    sheet: Sheet, plain: FakeRegister, teach: bool
) -> None:
    done, _ = rows(sheet, plain, teach=teach)
    found = answers(done, Kind.SETUP, Kind.HOLD)
    assert len(found) == 2 * 2 * 3 * 3  # setup and hold, rise and fall, clock slews, data slews
    for answer in found:
        assert answer.value == pytest.approx(truth(plain, answer), abs=sheet.measure.resolution)
        assert answer.bracket is not None
        assert answer.bracket <= sheet.measure.resolution * (1 + 1e-9)


def test_neighbours_that_mislead_cost_transients_but_not_answers(sheet: Sheet, plain: FakeRegister) -> None:
    misled = FakeRegister(
        plain.cell,
        plain.outputs,
        {key: replace(curve, knee=-curve.knee - 70 * PS) for key, curve in plain.curves.items()},
    )
    taught, _ = rows(sheet, misled)
    for group in groups_of(sheet):
        if not group.constraints:
            continue
        result = solve_row(
            plain, lambda: 0, lambda trial: trial.key, sheet, group, "typical", 50 * PS, tuple(taught)
        )
        found = answers([result], Kind.SETUP, Kind.HOLD)
        assert found
        for answer in found:
            assert answer.value == pytest.approx(truth(plain, answer), abs=sheet.measure.resolution)


def test_neighbours_save_transients(sheet: Sheet, plain: FakeRegister) -> None:
    taught, cheap = rows(sheet, plain)
    alone, dear = rows(sheet, plain, teach=False)
    assert len(answers(taught, Kind.SETUP)) == len(answers(alone, Kind.SETUP))
    assert cheap.ran < dear.ran


def test_transients_are_counted_once_over_a_whole_table(sheet: Sheet, plain: FakeRegister) -> None:
    done, counted = rows(sheet, plain)
    assert sum(answer.transients for row in done for answer in row.answers) == counted.ran
    mean = sum(a.transients for a in answers(done, Kind.SETUP, Kind.HOLD)) / 36
    assert mean < 4  # 2.9 when this was written, 4.4 without neighbours


def test_delays_and_transitions_follow_the_load(sheet: Sheet, register: Make) -> None:
    outputs = (
        FakeOutput("Q", 100 * PS, 30 * PS, per_farad=2e3),
        FakeOutput("QN", 80 * PS, 20 * PS, per_farad=1e3),
    )
    done, _ = rows(sheet, register(Curve(0.0, 5 * PS), outputs=outputs))
    found = answers(done, Kind.CLK_TO_Q, Kind.TRANSITION)
    assert len(found) == 2 * 4 * 3 * 2  # both, output edges, clock slews, loads
    for answer in found:
        (output,) = (o for o in outputs if o.pin == answer.output)
        base = output.delay if answer.quantity is Kind.CLK_TO_Q else output.transition
        assert answer.value == pytest.approx(base + output.per_farad * answer.load, rel=1e-9)
        assert answer.status == "measured; settings formula"


def test_a_point_that_cannot_be_measured_has_no_value_and_its_reason_and_spoils_no_other(
    sheet: Sheet, plain: FakeRegister
) -> None:
    def sometimes(trial: Trial) -> Outcome:
        if any(move.pin == "D" and move.slew == 50 * PS for move in trial.moves):
            raise ConvergenceError("the time step became too small")
        return plain(trial)

    done, _ = rows(sheet, sometimes)
    for answer in answers(done, Kind.SETUP, Kind.HOLD):
        if answer.data_slew == 50 * PS:
            assert (answer.value, answer.bracket, answer.key) == (None, None, "")
            assert "the time step became too small" in answer.status
        else:
            assert answer.value == pytest.approx(truth(plain, answer), abs=sheet.measure.resolution)


@pytest.mark.parametrize(
    ("curve", "words"),
    [
        (Curve(0.0, PS, 0.0), "no offset fails"),
        (Curve(0.0, PS, 0.0, cliff=1.0), "no offset passes"),
    ],
)
def test_a_constraint_without_a_crossing_says_so(
    sheet: Sheet, register: Make, curve: Curve, words: str
) -> None:
    done, _ = rows(sheet, register(curve))
    for answer in answers(done, Kind.SETUP, Kind.HOLD):
        assert answer.value is None
        assert answer.status.startswith(words)
        assert "\n" not in answer.status


def test_a_cliff_is_named_in_the_status(sheet: Sheet, register: Make) -> None:
    done, _ = rows(sheet, register(Curve(-60 * PS, 4 * PS, cliff=3 * PS)))
    found = answers(done, Kind.SETUP, Kind.HOLD)
    assert {answer.status.split(";")[0] for answer in found} == {"cliff"}


def test_what_the_settings_leave_uncertain_widens_the_brackets(sheet: Sheet, plain: FakeRegister) -> None:
    group = next(g for g in groups_of(sheet) if g.delays and g.constraints)

    def row(uncertain: tuple[float, float]) -> RowResult:
        return solve_row(
            plain,
            lambda: 0,
            lambda trial: trial.key,
            sheet,
            group,
            "typical",
            50 * PS,
            (),
            uncertain,
        )

    for tight, wide in zip(row((0.0, 0.0)).answers, row((1e-3, 1 * PS)).answers, strict=True):
        assert wide.value == tight.value
        assert wide.bracket is not None
        assert tight.bracket is not None
        if wide.quantity in (Kind.SETUP, Kind.HOLD):
            assert wide.bracket == pytest.approx(tight.bracket + 2 * PS)
        elif wide.quantity is Kind.CLK_TO_Q:
            assert wide.value is not None
            assert wide.bracket == pytest.approx(2e-3 * wide.value)


def test_a_lost_row_has_every_point_without_value_for_one_reason(sheet: Sheet, plain: FakeRegister) -> None:
    for group in groups_of(sheet):
        slew = group.slews(sheet.axes)[0]
        lost = lost_row(sheet, group, "typical", slew, "the worker ended")
        solved = solve_row(plain, lambda: 0, lambda trial: trial.key, sheet, group, "typical", slew)
        assert [(a.quantity, a.pin, a.load) for a in lost.answers] == [
            (a.quantity, a.pin, a.load) for a in solved.answers
        ]
        assert {(a.value, a.status) for a in lost.answers} == {(None, "the worker ended")}


def test_a_group_says_how_many_values_its_rows_have(sheet: Sheet, plain: FakeRegister) -> None:
    for group in groups_of(sheet):
        slew = group.slews(sheet.axes)[0]
        row = solve_row(plain, lambda: 0, lambda trial: trial.key, sheet, group, "typical", slew)
        assert len(row.answers) == group.points(sheet.axes)
