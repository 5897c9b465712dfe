"""The text of a deck: whole in itself, and the same drive as the trial says."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from charflow.plan.arcs import Kind
from charflow.plan.circuit import Circuit, circuit_of, node_names, read_sources
from charflow.plan.deck import Settings, deck, nudged, number, source_points, span
from charflow.plan.derive import arcs_of
from charflow.plan.stimulus import Condition, at_offset, waveform
from charflow.plan.trial import Move, Start, Trial, levels
from charflow.sheet import Sheet, read_sheet

PS = 1e-12
CONDITION = Condition("typical", 50 * PS, 50 * PS, 5e-15)
COLD, WARM = None, {"p_q": 0.0, "p_qn": 1.2, "xcell.sa": 0.123456789012345678}


@pytest.fixture(scope="module")
def sheet(tarn_folder: Path) -> Sheet:
    return read_sheet(tarn_folder / "tarn_dffp_1.toml")


@pytest.fixture(scope="module")
def tarn_folder() -> Path:
    return Path(__file__).parents[2] / "decks"


@pytest.fixture(scope="module")
def circuit(sheet: Sheet) -> Circuit:
    return circuit_of(sheet, read_sources(sheet), "typical")


@pytest.fixture(scope="module")
def trial(sheet: Sheet) -> Trial:
    arc = next(arc for arc in arcs_of(sheet) if arc.kind is Kind.SETUP and arc.rising)
    return at_offset(sheet, arc, CONDITION, 40 * PS, 1e-9)


@pytest.mark.parametrize("volts", [COLD, WARM])
class TestText:
    def test_it_includes_no_other_file_and_runs_no_command(
        self, circuit: Circuit, trial: Trial, volts: dict[str, float] | None
    ) -> None:
        text = deck(circuit, trial, Settings(), volts).lower()
        for word in (".include", ".inc ", ".lib", ".control", "codemodel", "shell"):
            assert word not in text

    def test_it_names_no_place_on_this_machine(
        self, circuit: Circuit, trial: Trial, tarn_folder: Path, volts: dict[str, float] | None
    ) -> None:
        text = deck(circuit, trial, Settings(), volts)
        assert str(tarn_folder) not in text
        assert str(Path.home()) + "/" not in text

    def test_it_begins_with_a_title_and_ends_with_end(
        self, circuit: Circuit, trial: Trial, volts: dict[str, float] | None
    ) -> None:
        lines = deck(circuit, trial, Settings(), volts).splitlines()
        assert lines[0] == "* tarn_dffp_1 at corner typical"
        assert lines[-1] == ".end"
        assert sum(line.startswith(".tran ") for line in lines) == 1

    def test_every_pin_is_driven_or_loaded_once(
        self, circuit: Circuit, trial: Trial, volts: dict[str, float] | None
    ) -> None:
        lines = deck(circuit, trial, Settings(), volts).splitlines()
        for pin in ("ck", "d", "vdd", "vss"):
            assert sum(line.startswith(f"v_p_{pin} p_{pin} 0 ") for line in lines) == 1
        for pin in ("q", "qn"):
            assert f"c_p_{pin} p_{pin} 0 5e-15" in lines
        assert "xcell p_d p_ck p_q p_qn p_vdd p_vss tarn_dffp_1" in lines

    def test_the_settings_are_in_it(
        self, circuit: Circuit, trial: Trial, volts: dict[str, float] | None
    ) -> None:
        lines = deck(circuit, trial, Settings(reltol=3e-4, method="gear"), volts).splitlines()
        assert ".option reltol=0.0003" in lines
        assert ".option method=gear" in lines


def test_a_warm_deck_states_every_node_voltage_to_the_last_bit(circuit: Circuit, trial: Trial) -> None:
    text = deck(circuit, trial, Settings(), WARM)
    found = {node: float(volts) for node, volts in re.findall(r"^\.ic v\((.+)\)=(.+)$", text, re.MULTILINE)}
    assert found == WARM


def test_a_cold_deck_states_none(circuit: Circuit, trial: Trial) -> None:
    assert ".ic" not in deck(circuit, trial, Settings())


@pytest.mark.parametrize("warm", [True, False])
def test_the_drive_in_the_deck_is_the_waveform_of_the_trial(
    circuit: Circuit, trial: Trial, warm: bool
) -> None:
    at = span(circuit, trial, Settings(), warm=warm)
    for pin in circuit.inputs:
        x, y = zip(*source_points(circuit, trial, pin, at, warm=warm), strict=True)
        assert list(x) == sorted(x)
        wanted_x, wanted_y = zip(*waveform(trial, pin, circuit.fractions), strict=True)
        grid = np.linspace(wanted_x[0], trial.until, 997)
        found = np.interp(grid + at.zero, x, y) / circuit.supply
        assert found == pytest.approx(np.interp(grid, wanted_x, wanted_y), abs=1e-9)


def test_a_cold_deck_brings_the_cell_through_every_vector_of_its_start(
    circuit: Circuit, trial: Trial
) -> None:
    at = span(circuit, trial, Settings(), warm=False)
    for pin in circuit.inputs:
        x, y = zip(*source_points(circuit, trial, pin, at, warm=False), strict=True)
        for index, vector in enumerate(trial.start.vectors):
            middle = (index + 0.5) * circuit.rest
            assert np.interp(middle, x, y) == circuit.supply * dict(vector)[pin]
    assert at.zero > circuit.rest * len(trial.start.vectors)
    assert at.stop == pytest.approx(at.zero + trial.until)


def test_a_warm_deck_begins_at_time_zero(circuit: Circuit, trial: Trial) -> None:
    at = span(circuit, trial, Settings(), warm=True)
    assert 0 < at.zero < 1e-9
    for pin in circuit.inputs:
        assert source_points(circuit, trial, pin, at, warm=True)[0][0] == 0.0


class TestNodes:
    def test_a_bus_pin_gets_a_plain_node_and_no_two_pins_share_one(self) -> None:
        nodes = node_names(["D[0]", "D<0>", "D_0_", "d/0", "Q!", "VDD"])
        assert len(set(nodes.values())) == 6
        for name in nodes.values():
            assert re.fullmatch(r"p_[a-z0-9_]+", name)
        assert nodes["D[0]"] == "p_d_0_"

    def test_a_pin_named_like_ngspice_s_own_ground_is_an_ordinary_node(self) -> None:
        assert node_names(["gnd", "0"]) == {"gnd": "p_gnd", "0": "p_0"}


class TestNudge:
    TRIAL = Trial(
        "typical",
        Start((levels({"CK": False, "D": False}),)),
        (Move("CK", True, 0.0, 30 * PS), Move("D", True, -40 * PS, 30 * PS)),
        (("Q", 1e-15),),
        1e-9,
    )

    def test_it_moves_every_edge_but_the_reference(self) -> None:
        clock, data = nudged(self.TRIAL, Settings(nudge=1 * PS)).moves
        assert clock == self.TRIAL.moves[0]
        assert data.at == pytest.approx(-39 * PS)
        assert (data.pin, data.rising, data.slew) == ("D", True, 30 * PS)

    def test_without_one_the_trial_is_the_same(self) -> None:
        assert nudged(self.TRIAL, Settings()) is self.TRIAL


@pytest.mark.parametrize("value", [1e-15, 123.456789e-12, 1 / 3, 1.2, 0.0, -5.5e-9])
def test_a_number_is_written_to_twelve_digits(value: float) -> None:
    assert float(number(value)) == pytest.approx(value, rel=1e-11, abs=0)
