"""The static timing analyser of Debian's package opensta reads our libraries and finds every number.

OpenSTA (Parallax Software, GPL-3.0) interpolates tables by itself, bilinear as the Liberty User Guide
says, in single precision: its printed digits are compared to 1e-3 ps plus 1e-6 of the value.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import RegularGridInterpolator

from charflow.sheet import Sheet, read_sheet
from charflow.sheet.demo import decks_folder
from charflow.solve.power import Power
from charflow.tables.flat import Row
from charflow.tables.folder import read_tables
from charflow.tables.liberty.library import library_texts, read_measured
from charflow.tables.power import power_row, write_power

CELLS = sorted(path.stem for path in decks_folder().glob("*.toml"))
POINTS = [(50.0, 10.0, 5.0), (33.0, 120.0, 17.5)]  # slews of control and data pins [ps], load [fF]
WAYS, HALF = ("-max", "-min"), "early"  # hold is reported among early checks only
Sta = Callable[[str, Path], str]
Arc = tuple[str, str, str, str, str]  # kind, related pin, its edge, pin, its edge
_KINDS = {"setup": "setup", "hold": "hold", "recovery": "recovery", "removal": "removal"}


def _verilog(cell: str, sheet: Sheet) -> str:
    ports = [f"input {pin}" for pin in sheet.inputs] + [f"output {pin}" for pin in sheet.outputs]
    pins = ", ".join(f".{pin}({pin})" for pin in (*sheet.inputs, *sheet.outputs))
    return f"module top ({', '.join(ports)});\n{cell} u1 ({pins});\nendmodule\n"


def _script(sheet: Sheet, fast: tuple[str, ...], point: tuple[float, float, float], asked: list[str]) -> str:
    control, data, load = point
    lines = ["read_liberty cell.lib", "read_verilog top.v", "link_design top"]
    clock = fast[0]
    lines += [f"create_clock -name c -period 10000 {clock}", "set_propagated_clock c"]
    for pin in sheet.inputs:
        lines.append(f"set_input_transition {control if pin in fast else data} {pin}")
    lines += [f"set_load {load} {pin}" for pin in sheet.outputs]
    return "\n".join([*lines, *asked, ""])


def _fast_pins(sheet: Sheet) -> tuple[str, ...]:
    roles = ("clock", "gate")
    return tuple(pin for pin in sheet.inputs if sheet.pins[pin].role in roles)


_BLOCK = re.compile(
    r"Arc type: (?P<kind>[^\n]+)|^(?P<a>[\w\[\]]+) (?P<ae>[\^v]) -> (?P<b>[\w\[\]]+) (?P<be>[\^v])$"
    r"|^(?P<what>Delay|Slew|Check) = (?P<value>-?[\d.]+)$",
    re.MULTILINE,
)
_EDGE = {"^": "rise", "v": "fall"}


def _reported(said: str) -> dict[Arc, list[float]]:
    """Return every number of report_dcalc, by what it is about."""
    found: dict[Arc, list[float]] = {}
    kind, arc = "", ("", "", "", "")
    for match in _BLOCK.finditer(said):
        if match["kind"]:
            kind = match["kind"].strip()
        elif match["a"]:
            arc = (match["a"], _EDGE[match["ae"]], match["b"], _EDGE[match["be"]])
        else:
            name = {"Delay": "delay", "Slew": "transition"}.get(match["what"]) or _KINDS[kind]
            found.setdefault((name, *arc), []).append(float(match["value"]))
    return {key: sorted(values) for key, values in found.items()}


def _expected(rows: tuple[Row, ...], slews: dict[str, float], load: float) -> dict[Arc, list[float]]:
    """Return what bilinear interpolation of our own tables gives for the same arcs."""
    tables: dict[tuple[Arc, str], list[Row]] = {}
    for row in rows:
        if row.quantity in ("pulse_width", "min_period"):
            continue
        delay = not row.pin
        name = row.quantity if not delay or row.quantity == "transition" else "delay"
        pin, edge = (row.output, row.output_edge) if delay else (row.pin, row.pin_edge)
        side = row.when if "other bits" not in row.when else ""
        key = ((name, row.related_pin, row.related_edge, pin, edge), side)
        tables.setdefault(key, []).append(row)
    found: dict[Arc, list[float]] = {}
    for (arc, _), table in tables.items():
        delay = arc[0] in ("delay", "transition")
        point = (slews[arc[1]], load if delay else slews[arc[3]])
        found.setdefault(arc, []).append(_bilinear(table, point))
    return {key: sorted(values) for key, values in found.items()}


def _bilinear(rows: list[Row], point: tuple[float, float]) -> float:
    def place(row: Row) -> tuple[float, float]:
        if row.clock_slew_ps is None:
            return float(row.data_slew_ps or 0), row.load_ff
        return row.clock_slew_ps, row.load_ff if row.data_slew_ps is None else row.data_slew_ps

    values: dict[tuple[float, float], float] = {}
    for row in rows:
        assert row.value_ps is not None
        values[place(row)] = max(values.get(place(row), -1e9), row.value_ps)
    x, y = (sorted({at[i] for at in values}) for i in range(2))
    grid = np.array([[values[a, b] for b in y] for a in x])
    return float(np.squeeze(RegularGridInterpolator((x, y), grid)(point)))


@pytest.mark.parametrize("point", POINTS, ids=["at a table point", "between points"])
@pytest.mark.parametrize("cell", CELLS)
def test_every_delay_transition_and_constraint_is_what_our_tables_say(
    cell: str, point: tuple[float, float, float], make_folder: Callable[..., Path], sta: Sta, tmp_path: Path
) -> None:
    folder = make_folder(cell)
    sheet = read_sheet(tmp_path / f"{cell}.toml")
    (library,) = [lib for lib in library_texts([folder], cell) if lib.corner == "typical"]
    (tmp_path / "cell.lib").write_text(library.text, encoding="utf-8")
    (tmp_path / "top.v").write_text(_verilog(cell, sheet), encoding="utf-8")
    rows = read_tables(folder).rows
    fast = _fast_pins(sheet)
    slews = {pin: point[0] if pin in fast else point[1] for pin in sheet.inputs}
    want = _expected(rows, slews, point[2])
    pairs = dict.fromkeys((arc[1], arc[3]) for arc in want)
    asked = [f"report_dcalc {way} -from u1/{a} -to u1/{b} -digits 4" for way in WAYS for a, b in pairs]
    asked.insert(len(pairs), f"puts {HALF}")

    late, early = sta(_script(sheet, fast, point, asked), tmp_path).split(HALF)
    got = {**_reported(early), **_reported(late)}

    assert got.keys() == want.keys()
    for arc, values in want.items():
        assert got[arc] == pytest.approx(values, abs=1e-3, rel=1e-6), arc


def test_the_least_pulse_widths_and_period_are_the_pin_attributes(
    make_folder: Callable[..., Path], sta: Sta, tmp_path: Path
) -> None:
    folder = make_folder("tarn_dffcp_1")
    measured = read_measured(folder)
    (library,) = library_texts([folder], "tarn_dffcp_1")
    (tmp_path / "cell.lib").write_text(library.text, encoding="utf-8")
    (tmp_path / "top.v").write_text(_verilog("tarn_dffcp_1", measured.sheet), encoding="utf-8")
    asked = [
        "create_clock -name c -period 20 CK",
        "report_check_types -min_pulse_width -verbose -digits 4",
        "report_check_types -min_period -verbose -digits 4",
    ]

    said = sta(_script(measured.sheet, ("CK",), POINTS[0], asked), tmp_path)

    def largest(quantity: str, edge: str) -> float:
        rows = measured.tables.rows
        return max(r.value_ps or 0 for r in rows if (r.quantity, r.pin, r.pin_edge) == (quantity, "CK", edge))

    widths = {w: float(v) for v, w in re.findall(r"([\d.]+)\s+required pulse width \((low|high)\)", said)}
    high, low = largest("pulse_width", "rise"), largest("pulse_width", "fall")
    worst = "high" if high > low else "low"
    assert widths[worst] == pytest.approx(max(high, low), abs=1e-3)
    period = re.search(r"-([\d.]+)\s+min_period", said)
    assert period is not None, said
    assert float(period[1]) == pytest.approx(largest("min_period", "rise"), abs=1e-3)


def test_leakage_and_capacitances_are_what_power_csv_says(
    make_folder: Callable[..., Path], sta: Sta, tmp_path: Path
) -> None:
    folder = make_folder("tarn_latp_1")
    powers = [Power("typical", "leakage_mean", value=123.4e-12, low=1e-12, high=2e-10)]
    for pin, farads in (("G", 2.25e-15), ("D", 1.75e-15)):
        for edge, more in (("rise", 0.0), ("fall", 0.1e-15)):
            powers.append(Power("typical", "capacitance", pin, edge, value=farads + more))
    write_power(folder, [power_row(power) for power in powers])
    (library,) = library_texts([folder], "tarn_latp_1")
    (tmp_path / "cell.lib").write_text(library.text, encoding="utf-8")
    sheet = read_measured(folder).sheet
    (tmp_path / "top.v").write_text(_verilog("tarn_latp_1", sheet), encoding="utf-8")
    asked = ["report_power -digits 6"]
    asked += [f"report_net -connections -verbose -digits 4 {pin}" for pin in ("D", "G")]

    said = sta(_script(sheet, ("G",), POINTS[0], asked), tmp_path)

    leakage = re.search(r"^Total\s+(\S+)\s+(\S+)\s+(\S+)", said, re.MULTILINE)
    assert leakage is not None, said
    assert float(leakage[3]) == pytest.approx(123.4e-12, rel=1e-5)
    found = dict(re.findall(r"u1/(\w+) input \(\S+\) (r \S+ f \S+)", said))
    assert found == {"D": "r 1.7500 f 1.8500", "G": "r 2.2500 f 2.3500"}


def test_bits_of_a_bus_are_found_by_their_names(
    make_folder: Callable[..., Path], sta: Sta, tmp_path: Path
) -> None:
    names = {"D0": "D[0]", "D1": "D[1]", "Q0": "Q[1]", "Q1": "Q[0]"}
    folder = make_folder("tarn_dffp2_1", names=names)
    (library,) = library_texts([folder], "x")
    (tmp_path / "cell.lib").write_text(library.text, encoding="utf-8")
    (tmp_path / "top.v").write_text(
        "module top (input CK, input [0:1] D, output [1:0] Q);\n"
        "tarn_dffp2_1 u1 (.CK(CK), .D(D), .Q(Q));\nendmodule\n",
        encoding="utf-8",
    )
    lines = [
        "read_liberty cell.lib",
        "read_verilog top.v",
        "link_design top",
        "create_clock -name c -period 9000 CK",
    ]
    lines += ["set_propagated_clock c", "set_input_transition 50 [all_inputs]", "set_load 5 [all_outputs]"]
    asked = [f"report_dcalc -digits 4 -from u1/CK -to {{u1/{pin}}}" for pin in ("Q[1]", "Q[0]", "D[1]")]

    got = _reported(sta("\n".join([*lines, *asked, ""]), tmp_path))

    rows = read_tables(folder).rows
    for pin, quantity in (("Q[1]", "clk_to_q"), ("Q[0]", "clk_to_q"), ("D[1]", "setup")):
        name = "delay" if quantity == "clk_to_q" else quantity
        for edge in ("rise", "fall"):
            want = [
                row.value_ps or 0.0
                for row in rows
                if (row.quantity, row.clock_slew_ps, row.load_ff) == (quantity, 50.0, 5.0)
                if pin in (row.pin, row.output) and edge in (row.pin_edge, row.output_edge)
                if row.data_slew_ps in (None, 50.0)
            ]
            assert got[name, "CK", "rise", pin, edge] == pytest.approx([max(want)], abs=1e-3)
