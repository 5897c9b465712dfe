"""The arithmetic of capacitance, energy and leakage, on formulas in place of a simulator."""

from __future__ import annotations

from pathlib import Path

import pytest

from charflow.errors import TrialError
from charflow.plan.behaviour import behaviour_of
from charflow.plan.events import events_of
from charflow.plan.flow import Flow, Standing
from charflow.plan.trial import Start, Swing, Trial
from charflow.sheet import Sheet, read_sheet
from charflow.solve.power import LONGEST_WINDOW, NEW_DATA, Power, PowerSolver

V, QUIET, INSIDE, PIN = 1.2, 3e-15, 8e-15, 2e-15  # volts, then joules, joules and farads


class Formula:
    """A flip-flop that draws QUIET at each edge, INSIDE more where outputs move, and C V^2 for its loads."""

    def __init__(self, sheet: Sheet) -> None:
        self.events = {(e.pin, e.rising, e.start): e for e in events_of(behaviour_of(sheet))}
        self.windows: list[float] = []
        self.still_after = 0.0

    def flow(self, trial: Trial) -> Flow:
        self.windows.append(trial.until)
        (move,) = trial.moves
        event = self.events[move.pin, move.rising, trial.start]
        loads = sum(dict(trial.loads)[pin] for pin, up in event.moved if up)
        joules = QUIET + (INSIDE if event.moved else 0.0) + loads * V**2
        sign = 1 if move.rising else -1
        swings = []
        for pin, _ in trial.loads:
            level = float(dict(event.moved).get(pin, False))
            first = 1 - level if pin in dict(event.moved) else level
            swings.append(Swing(pin, first, level, 0.0, 1.0, (), ()))
        charges = {"VDD": joules / V, "VSS": 0.0, move.pin: sign * PIN * V}
        return Flow(charges, trial.until >= self.still_after, tuple(swings))

    def standing(self, start: Start) -> Standing:
        raise TrialError("not asked for")


@pytest.fixture
def solver(tiny_sheet: Path) -> tuple[PowerSolver, Formula]:
    sheet = read_sheet(tiny_sheet)
    formula = Formula(sheet)
    return PowerSolver(sheet, behaviour_of(sheet), "typical", formula.flow, formula.standing), formula


def _only(found: list[Power], **wanted: object) -> list[Power]:
    return [power for power in found if all(getattr(power, k) == v for k, v in wanted.items())]


def test_capacitance_is_the_charge_over_the_supply_for_both_edges(
    solver: tuple[PowerSolver, Formula],
) -> None:
    found = _only(solver[0].pin("D"), quantity="capacitance")
    assert [power.pin_edge for power in found] == ["rise", "fall"]
    for power in found:
        assert (power.value, power.low, power.high) == pytest.approx((PIN, PIN, PIN))


def test_the_energy_of_an_output_has_neither_load_nor_clock_in_it_and_is_shared(
    solver: tuple[PowerSolver, Formula],
) -> None:
    found = solver[0].pin("CK")
    for output in ("Q", "QN"):
        for edge in ("rise", "fall"):
            (power,) = _only(found, quantity="energy", output=output, output_edge=edge)
            assert power.value == pytest.approx(INSIDE / 2)
    (idle,) = _only(found, quantity="energy", output="", pin_edge="rise", when="")
    assert idle.value == pytest.approx(QUIET)


def test_an_edge_that_lets_new_data_in_is_told_apart_from_an_idle_one(
    solver: tuple[PowerSolver, Formula],
) -> None:
    falls = _only(solver[0].pin("CK"), quantity="energy", pin_edge="fall", output="")
    assert {power.when for power in falls} == {"", NEW_DATA}
    data = _only(solver[0].pin("D"), quantity="energy")
    assert {power.when for power in data} == {"CK", "!CK"}


def test_the_window_grows_until_the_currents_are_still(solver: tuple[PowerSolver, Formula]) -> None:
    power, formula = solver
    formula.still_after = 5e-9
    (first, *_) = _only(power.pin("D"), quantity="capacitance")
    assert first.value == pytest.approx(PIN)
    assert max(formula.windows) == pytest.approx(8e-9, rel=0.2)


def test_currents_that_never_rest_leave_no_value_but_a_reason(solver: tuple[PowerSolver, Formula]) -> None:
    power, formula = solver
    formula.still_after = 10 * LONGEST_WINDOW
    found = power.pin("D")
    assert found
    assert all(item.value is None and "not still" in item.status for item in found)


def test_a_state_without_an_operating_point_leaves_no_worst_and_no_mean(
    solver: tuple[PowerSolver, Formula],
) -> None:
    found = solver[0].leakage()
    assert {power.quantity for power in found} == {"leakage"}
    assert all(power.value is None and power.status == "not asked for" for power in found)
