"""Facts of the trade (common practice) about which questions each kind of register has."""

from __future__ import annotations

import pytest

from charflow.errors import SheetError
from charflow.plan.arcs import Arc, Kind
from charflow.plan.behaviour import behaviour_of
from charflow.plan.derive import arcs_of
from charflow.sheet import read_sheet
from charflow.sheet.demo import decks_folder
from charflow.sheet.schema import Axes
from charflow.solve.row import groups_of


def arcs(cell: str) -> tuple[Arc, ...]:
    return arcs_of(read_sheet(decks_folder() / f"{cell}.toml"))


CELLS = [path.stem for path in sorted(decks_folder().glob("tarn_*.toml"))]
LATCHES = {"tarn_latp_1", "tarn_latn_1"}


@pytest.mark.parametrize("cell", CELLS)
def test_data_reaches_the_output_without_a_clock_in_a_latch_only(cell: str) -> None:
    assert any(arc.kind is Kind.DATA_TO_Q for arc in arcs(cell)) == (cell in LATCHES)


@pytest.mark.parametrize(
    ("cell", "pin", "releases"),
    [("tarn_dffcp_1", "CLRN", True), ("tarn_dffsp_1", "SET", False), ("tarn_dffcsp_1", "SETN", True)],
)
def test_recovery_and_removal_are_of_the_releasing_edge_only(cell: str, pin: str, releases: bool) -> None:
    for kind in (Kind.RECOVERY, Kind.REMOVAL):
        edges = {arc.rising for arc in arcs(cell) if arc.kind is kind and arc.pin == pin}
        assert edges == {releases}


@pytest.mark.parametrize(
    ("cell", "pin", "stored"), [("tarn_dffcp_1", "CLRN", False), ("tarn_dffsp_1", "SET", True)]
)
@pytest.mark.parametrize("clock", [False, True])
def test_an_asynchronous_pin_acts_at_either_level_of_the_clock(
    cell: str, pin: str, stored: bool, clock: bool
) -> None:
    register = behaviour_of(read_sheet(decks_folder() / f"{cell}.toml"))
    acts = pin == "SET"
    before = {"CK": clock, "D": not stored, pin: not acts}
    assert register.after((not stored,), before, {**before, pin: acts}) == (stored,)
    (arc,) = [arc for arc in arcs(cell) if arc.kind is Kind.ASYNC_TO_Q]
    assert (arc.related, arc.related_rising) == (pin, acts)


def test_the_enable_of_a_clock_gate_is_measured_by_a_whole_pulse_or_none() -> None:
    found = [arc for arc in arcs("tarn_icgp_1") if arc.kind in (Kind.SETUP, Kind.HOLD)]
    assert {(arc.kind, arc.rising): (arc.observed, arc.quiet) for arc in found} == {
        (Kind.SETUP, True): ((("GCK", True),), ()),
        (Kind.SETUP, False): ((), (("GCK", False),)),
        (Kind.HOLD, True): ((), (("GCK", False),)),
        (Kind.HOLD, False): ((("GCK", True),), ()),
    }
    assert {arc.related_rising for arc in found} == {True}


def test_every_side_condition_of_a_scan_flip_flop_in_which_a_pin_decides_is_an_arc() -> None:
    found = {(arc.pin, arc.rising, arc.side) for arc in arcs("tarn_sdffp_1") if arc.kind is Kind.SETUP}
    assert found == {
        *(("D", edge, side) for edge in (True, False) for side in ("SI & !SE", "!SI & !SE")),
        *(("SI", edge, side) for edge in (True, False) for side in ("D & SE", "!D & SE")),
        *(("SE", edge, side) for edge in (True, False) for side in ("D & !SI", "!D & SI")),
    }


def test_the_bits_of_a_register_are_measured_with_the_others_quiet_and_switching() -> None:
    sides = {arc.side for arc in arcs("tarn_dffp2_1") if arc.kind is Kind.SETUP and arc.pin == "D0"}
    assert sides == {"", "other bits switching"}


def test_every_clocked_cell_has_both_clock_pulses_and_a_period() -> None:
    found = arcs("tarn_dffp_1")
    assert {arc.rising for arc in found if arc.kind is Kind.PULSE_WIDTH} == {True, False}
    assert any(arc.kind is Kind.MIN_PERIOD for arc in found)


def test_constraints_are_measured_at_every_load_asked_for() -> None:
    sheet = read_sheet(decks_folder() / "tarn_dffp_1.toml")
    axes = Axes.model_validate(
        {
            "clock_slew": ["10 ps"],
            "data_slew": ["10 ps"],
            "load": ["1 fF"],
            "constraint_load": "5 fF",
            "constraint_loads": ["1 fF", "25 fF"],
        }
    )
    assert axes.loads_of_constraints == (5e-15, 1e-15, 25e-15)
    (group, *_) = groups_of(sheet)
    assert group.points(axes) == 2 * len(group.delays) + 3 * (len(group.constraints) + len(group.widths))


def test_a_register_whose_outputs_nothing_can_move_is_refused() -> None:
    sheet = read_sheet(decks_folder() / "tarn_dffp_1.toml")
    pins = {
        name: pin.model_copy(update={"shows": "state & !state"} if pin.shows else {})
        for name, pin in sheet.pins.items()
    }
    with pytest.raises(SheetError, match="no input edge can move any output"):
        arcs_of(sheet.model_copy(update={"pins": pins}))
