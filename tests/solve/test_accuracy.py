"""Settings are chosen by halving the tolerance until answers stop moving, and what is left is stated."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

import pytest

from charflow.campaign.run import RunResult, run_campaign
from charflow.plan.arcs import Arc, Kind
from charflow.plan.circuit import Circuit, circuit_of, read_sources
from charflow.plan.deck import Settings
from charflow.plan.stimulus import Condition
from charflow.plan.trial import Outcome, Trial
from charflow.sheet import Sheet, read_sheet
from charflow.simulate.engine import Engine
from charflow.solve.accuracy import (
    CONSTRAINT_ERROR,
    DELAY_SHARE,
    LOOSEST,
    ORDER,
    TIGHTEST,
    Accuracy,
    choose_settings,
)
from charflow.solve.constraint import solve_constraint
from charflow.solve.fake import Curve, FakeOutput, FakeRegister
from charflow.solve.reference import reference
from charflow.solve.row import groups_of

PS = 1e-12
CURVE = Curve(knee=20 * PS, tau=4 * PS)
DELAY = 100 * PS

Register = Callable[..., FakeRegister]


def wrong_by(
    register: Register, delays: float, places: float
) -> Callable[[Settings], Callable[[Trial], Outcome]]:
    """Return registers whose errors follow the tolerance as an integration rule of second order does.

    At the loosest tolerance tried a delay is wrong by the fraction ``delays``, a crossing by ``places`` [s].
    """

    def make(settings: Settings) -> Callable[[Trial], Outcome]:
        share = (settings.reltol / LOOSEST) ** ORDER
        return register(
            replace(CURVE, knee=CURVE.knee + places * share),
            outputs=(
                FakeOutput("Q", DELAY * (1 + delays * share), 30 * PS),
                FakeOutput("QN", 0.8 * DELAY, 20 * PS, share=0.5),
            ),
        )

    return make


def chosen(sheet: Sheet, register: Register, delays: float, places: float) -> Accuracy:
    return choose_settings(wrong_by(register, delays, places), sheet, groups_of(sheet), "typical")


def left(accuracy: Accuracy) -> float:
    """Return the share of the loosest tolerance's error that the chosen settings leave."""
    return float((accuracy.settings.reltol / LOOSEST) ** ORDER)


class TestOnFormulas:
    def test_a_register_without_error_is_believed_after_one_halving(
        self, sheet: Sheet, register: Register
    ) -> None:
        accuracy = chosen(sheet, register, 0.0, 0.0)
        assert accuracy.halvings == 1
        assert accuracy.settings.reltol == LOOSEST / 2
        assert accuracy.delay_share == pytest.approx(0.0, abs=1e-12)

    @pytest.mark.parametrize("places", [0.2 * PS, 0.5 * PS, 2 * PS])
    def test_the_tolerance_is_halved_until_the_crossing_is_right_and_no_further(
        self, sheet: Sheet, register: Register, places: float
    ) -> None:
        accuracy = chosen(sheet, register, 0.0, places)
        error = places * left(accuracy)
        assert error <= 1.05 * CONSTRAINT_ERROR
        assert accuracy.halvings == 1 or error * 2**ORDER > 0.95 * CONSTRAINT_ERROR
        assert accuracy.settings.reltol == pytest.approx(LOOSEST / 2**accuracy.halvings)

    @pytest.mark.parametrize("places", [0.2 * PS, 2 * PS])
    def test_what_is_stated_is_what_is_wrong(self, sheet: Sheet, register: Register, places: float) -> None:
        accuracy = chosen(sheet, register, 0.0, places)
        # the crossing is read from one trial beside it through a slope that was measured coarsely
        assert accuracy.constraint == pytest.approx(places * left(accuracy), rel=0.1)

    @pytest.mark.parametrize("delays", [2e-3, 2e-2])
    def test_delays_must_have_converged_too(self, sheet: Sheet, register: Register, delays: float) -> None:
        accuracy = chosen(sheet, register, delays, 0.0)
        assert delays * left(accuracy) <= 1.05 * DELAY_SHARE
        assert accuracy.delay_share == pytest.approx(delays * left(accuracy), rel=0.05)

    def test_a_register_that_never_converges_ends_at_the_tightest_and_says_how_bad_it_is(
        self, sheet: Sheet, register: Register
    ) -> None:
        def make(settings: Settings) -> Callable[[Trial], Outcome]:
            up = round(LOOSEST / settings.reltol).bit_length() % 2
            return register(replace(CURVE, knee=CURVE.knee + up * PS))

        accuracy = choose_settings(make, sheet, groups_of(sheet), "typical")
        assert TIGHTEST / 2 <= accuracy.settings.reltol < TIGHTEST
        assert accuracy.constraint > CONSTRAINT_ERROR

    def test_crossings_found_on_the_way_are_handed_on(self, sheet: Sheet, register: Register) -> None:
        accuracy = chosen(sheet, register, 0.0, 0.5 * PS)
        hints = accuracy.taught.hints
        assert {key[0][0] for key in hints} == {"setup", "hold"}
        truth = register(CURVE).true_crossing(Kind.SETUP, "D", True, 0.1)
        # found at the loosest tolerance and to 2 ps only: a first guess, not an answer
        assert all(abs(hint.value - truth) < 3 * PS for hint in hints.values())


@dataclass(frozen=True)
class Numbers:
    """Every delay and crossing [s] of one table at some settings."""

    delays: dict[tuple[object, ...], float]
    crossings: dict[tuple[object, ...], float]


def numbers(sheet: Sheet, circuit: Circuit, settings: Settings) -> Numbers:
    """Solve the corners of the table anew at ``settings``, crossings to 0.01 ps."""
    fine = sheet.model_copy(update={"measure": sheet.measure.model_copy(update={"resolution": 0.01 * PS})})
    evaluate = Engine(circuit, settings).run
    found = Numbers({}, {})
    slews = sheet.axes.clock_slew[0], sheet.axes.clock_slew[-1]
    for arc in (arc for group in groups_of(sheet) for arc in group.constraints):
        if arc.kind not in (Kind.SETUP, Kind.HOLD) or not arc.observed:
            continue
        for clock in slews:
            for data in slews:
                key = (arc.kind, arc.rising, clock, data)
                found.crossings[key] = _crossing(evaluate, fine, arc, clock, data, found.delays)
    return found


def _crossing(
    evaluate: Callable[[Trial], Outcome],
    sheet: Sheet,
    arc: Arc,
    clock: float,
    data: float,
    delays: dict[tuple[object, ...], float],
) -> float:
    condition = Condition("typical", clock, data, sheet.axes.constraint_load)
    base = reference(evaluate, sheet, arc, condition)
    delays |= {(pin, arc.rising, arc.kind, clock): delay for pin, delay in base.delays.items()}
    value = solve_constraint(evaluate, sheet, arc, condition, base).value
    assert value is not None
    return value


@pytest.fixture(scope="module")
def tarn_table(make_sheet_at: Callable[..., Path], tmp_path_factory: pytest.TempPathFactory) -> Sheet:
    slews = '["10 ps", "200 ps"]'
    path = tmp_path_factory.mktemp("accuracy") / "sheet.toml"
    return read_sheet(make_sheet_at(path, clock_slew=slews, data_slew=slews))


@pytest.fixture(scope="module")
def result(tarn_table: Sheet, tmp_path_factory: pytest.TempPathFactory) -> RunResult:
    return run_campaign(tarn_table, tmp_path_factory.mktemp("accuracy") / "run", 1)


@pytest.fixture(scope="module")
def circuit(tarn_table: Sheet, result: RunResult) -> Circuit:
    circuit = circuit_of(tarn_table, read_sources(tarn_table), "typical")
    return circuit.rested(result.rests["typical"].seconds)


@pytest.mark.slow
@pytest.mark.ngspice
class TestOnTarn:
    def test_the_choice_is_recorded_in_the_run_and_read_back(self, tarn_table: Sheet, tmp_path: Path) -> None:
        first = run_campaign(tarn_table, tmp_path / "run", 1)
        again = run_campaign(tarn_table, tmp_path / "run", 1)
        assert again.clock.transients == 0
        assert again.accuracy == first.accuracy
        assert first.accuracy["typical"].settings.reltol < LOOSEST

    def test_what_is_left_is_within_what_was_asked_for(self, result: RunResult) -> None:
        accuracy = result.accuracy["typical"]
        assert 0 < accuracy.delay_share <= DELAY_SHARE
        assert 0 < accuracy.constraint <= CONSTRAINT_ERROR

    def test_halving_once_more_moves_no_answer_by_more_than_is_stated(
        self, tarn_table: Sheet, circuit: Circuit, result: RunResult
    ) -> None:
        accuracy = result.accuracy["typical"]
        settings = accuracy.settings
        now = numbers(tarn_table, circuit, settings)
        then = numbers(tarn_table, circuit, replace(settings, reltol=settings.reltol / 2))
        assert len(now.crossings) == 16
        for key, delay in now.delays.items():
            assert abs(then.delays[key] - delay) <= accuracy.delay_share * max(delay, 30 * PS), key
        for key, crossing in now.crossings.items():
            # 0.01 ps more: each of the two is itself found to a bracket of that width
            assert abs(then.crossings[key] - crossing) <= accuracy.constraint + 0.01 * PS, key

    def test_brackets_in_the_table_are_no_narrower_than_what_is_stated(self, result: RunResult) -> None:
        accuracy = result.accuracy["typical"]
        for answer in result.answers:
            assert answer.bracket is not None
            assert answer.value is not None
            if answer.quantity in (Kind.SETUP, Kind.HOLD):
                assert answer.bracket >= 2 * accuracy.constraint
            elif answer.quantity is Kind.CLK_TO_Q:
                assert answer.bracket == pytest.approx(2 * accuracy.delay_share * answer.value)
