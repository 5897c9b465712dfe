"""What a cell does, in Liberty's words; expected texts follow the Liberty User Guide's own examples."""

from __future__ import annotations

from collections.abc import Callable
from itertools import product
from pathlib import Path

import pytest

from charflow.errors import InputError
from charflow.sheet.logic import parse_logic
from charflow.tables.liberty.expression import expression, sdf_condition, side_levels
from charflow.tables.liberty.library import library_texts
from charflow.tables.liberty.syntax import Block, Complex, Simple, render

MakeFolder = Callable[..., Path]

SAYS = {
    "tarn_dffp_1": ['ff ("IQ", "IQN")', 'clocked_on : "CK"', 'next_state : "D"', 'nextstate_type : "data"'],
    "tarn_dffn_1": ['clocked_on : "!CKN"', 'timing_type : "falling_edge"', 'timing_type : "setup_falling"'],
    "tarn_dffcp_1": ['clear : "!CLRN"', 'timing_type : "recovery_rising"', 'timing_type : "clear"'],
    "tarn_dffsp_1": ["preset : ", 'function : "IQN"'],
    "tarn_dffcsp_1": ['clear_preset_var1 : "H"', 'clear_preset_var2 : "H"', 'function : "IQ"'],
    "tarn_edffp_1": ['next_state : "((E & D) | (!E & IQ))"', 'nextstate_type : "load"'],
    "tarn_sdffp_1": [
        'next_state : "((SE & SI) | (!SE & D))"',
        "test_cell ()",
        'signal_type : "test_scan_in"',
        'signal_type : "test_scan_enable"',
        'signal_type : "test_scan_out"',
        'nextstate_type : "scan_enable"',
        "default_timing : true",
        "sdf_cond : \"SI == 1'b1 && SE == 1'b0\"",
    ],
    "tarn_latp_1": ['latch ("IQ", "IQN")', 'enable : "G"', 'data_in : "D"', 'timing_type : "rising_edge"'],
    "tarn_latn_1": ['enable : "!GN"', 'timing_sense : "negative_unate"', 'timing_type : "setup_rising"'],
    "tarn_icgp_1": ['clock_gating_integrated_cell : "latch_posedge"', 'state_function : "(IQ & CK)"'],
    "tarn_icgn_1": ['clock_gating_integrated_cell : "latch_negedge"', "clock_gate_out_pin : true"],
    "tarn_icgtp_1": ['"latch_posedge_precontrol"', "clock_gate_test_pin : true"],
    "tarn_dffp2_1": ['ff ("IQ0", "IQN0")', 'ff ("IQ1", "IQN1")', 'function : "IQ1"'],
}


@pytest.mark.parametrize("cell", SAYS)
def test_the_function_of_each_kind_of_cell_is_said(cell: str, make_folder: MakeFolder) -> None:
    (library,) = library_texts([make_folder(cell)], "x")
    for text in SAYS[cell]:
        assert text in library.text, text


def test_the_test_cell_is_the_register_without_scan(make_folder: MakeFolder) -> None:
    (library,) = library_texts([make_folder("tarn_sdffp_1")], "x")
    inside = library.text.partition("test_cell ()")[2]
    assert 'next_state : "D"' in inside


def test_a_state_table_opens_the_gate_latch_at_low_and_keeps_at_high(make_folder: MakeFolder) -> None:
    (library,) = library_texts([make_folder("tarn_icgp_1")], "x")
    assert 'statetable ("CK E", "IQ")' in library.text
    assert "L L : - : L, L H : - : H, H L : - : N, H H : - : N" in library.text


@pytest.mark.parametrize(
    "text", ["A ? B : C", "A ^ B ^ C", "!(A & B) | C", "A ? (B ? 1 : C) : !B", "A'B + C", "(A | 0) & 1 ^ C"]
)
def test_an_expression_keeps_its_meaning(text: str) -> None:
    logic = parse_logic(text)
    again = parse_logic(expression(logic, {}))
    for values in product((False, True), repeat=3):
        levels = dict(zip("ABC", values, strict=True))
        assert again.value({n: levels[n] for n in again.names}) == logic.value(levels)
        held = parse_logic(expression(logic, {}, {"A": levels["A"]}))
        assert "A" not in held.names
        assert held.value({n: levels[n] for n in held.names}) == logic.value(levels)


def test_side_conditions_are_read_as_levels_or_not_at_all() -> None:
    assert side_levels("A & !B") == {"A": True, "B": False}
    assert side_levels("") == {}
    assert side_levels("A | B") is None
    assert side_levels("A & !A") is None
    assert sdf_condition({"A": True, "B": False}) == "A == 1'b1 && B == 1'b0"


def test_text_is_quoted_so_that_it_stays_text() -> None:
    block = Block("cell", ('a"b\\',), (Simple("x", 'say "hi"'), Complex("y", (1.0, "z"))))
    assert render(block) == 'cell ("a\\"b\\\\") {\n  x : "say \\"hi\\"";\n  y (1, "z");\n}\n'
    with pytest.raises(InputError, match="cannot"):
        render(Block("cell", ("a\nb",), ()))
