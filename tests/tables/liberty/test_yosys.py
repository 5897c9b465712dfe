"""Debian's yosys (YosysHQ, ISC licence) reads our libraries and maps a design onto our registers."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from charflow.sheet.demo import decks_folder
from charflow.tables.liberty.library import library_texts

CELLS = sorted(path.stem for path in decks_folder().glob("*.toml"))
DESIGNS = {
    "tarn_dffp_1": "always @(posedge clk) q <= d;",
    "tarn_dffcp_1": "always @(posedge clk, negedge clr) if (!clr) q <= 0; else q <= d;",
    "tarn_dffn_1": "always @(negedge clk) q <= d;",
}
Yosys = Callable[[str, Path], str]


@pytest.mark.parametrize("cell", CELLS)
def test_yosys_reads_the_library_without_a_warning(
    cell: str, make_folder: Callable[..., Path], yosys: Yosys, tmp_path: Path
) -> None:
    (library,) = library_texts([make_folder(cell)], cell)
    (tmp_path / "cell.lib").write_text(library.text, encoding="utf-8")
    # yosys has no state tables, so the clock gates' state_function is no function to it
    gate = "-ignore_miss_func" if "clock_gating_integrated_cell" in library.text else ""
    said = yosys(f"read_liberty {gate} cell.lib", tmp_path)
    assert "Imported" in said


@pytest.mark.parametrize("cell", DESIGNS)
def test_a_design_is_mapped_onto_our_flip_flop_and_nothing_else(
    cell: str, make_folder: Callable[..., Path], yosys: Yosys, tmp_path: Path
) -> None:
    (library,) = library_texts([make_folder(cell)], cell)
    (tmp_path / "cell.lib").write_text(library.text, encoding="utf-8")
    (tmp_path / "design.v").write_text(
        f"module m (input clk, input clr, input [1:0] d, output reg [1:0] q); {DESIGNS[cell]} endmodule\n",
        encoding="utf-8",
    )
    said = yosys(
        "read_verilog design.v; synth -top m; dfflibmap -liberty cell.lib; opt_clean; "
        f"read_liberty -lib cell.lib; clean; check -assert -mapped; select -assert-count 2 t:{cell}; "
        "select -assert-count 2 t:*; stat",
        tmp_path,
    )
    assert cell in said
