"""Charge, energy and leakage against elements whose answer is known: a capacitor and a resistor.

Each is added to the demo flip-flop, and what it adds must be what Q = C V, E = C V^2 and P = V^2 / R say.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from charflow.plan.behaviour import behaviour_of
from charflow.plan.circuit import circuit_of, read_sources
from charflow.plan.events import Event, events_of, resting_states
from charflow.plan.flow import Flow
from charflow.plan.trial import Move, Trial
from charflow.sheet import Sheet, read_sheet
from charflow.simulate.engine import Engine
from charflow.simulate.flows import flow_of, standing_of

pytestmark = pytest.mark.ngspice

V = 1.2
CHARGE = 2e-18  # C, 0.2 % of what 1 fF takes: the solver's own tolerance over a whole transient


@pytest.fixture
def engine_with(tarn: Path, tmp_path: Path, make_sheet: Callable[..., Path]) -> Callable[[str], Engine]:
    """Return the engine of the demo flip-flop with one more element in its subckt."""

    def make(element: str) -> Engine:
        text = (tarn / "tarn_dffp_1.spice").read_text(encoding="utf-8")
        folder = tmp_path / f"cell{len(list(tmp_path.iterdir()))}"
        folder.mkdir()
        netlist = folder / "tarn_dffp_1.spice"
        netlist.write_text(text.replace(".ends", f"{element}\n.ends"), encoding="utf-8")
        path = make_sheet(edit=(f'netlist = "{tarn}/tarn_dffp_1.spice"', f'netlist = "{netlist}"'))
        sheet = read_sheet(path)
        return Engine(circuit_of(sheet, read_sources(sheet), "typical"))

    return make


@pytest.fixture
def sheet(make_sheet: Callable[..., Path]) -> Sheet:
    return read_sheet(make_sheet("plain.toml"))


def _event(sheet: Sheet, pin: str, rising: bool, output: str = "", up: bool = False) -> Event:
    for event in events_of(behaviour_of(sheet)):
        wanted = (output, up) in event.moved if output else not event.moved
        if event.pin == pin and event.rising is rising and wanted:
            return event
    raise AssertionError(pin)


def _flow(engine: Engine, event: Event, load: float = 1e-15) -> Flow:
    moves = (Move(event.pin, event.rising, 0.0, 50e-12),)
    flow = flow_of(engine, Trial("typical", event.start, moves, (("Q", load), ("QN", 1e-15)), 2e-9))
    assert flow.still
    return flow


@pytest.mark.parametrize("rising", [True, False], ids=["rise", "fall"])
@pytest.mark.parametrize("farads", [1e-15, 20e-15])
def test_a_known_capacitor_measures_as_itself(
    engine_with: Callable[[str], Engine], sheet: Sheet, farads: float, rising: bool
) -> None:
    event = _event(sheet, "D", rising)
    plain = _flow(engine_with("* nothing"), event).charges["D"]
    loaded = _flow(engine_with(f"Cknown D VSS {farads}"), event).charges["D"]
    sign = 1 if rising else -1
    assert sign * (loaded - plain) / V == pytest.approx(farads, abs=CHARGE / V)


def test_what_a_capacitor_to_the_supply_takes_it_gives_back(
    engine_with: Callable[[str], Engine], sheet: Sheet
) -> None:
    """C from D to VDD: charged through the supply when D falls, emptied into it when D rises."""
    farads = 10e-15
    plain, loaded = engine_with("* nothing"), engine_with(f"Cknown D VDD {farads}")
    taken = {}
    for rising in (True, False):
        event = _event(sheet, "D", rising)
        taken[rising] = V * (_flow(loaded, event).charges["VDD"] - _flow(plain, event).charges["VDD"])
    energy = farads * V**2
    assert taken[False] == pytest.approx(energy, abs=V * CHARGE)
    assert taken[True] == pytest.approx(-energy, abs=V * CHARGE)


def test_a_load_that_is_charged_costs_c_v_squared_and_emptied_nothing(
    engine_with: Callable[[str], Engine], sheet: Sheet
) -> None:
    engine = engine_with("* nothing")
    more = 20e-15
    for up, expected in ((True, more * V**2), (False, 0.0)):
        event = _event(sheet, "CK", True, "Q", up)
        small = _flow(engine, event, 5e-15).charges["VDD"]
        large = _flow(engine, event, 5e-15 + more).charges["VDD"]
        # short-circuit current of the output stage differs a little between loads: 1 % of C V^2
        assert V * (large - small) == pytest.approx(expected, abs=0.01 * more * V**2)


def test_a_known_resistor_leaks_v_squared_over_r_in_every_state(
    engine_with: Callable[[str], Engine], sheet: Sheet
) -> None:
    ohms = 1e9
    plain, loaded = engine_with("* nothing"), engine_with(f"Rknown VDD VSS {ohms}")
    states = resting_states(behaviour_of(sheet))
    assert len(states) == 8
    for resting in states:
        before, after = (standing_of(engine, resting.start) for engine in (plain, loaded))
        added = V * (after.currents["VDD"] - before.currents["VDD"])
        assert added == pytest.approx(V**2 / ohms, rel=1e-3)
        for pin, level in resting.outputs.items():
            assert after.levels[pin] == pytest.approx(float(level), abs=0.01)
