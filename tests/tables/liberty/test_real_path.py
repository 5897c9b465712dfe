"""Slack of a small design from our tables against a transistor-level simulation of the same transistors.

Two registers with gates between. ``sta`` (Debian's opensta) works out setup and hold slack from a Liberty
file made by charflow for the register and one made here, by plain transients in the ngspice executable,
for the gate. The same path is then simulated whole, transistor by transistor, in the ngspice executable
with decks and ``.measure`` lines written here, at the period (setup) or the skew (hold) of zero slack and
a little to either side. The second register captures if its clock-to-output delay has grown by no more than
the tables' own pushout. charflow's simulation code has no part in that.
"""

from __future__ import annotations

import re
import shutil
import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from charflow.tables.liberty.library import library_texts

pytestmark = [pytest.mark.slow, pytest.mark.ngspice]

V, SLEW, PUSHOUT = 1.2, 50.0, 0.10  # supply [V], clock slew [ps] from 20 to 80 %, as in the sheet
RAMP = SLEW / 0.6
LOADS = {"q2": 5.0, "qn2": 1.0, "qn1": 1.0}  # fF; as the tables have them
RELAXED = 1500.0  # ps; a period at which nothing presses
# ps, about 1 % of the path: tables are interpolated, a real edge is no ramp, and the first register's output
# is loaded by gates, not by a capacitor. On either side of the slack's zero by this much the sign is right.
MARGIN = 3.0

SHEET = """
[cell]
netlist = "{decks}/tarn_dffp_1.spice"
subckt = "tarn_dffp_1"
[pins]
CK  = {{ role = "clock", active = "rise" }}
D   = {{ role = "data" }}
Q   = {{ role = "output", shows = "state" }}
QN  = {{ role = "output", shows = "!state" }}
VDD = {{ role = "power" }}
VSS = {{ role = "ground" }}
[corners.typical]
models = ["{decks}/tarn130.lib:tt"]
supply = "1.2 V"
temperature = "25 C"
[axes]
clock_slew = ["25 ps", "50 ps", "100 ps"]
data_slew = ["10 ps", "25 ps", "50 ps", "100 ps"]
load = ["1 fF", "3 fF", "6 fF", "12 fF"]
constraint_load = "5 fF"
[measure]
pushout = "10 %"
"""


@dataclass(frozen=True)
class Spice:
    """Runs decks in the ngspice executable; ``models`` and ``cells`` begin every one."""

    program: str
    folder: Path
    decks: Path

    def measures(self, body: list[str], stop: float) -> dict[str, float]:
        """Return what the ``.measure`` lines of ``body`` found, in SI units; failed ones are absent."""
        lines = ["* a path", ".option reltol=1e-4 trtol=1", ".temp 25", f'.lib "{self.decks}/tarn130.lib" tt']
        lines += [f'.include "{self.decks}/{cell}.spice"' for cell in ("tarn_dffp_1", "tarn_inv_1")]
        lines += [f"vdd vdd 0 {V}", *body, f".tran 20p {stop:.6f}p", ".end"]
        deck = self.folder / "path.cir"
        deck.write_text("\n".join([*lines, ""]), encoding="utf-8")
        done = subprocess.run(
            [self.program, "-b", deck.name],
            cwd=self.folder,
            capture_output=True,
            text=True,
            check=False,
            timeout=120,
            stdin=subprocess.DEVNULL,
        )
        found = re.findall(r"^(\w+)\s*=\s*(-?[\d.]+e[+-]\d+)", done.stdout, re.MULTILINE)
        return {name: float(value) for name, value in found}


def _edges(name: str, first: int, at: list[float], ramp: float) -> str:
    """Return a piecewise-linear source that flips at each time of ``at`` [ps], 50 % point to 50 % point."""
    points, level = [(0.0, first)], first
    for time in at:
        points += [(time - ramp / 2, level), (time + ramp / 2, 1 - level)]
        level = 1 - level
    return f"v{name} {name} 0 pwl({' '.join(f'{t:.6f}p {V * v:g}' for t, v in points)})"


# --- the gate's Liberty -------------------------------------------------------------------------------------

GATE_SLEWS, GATE_LOADS = (10.0, 25.0, 50.0, 100.0), (1.0, 3.0, 6.0, 12.0)


def _gate_point(spice: Spice, slew: float, load: float) -> dict[str, float]:
    half, low, high = V / 2, 0.2 * V, 0.8 * V
    body = [
        _edges("in", 0, [500, 1500], slew / 0.6),
        "xg in out vdd 0 tarn_inv_1",
        f"cl out 0 {load}f",
        f".measure tran d_fall trig v(in) val={half} rise=1 targ v(out) val={half} fall=1",
        f".measure tran d_rise trig v(in) val={half} fall=1 targ v(out) val={half} rise=1",
        f".measure tran t_fall trig v(out) val={high} fall=1 targ v(out) val={low} fall=1",
        f".measure tran t_rise trig v(out) val={low} rise=1 targ v(out) val={high} rise=1",
        ".measure tran q_in integ i(vin) from=300p to=1000p",
    ]
    return spice.measures(body, 2500)


def _gate_library(spice: Spice) -> str:
    points = {(s, c): _gate_point(spice, s, c) for s in GATE_SLEWS for c in GATE_LOADS}
    farads = -points[25.0, 3.0]["q_in"] / V * 1e15

    def table(name: str, key: str) -> str:
        rows = (", ".join(f"{1e12 * points[s, c][key]:.4f}" for c in GATE_LOADS) for s in GATE_SLEWS)
        return f"{name} (t) {{ values ({', '.join(f'{chr(34)}{row}{chr(34)}' for row in rows)}); }}"

    names = {"cell_rise": "d_rise", "cell_fall": "d_fall"}
    names |= {"rise_transition": "t_rise", "fall_transition": "t_fall"}
    tables = " ".join(table(name, key) for name, key in names.items())
    axes = f'index_1 ("{", ".join(map(str, GATE_SLEWS))}"); index_2 ("{", ".join(map(str, GATE_LOADS))}");'
    return f"""library (gates) {{ delay_model : table_lookup; time_unit : "1ps";
  capacitive_load_unit (1, ff); voltage_unit : "1V";
  slew_lower_threshold_pct_rise : 20; slew_lower_threshold_pct_fall : 20;
  slew_upper_threshold_pct_rise : 80; slew_upper_threshold_pct_fall : 80;
  input_threshold_pct_rise : 50; input_threshold_pct_fall : 50;
  output_threshold_pct_rise : 50; output_threshold_pct_fall : 50; nom_voltage : {V};
  lu_table_template (t) {{ variable_1 : input_net_transition;
    variable_2 : total_output_net_capacitance; {axes} }}
  cell (tarn_inv_1) {{ pin (A) {{ direction : input; capacitance : {farads:.5f}; }}
    pin (Y) {{ direction : output; function : "!A"; timing () {{ related_pin : "A";
      timing_sense : negative_unate; {tables} }} }} }} }}
"""


# --- the design ---------------------------------------------------------------------------------------------

LONG = [("q1", "n1"), ("n1", "n2"), ("n1", "x1"), ("n2", "n3"), ("n3", "d2"), ("n3", "x2"), ("n3", "x3")]
SHORT = [("q1", "n1"), ("n1", "d2")]


def _verilog(gates: list[tuple[str, str]]) -> str:
    names = sorted({name for pair in gates for name in pair} - {"d2"})
    lines = [f"tarn_inv_1 g{i} (.A({a}), .Y({y}));" for i, (a, y) in enumerate(gates)]
    return "\n".join(
        [
            "module top (input ck, input d1, output q2, output qn1, output qn2);",
            f"wire d2, {', '.join(names)};",
            "tarn_dffp_1 u1 (.CK(ck), .D(d1), .Q(q1), .QN(qn1));",
            *lines,
            "tarn_dffp_1 u2 (.CK(ck), .D(d2), .Q(q2), .QN(qn2));",
            "endmodule",
            "",
        ]
    )


PERIOD = 2000.0


def _slacks(
    sta: Callable[[str, Path], str], folder: Path, gates: list[tuple[str, str]], kind: str
) -> dict[str, float]:
    """Return the slack [ps] at u2/D for its rising and its falling edge."""
    (folder / "top.v").write_text(_verilog(gates), encoding="utf-8")
    lines = ["read_liberty register.lib", "read_liberty gates.lib", "read_verilog top.v", "link_design top"]
    lines += [f"create_clock -name c -period {PERIOD} ck", "set_propagated_clock c"]
    lines += [f"set_input_transition {SLEW} ck"]
    lines += [f"set_load {LOADS[pin]} {pin}" for pin in LOADS]
    for edge in ("rise", "fall"):
        lines += [
            f"puts EDGE_{edge}",
            f"report_checks -path_delay {kind} -from u1/CK -{edge}_to u2/D -digits 4",
        ]
    said = sta("\n".join([*lines, ""]), folder)
    return {
        edge: float(re.search(rf"EDGE_{edge}.*?(-?[\d.]+)\s+slack", said, re.DOTALL)[1])  # type: ignore[index]
        for edge in ("rise", "fall")
    }


LAUNCH, BEFORE = 4000.0, (500.0, 2000.0)  # ps; the edges before bring both registers to a known state


def _delay_of_second(
    spice: Spice, gates: list[tuple[str, str]], captured: bool, gap: float, *, hold: bool
) -> float | None:
    """Return the clock-to-output delay [ps] of the second register, None where it does not capture.

    Its deciding edge comes ``gap`` ps after the launching one. It must capture ``captured``: for setup what
    the first register launches there, for hold what it showed before.
    """
    held = not captured  # both paths have an even number of inverters
    wanted = [held, captured, held] if hold else [held, held, captured]
    data, level = [], int(wanted[0])
    for value, edge in zip(wanted[1:], BEFORE, strict=True):
        if value != bool(level):
            data.append(edge + 1000)
            level = int(value)
    clock1 = [t for edge in (*BEFORE, LAUNCH) for t in (edge, edge + 700)]
    decides = LAUNCH + gap
    clock2 = [t for edge in BEFORE for t in (edge, edge + 700)]
    clock2 += [decides, decides + 700] if hold else [LAUNCH, LAUNCH + gap / 2, decides, decides + 700]
    half, way = V / 2, "rise" if captured else "fall"
    body = [
        _edges("ck1", 0, clock1, RAMP),
        _edges("ck2", 0, clock2, RAMP),
        _edges("d1", int(wanted[0]), data, RAMP),
        "xu1 d1 ck1 q1 qn1 vdd 0 tarn_dffp_1",
        *(f"xg{i} {a} {y} vdd 0 tarn_inv_1" for i, (a, y) in enumerate(gates)),
        "xu2 d2 ck2 q2 qn2 vdd 0 tarn_dffp_1",
        *(f"c{pin} {pin} 0 {load}f" for pin, load in LOADS.items()),
        f".measure tran t_q when v(q2)={half} {way}=last td={decides - RAMP / 2}p",
        f".measure tran ends find v(q2) at={decides + 1100}p",
    ]
    found = spice.measures(body, decides + 1200)
    if "t_q" not in found or abs(found["ends"] - V * captured) > 0.1 * V:
        return None
    return found["t_q"] * 1e12 - decides


def _captures(
    spice: Spice, gates: list[tuple[str, str]], captured: bool, gaps: tuple[float, ...], *, hold: bool
) -> list[bool]:
    """Tell at which ``gaps`` [ps] the second register is no later than the pushout of the tables allows."""
    relaxed = _delay_of_second(spice, gates, captured, 0.0 if hold else RELAXED, hold=hold)
    assert relaxed is not None
    delays = (_delay_of_second(spice, gates, captured, gap, hold=hold) for gap in gaps)
    return [delay is not None and delay <= (1 + PUSHOUT) * relaxed for delay in delays]


@pytest.fixture(scope="module")
def spice(tmp_path_factory: pytest.TempPathFactory, tarn: Path) -> Spice:
    program = shutil.which("ngspice")
    if program is None:
        pytest.skip("the ngspice executable is not installed")
    return Spice(program, tmp_path_factory.mktemp("path"), tarn)


@pytest.fixture(scope="module")
def libraries(spice: Spice, sta: Any) -> Path:
    """A folder with register.lib, measured by charflow, and gates.lib, measured here."""
    folder = spice.folder
    (folder / "sheet.toml").write_text(SHEET.format(decks=spice.decks), encoding="utf-8")
    for words in (("run", "--check", "0"), ("power",)):
        subprocess.run(
            [sys.executable, "-m", "charflow.cli", words[0], "sheet.toml", "--out", "run", *words[1:]],
            cwd=folder,
            check=True,
            capture_output=True,
            timeout=600,
        )
    (library,) = library_texts([folder / "run"], "register")
    (folder / "register.lib").write_text(library.text, encoding="utf-8")
    (folder / "gates.lib").write_text(_gate_library(spice), encoding="utf-8")
    return folder


@pytest.mark.parametrize("edge", ["rise", "fall"])
def test_setup_slack_is_the_period_to_spare(sta: Any, spice: Spice, libraries: Path, edge: str) -> None:
    """Bisected once: least periods 323.9 and 316.1 ps from tables, 322.6 and 315.6 ps from transistors."""
    least = PERIOD - _slacks(sta, libraries, LONG, "max")[edge]
    either_side = (least - MARGIN, least + MARGIN)
    assert _captures(spice, LONG, edge == "rise", either_side, hold=False) == [False, True]


@pytest.mark.parametrize("edge", ["rise", "fall"])
def test_hold_slack_is_the_skew_to_spare(sta: Any, spice: Spice, libraries: Path, edge: str) -> None:
    """Bisected once: largest skews 227.8 and 202.5 ps from tables, 229.3 and 203.5 ps from transistors."""
    most = _slacks(sta, libraries, SHORT, "min")[edge]
    either_side = (most - MARGIN, most + MARGIN)
    assert _captures(spice, SHORT, edge == "fall", either_side, hold=True) == [True, False]
