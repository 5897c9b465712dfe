"""A trial that begins from recorded node voltages against one that lives through its whole past."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from charflow.plan.arcs import Arc, Kind
from charflow.plan.circuit import Circuit, circuit_of, read_sources
from charflow.plan.deck import Settings
from charflow.plan.stimulus import Condition, at_offset, relaxed
from charflow.plan.trial import Outcome, Trial
from charflow.sheet import Sheet, read_sheet
from charflow.simulate.batch import run_batch
from charflow.simulate.engine import Engine
from charflow.solve.row import groups_of

pytestmark = [pytest.mark.slow, pytest.mark.ngspice]

PS = 1e-12
SAME = 0.01 * PS  # what the warm start may change
TIGHT = Settings("tight", reltol=1e-7, extra=())
LOOSER = replace(TIGHT, reltol=2e-7)
UNTIL = 1e-9
NEAR_THE_LIMIT = 34 * PS  # offset at which setup of a rising D has a pushout of a little more than 10 %


@pytest.fixture(scope="module")
def sheet(tarn: Path) -> Sheet:
    return read_sheet(tarn / "tarn_dffp_1.toml")


@pytest.fixture(scope="module")
def circuit(sheet: Sheet) -> Circuit:
    return circuit_of(sheet, read_sources(sheet, ["typical"]), "typical").rested(2e-9)


@pytest.fixture(scope="module")
def engine(circuit: Circuit) -> Engine:
    return Engine(circuit, TIGHT)


@pytest.fixture(scope="module")
def setup(sheet: Sheet) -> Arc:
    arcs = [arc for group in groups_of(sheet) for arc in group.arcs]
    return next(arc for arc in arcs if arc.kind is Kind.SETUP and arc.rising)


@pytest.fixture(scope="module")
def hold(sheet: Sheet) -> Arc:
    arcs = [arc for group in groups_of(sheet) for arc in group.arcs]
    return next(arc for arc in arcs if arc.kind is Kind.HOLD and arc.rising)


CONDITION = Condition("typical", 50 * PS, 50 * PS, 5e-15)


def apart(one: Outcome, other: Outcome) -> float:
    """Return the largest difference [s] between any two crossings or transitions of two outcomes."""
    differences = []
    for a, b in zip(one.swings, other.swings, strict=True):
        assert a.pin == b.pin
        assert len(a.crossings) == len(b.crossings) > 0
        differences += [abs(x - y) for x, y in zip(a.crossings, b.crossings, strict=True)]
        differences += [
            abs(x - y)
            for x, y in zip(a.transitions, b.transitions, strict=True)
            if x is not None and y is not None
        ]
    return max(differences)


def test_a_relaxed_trial_is_the_same_warm_and_cold(
    sheet: Sheet, circuit: Circuit, engine: Engine, setup: Arc
) -> None:
    trial = relaxed(sheet, setup, CONDITION, UNTIL)
    assert apart(engine.run(trial), run_batch(circuit, trial, TIGHT)) < SAME


@pytest.mark.parametrize("offset", [200 * PS, 60 * PS, NEAR_THE_LIMIT])
def test_setup_is_the_same_warm_and_cold_down_to_where_the_output_is_late(
    sheet: Sheet, circuit: Circuit, engine: Engine, setup: Arc, offset: float
) -> None:
    trial = at_offset(sheet, setup, CONDITION, offset, UNTIL)
    assert apart(engine.run(trial), run_batch(circuit, trial, TIGHT)) < SAME


@pytest.mark.parametrize("offset", [200 * PS, 0.0])
def test_hold_is_the_same_warm_and_cold(
    sheet: Sheet, circuit: Circuit, engine: Engine, hold: Arc, offset: float
) -> None:
    trial = at_offset(sheet, hold, CONDITION, offset, UNTIL)
    assert apart(engine.run(trial), run_batch(circuit, trial, TIGHT)) < SAME


def test_the_late_trial_is_one_where_a_wrong_past_would_show(
    sheet: Sheet, circuit: Circuit, engine: Engine, setup: Arc
) -> None:
    late = at_offset(sheet, setup, CONDITION, NEAR_THE_LIMIT, UNTIL)
    early = relaxed(sheet, setup, CONDITION, UNTIL)
    assert delay(engine, late) > 1.1 * delay(engine, early)
    volts = engine.rest_volts(late.start)
    inner = next(name for name in volts if name.endswith(".mkn"))  # driven by no transistor at rest
    disturbed = {**volts, inner: volts[inner] + 0.05}
    assert apart(engine.run(late), run_batch(circuit, late, TIGHT, disturbed)) > SAME


def test_the_executable_and_the_library_agree_on_a_warm_trial(
    sheet: Sheet, circuit: Circuit, engine: Engine, setup: Arc
) -> None:
    trial = at_offset(sheet, setup, CONDITION, NEAR_THE_LIMIT, UNTIL)
    warm = run_batch(circuit, trial, TIGHT, engine.rest_volts(trial.start))
    # the same numerics on the same deck: only the rounding of numbers written to text may differ
    assert apart(engine.run(trial), warm) < 0.1 * SAME


def test_the_settings_are_so_tight_that_the_comparison_means_something(
    sheet: Sheet, circuit: Circuit, engine: Engine, setup: Arc
) -> None:
    trial = at_offset(sheet, setup, CONDITION, NEAR_THE_LIMIT, UNTIL)
    assert apart(engine.run(trial), Engine(circuit, LOOSER).run(trial)) < SAME


def delay(engine: Engine, trial: Trial) -> float:
    return engine.run(trial).of("Q").crossings[-1]
