"""A drafted sheet: it reads, it means what the cell does, and it says what it does not know."""

from __future__ import annotations

import time
from contextlib import suppress
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from charflow.errors import CharflowError, FunctionError, InputError, NetlistError
from charflow.plan.behaviour import behaviour_of
from charflow.probe.draft import Wanted, draft, draft_to, option_values
from charflow.sheet import read_sheet

REGISTERS = [
    "tarn_dffp_1", "tarn_dffn_1", "tarn_dffcp_1", "tarn_dffsp_1", "tarn_dffcsp_1", "tarn_sdffp_1",
    "tarn_edffp_1", "tarn_dffp2_1", "tarn_dyn_1", "tarn_latp_1", "tarn_latn_1", "tarn_icgp_1",
    "tarn_icgn_1", "tarn_icgtp_1",
]  # fmt: skip
SKY130_PROVED = ["dfxtp_1", "dfxtp_4", "dfrtp_1", "dfbbn_1", "edfxtp_1", "sdfxbp_1", "dlrtn_1", "sdlclkp_1"]


@pytest.mark.parametrize("cell", REGISTERS)
def test_the_draft_of_every_register_reads_and_has_a_function(cell: str, tarn: Path, tmp_path: Path) -> None:
    out = tmp_path / "drafted.toml"
    draft_to(tarn / f"{cell}.spice", out)
    sheet = read_sheet(out)
    assert sheet.cell.netlist == tarn / f"{cell}.spice"
    assert behaviour_of(sheet).inputs == sheet.inputs


def test_the_draft_of_the_demo_cell_is_what_its_author_wrote(tarn: Path, tmp_path: Path) -> None:
    out = tmp_path / "drafted.toml"
    draft_to(tarn / "tarn_dffp_1.spice", out)
    assert read_sheet(out).pins == read_sheet(tarn / "tarn_dffp_1.toml").pins


def test_without_models_the_sheet_says_what_to_fill_in(tarn: Path, tmp_path: Path) -> None:
    text = draft(tarn / "tarn_dffp_1.spice", tmp_path / "s.toml")
    assert "NOT SURE: nothing was simulated" in text
    assert "FILL IN: the model file" in text
    assert "FILL_IN.lib" in text
    assert "Estimated from sizes, not simulated" in text


def test_a_dynamic_cell_is_called_so(tarn: Path, tmp_path: Path) -> None:
    text = draft(tarn / "tarn_dyn_1.spice", tmp_path / "s.toml")
    assert "Dynamic: node qn holds the state on its charge alone" in text
    assert "NOT SURE: the end of 1 of these changes hangs on which of two" in text


def test_a_multiplexer_that_may_be_scan_is_marked(gates, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    cell = gates("A B S CK Q")
    cell.choose("next", "S", "A", "B")
    cell.flop("next", "CK", "Q")
    (tmp_path / "cell.spice").write_text(cell.text)
    draft_to(tmp_path / "cell.spice", tmp_path / "s.toml")
    text = (tmp_path / "s.toml").read_text()
    assert text.count("NOT SURE: S chooses between A and B") == 3
    assert read_sheet(tmp_path / "s.toml").cell.next_state == "S ? A : B"


def test_names_a_sheet_must_quote_are_quoted(gates, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    cell = gates("D[0] CK Q[0]")
    cell.flop("D[0]", "CK", "Q[0]")
    (tmp_path / "cell.spice").write_text(cell.text)
    draft_to(tmp_path / "cell.spice", tmp_path / "s.toml")
    assert set(read_sheet(tmp_path / "s.toml").pins) == {"D[0]", "CK", "Q[0]", "VDD", "VSS"}


def test_a_name_no_expression_can_hold_is_an_error(gates, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    cell = gates("D+ CK Q")
    cell.flop("D+", "CK", "Q")
    (tmp_path / "cell.spice").write_text(cell.text)
    with pytest.raises(NetlistError, match="cannot be named"):
        draft(tmp_path / "cell.spice", tmp_path / "s.toml")


def test_a_file_that_is_there_is_not_written_over(tarn: Path, tmp_path: Path) -> None:
    out = tmp_path / "mine.toml"
    out.write_text("mine")
    with pytest.raises(InputError, match="there is a file already"):
        draft_to(tarn / "tarn_dffp_1.spice", out)
    assert out.read_text() == "mine"


def test_models_without_a_supply_are_an_error(tarn: Path, tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no supply"):
        draft(tarn / "tarn_dffp_1.spice", tmp_path / "s.toml", Wanted(models=("x.lib",)))


@pytest.mark.parametrize("word", ["scale", "=1", "scale=", "scale=big", "a b=1", "scale=nan"])
def test_an_option_that_is_none_is_an_error(word: str) -> None:
    with pytest.raises(InputError, match="no SPICE option"):
        option_values([word])
    assert option_values(["scale=1u", "tnom=27"]) == {"scale": 1e-6, "tnom": 27}


@pytest.mark.ngspice
@pytest.mark.parametrize("cell", REGISTERS)
def test_simulation_proves_the_draft_of_every_register(cell: str, tarn: Path, tmp_path: Path) -> None:
    out = tmp_path / "drafted.toml"
    draft_to(tarn / f"{cell}.spice", out, Wanted(models=(f"{tarn}/tarn130.lib:tt",), supply="1.2 V"))
    axes = read_sheet(out).axes
    assert "Proved by simulation" in out.read_text()
    assert "NOT SURE" not in out.read_text()
    assert 5e-12 < axes.clock_slew[0] < 100e-12
    assert axes.clock_slew[-1] == pytest.approx(8 * axes.clock_slew[0], rel=0.1)
    assert 0.5e-15 < axes.load[0] < 10e-15
    assert axes.load[-1] > 4 * axes.load[0]


@pytest.mark.ngspice
def test_a_draft_that_simulation_contradicts_is_an_error(tarn: Path, tmp_path: Path) -> None:
    text = (tarn / "tarn_dffp_1.spice").read_text().replace("w=0.60u l=0.13u", "w=0.60u l=0.13u m=1e-9")
    (tmp_path / "dead.spice").write_text(text)
    wanted = Wanted(models=(f"{tarn}/tarn130.lib:tt",), supply="1.2 V")
    with pytest.raises(CharflowError) as caught:
        draft(tmp_path / "dead.spice", tmp_path / "s.toml", wanted)
    assert isinstance(caught.value, FunctionError | NetlistError)


@pytest.mark.slow
@pytest.mark.ngspice
@pytest.mark.parametrize("cell", SKY130_PROVED)
def test_simulation_proves_drafts_of_sky130_registers(cell: str, sky130: Path, tmp_path: Path) -> None:
    folder = sky130 / "sky130_fd_sc_hd" / "cells" / cell.rpartition("_")[0]
    models = sky130 / "sky130_fd_pr"
    wanted = Wanted(
        models=(f"{models}/combined_models/sky130.lib.spice:tt",),
        supply="1.8 V",
        compatibility="hsa",
        options={"scale": 1e-6},
        include_folders=(models,),
    )
    out = tmp_path / "drafted.toml"
    draft_to(folder / f"sky130_fd_sc_hd__{cell}.spice", out, wanted)
    sheet = read_sheet(out)
    assert "Proved by simulation" in out.read_text()
    assert sheet.corners["typical"].options == {"scale": 1e-6}
    assert 0.5e-15 < sheet.axes.load[0] < 5e-15


def test_the_command_writes_a_sheet_and_says_so(run_cli, tarn: Path, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    out = tmp_path / "new.toml"
    done = run_cli("draft", tarn / "tarn_latn_1.spice", "-o", out)
    assert done.code == 0
    assert "read it before you trust it" in done.stdout
    assert read_sheet(out).pins["GN"].role.value == "gate"
    again = run_cli("draft", tarn / "tarn_latn_1.spice", "-o", out)
    assert again.code == 2
    assert "there is a file already" in again.stderr


NODES = st.sampled_from(["D", "CK", "Q", "a", "b", "c", "VDD", "VSS"])
DEVICES = st.lists(st.tuples(st.booleans(), NODES, NODES, NODES), min_size=1, max_size=16)
JUNK = st.text(alphabet=" \n.+*$MXRC=0123456789abcDQVSsubckt'{}()\\\"\u00e9", max_size=300)


@settings(max_examples=120, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(devices=DEVICES, junk=JUNK, inside=st.booleans(), mixed=st.integers(0, 3))
def test_any_netlist_ends_in_a_sheet_or_a_clear_error(devices, junk, inside, mixed, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    lines = [
        f"M{at} {d} {g} {s} {'VSS' if n else 'VDD'} {'nmos' if n else 'pmos'} w={at + 1}u l=0.1u"
        for at, (n, d, g, s) in enumerate(devices)
    ]
    text = "\n".join([".subckt c D CK Q VDD VSS", *lines, ".ends", ""])
    if mixed == 0:
        text = text.replace(".ends", f"{junk}\n.ends") if inside else text + junk
    netlist, out = tmp_path / "c.spice", tmp_path / "c.toml"
    netlist.write_text(text, encoding="utf-8")
    out.unlink(missing_ok=True)
    began = time.monotonic()
    with suppress(CharflowError):
        draft_to(netlist, out)
    if out.exists():
        behaviour_of(read_sheet(out))
    assert time.monotonic() - began < 30
