"""How the cost grows: with the number of points and the size of the netlist; a worker's memory over time.

    python tests/bench/scale.py [--json] [--quick] [--only points|elements|memory]

Three questions: is the wall time a table point constant; how does a transient's time grow when a netlist's
wires become ladders of resistors and capacitors, as extraction from a layout makes them; does the memory of
a process stay where it is while it runs thousands of trials.
"""

from __future__ import annotations

import argparse
import json
import os
import re
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from campaigns import measure
from cells import FF, PS, Cell, Grid, cell_named

from charflow.plan.arcs import Kind
from charflow.plan.circuit import circuit_of, read_sources
from charflow.plan.deck import Settings
from charflow.plan.stimulus import Condition, at_offset, relaxed
from charflow.sheet import Sheet
from charflow.simulate.engine import Engine
from charflow.solve.reference import reference
from charflow.solve.row import groups_of

SLEWS = (10, 14, 20, 28, 40, 56, 80, 112, 160)  # ps; grids take the first n of each axis
SIDES, SIDES_QUICK = (2, 3, 5, 7, 9), (2, 4, 6)
PIECES, PIECES_QUICK = (1, 2, 4, 8, 16), (1, 4, 8)
TRIALS, TRIALS_QUICK = 5000, 600
SETTLED = 0.2  # of the trials, whose growth (caches filling, the first waveforms) is not counted as a leak
OHMS, FARADS = 120.0, 0.4e-15  # of one wire, shared by the pieces of its ladder
PAGE = os.sysconf("SC_PAGE_SIZE")


def main() -> int:
    """Measure what was asked for and print it."""
    parts: dict[str, Callable[[bool], dict[str, Any]]] = {
        "points": points,
        "elements": elements,
        "memory": memory,
    }
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("--json", action="store_true", help="print JSON instead of tables")
    parser.add_argument("--quick", action="store_true", help="fewer sizes and trials")
    parser.add_argument("--only", choices=tuple(parts), help="only this question")
    asked = parser.parse_args()
    found = {name: part(asked.quick) for name, part in parts.items() if asked.only in (None, name)}
    print(
        json.dumps(found, indent=2) if asked.json else "\n\n".join(as_text(*item) for item in found.items())
    )
    return 0


def points(quick: bool) -> dict[str, Any]:
    """Return wall time and transients of tables of growing size, and the exponent of their growth."""
    rows = []
    for side in SIDES_QUICK if quick else SIDES:
        with tempfile.TemporaryDirectory() as name:
            grid = Grid(SLEWS[:side], (1, 5, 25), 5)
            run = measure(cell_named("tarn").sheet(grid, Path(name) / "sheet.toml"), 1)
        prepared = sum(run.by_purpose[key] for key in ("function_proof", "rest", "settings"))
        tables = run.result.transients - prepared - run.by_purpose["settling_preparation"]
        rows.append(
            {
                "values": len(run.result.answers),
                "wall_s": run.wall,
                "rows_s": run.rows,
                "transients": run.result.transients,
                "transients_in_tables": tables,
                "rows_ms_per_value": 1e3 * run.rows / len(run.result.answers),
                "processor_ms_per_value": 1e3 * run.processor / len(run.result.answers),
            }
        )
    sizes = [row["values"] for row in rows]
    return {
        "rows": rows,
        "exponent": exponent(sizes, [row["rows_s"] for row in rows]),
        "exponent_of_transients": exponent(sizes, [row["transients_in_tables"] for row in rows]),
    }


def elements(quick: bool) -> dict[str, Any]:
    """Return the time of a transient against the number of elements of the netlist, and the exponent."""
    cell, rows = cell_named("tarn"), []
    for pieces in PIECES_QUICK if quick else PIECES:
        with tempfile.TemporaryDirectory() as name:
            sheet = extracted(cell, pieces, Path(name))
            rows.append({"pieces_per_wire": pieces, **timed(sheet)})
    return {
        "rows": rows,
        "exponent": exponent([r["elements"] for r in rows], [r["ms_per_transient"] for r in rows]),
    }


def extracted(cell: Cell, pieces: int, folder: Path) -> Sheet:
    """Return the sheet of ``cell`` whose wires are ladders: every transistor terminal but the bulk gets one.

    Each ladder has ``pieces`` resistors in a row and a capacitor to ground after each, which add up to the
    same whatever their number, so the delay changes little and only the size of the netlist grows.
    """
    sheet = cell.sheet(Grid((20, 80), (1, 5), 5), folder / "sheet.toml")
    lines: list[str] = []
    for line in sheet.cell.netlist.read_text(encoding="utf-8").splitlines():
        if not re.match(r"[Mm]\w+\s", line):
            lines.append(line)
            continue
        device, *nodes, bulk, model = line.split()[:6]
        inner = [f"{node}_{device}_{terminal}" for node, terminal in zip(nodes, "dgs", strict=True)]
        lines.append(" ".join([device, *inner, bulk, model, *line.split()[6:]]))
        for node, end in zip(nodes, inner, strict=True):
            places = [node, *(f"{end}_{k}" for k in range(1, pieces)), end]
            for k in range(pieces):
                lines.append(f"R{end}_{k} {places[k]} {places[k + 1]} {OHMS / pieces:g}")
                lines.append(f"C{end}_{k} {places[k + 1]} VSS {FARADS / pieces:g}")
    netlist = folder / "extracted.spice"
    netlist.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return sheet.model_copy(update={"cell": sheet.cell.model_copy(update={"netlist": netlist})})


def timed(sheet: Sheet) -> dict[str, Any]:
    """Return the size of the netlist and what loading, settling and one warm trial of it take."""
    circuit = circuit_of(sheet, read_sources(sheet), "typical").rested(2e-9)
    engine = Engine(circuit, Settings())
    arc = next(arc for group in groups_of(sheet) for arc in group.arcs if arc.kind is Kind.SETUP)
    condition = Condition("typical", 80 * PS, 80 * PS, 5 * FF)
    before = replace(engine.session.clock)
    base = reference(engine.run, sheet, arc, condition)
    first = engine.session.clock - before
    times = []
    for offset in (400, 200, 100, 80, 60):
        before = replace(engine.session.clock)
        engine.run(at_offset(sheet, arc, condition, offset * PS, base.until))
        times.append((engine.session.clock - before).transient)
    size = sum(bool(re.match(r"[mrcMRC]", line)) for line in circuit.netlist.splitlines())
    return {
        "elements": size,
        "load_ms": 1e3 * first.load / max(first.loads, 1),
        "ms_per_transient": 1e3 * sorted(times[1:])[len(times[1:]) // 2],
        "delay_ps": base.slowest / PS,
    }


def memory(quick: bool) -> dict[str, Any]:
    """Return the growth of this process's memory over thousands of trials at ever new offsets and loads."""
    with tempfile.TemporaryDirectory() as name:
        sheet = cell_named("tarn").sheet(Grid((20, 80), (1, 5), 5), Path(name) / "sheet.toml")
        circuit = circuit_of(sheet, read_sources(sheet), "typical").rested(2e-9)
    engine = Engine(circuit, Settings(reltol=1e-4, trtol=7.0))  # the number of runs matters, not their error
    arcs = [arc for group in groups_of(sheet) for arc in group.arcs if arc.kind in (Kind.SETUP, Kind.HOLD)]
    count = TRIALS_QUICK if quick else TRIALS
    trials, megabytes = [], []
    began = time.perf_counter()
    for number in range(count):
        arc = arcs[number % len(arcs)]
        condition = Condition("typical", 20 * PS, 80 * PS, (1 + number / count) * FF)
        engine.run(at_offset(sheet, arc, condition, (200 + 100 * number / count) * PS, 0.6e-9))
        if number % 200 == 0:
            engine.run(relaxed(sheet, arc, condition, 0.6e-9))
        if number % 50 == 0:
            trials.append(number)
            megabytes.append(resident())
    kept = [index for index, number in enumerate(trials) if number >= SETTLED * count]
    slope, _ = np.polyfit([trials[i] for i in kept], [megabytes[i] for i in kept], 1)
    return {
        "trials": count,
        "seconds": time.perf_counter() - began,
        "megabytes_first": megabytes[0],
        "megabytes_last": megabytes[-1],
        "megabytes_per_1000_trials": 1000 * float(slope),
    }


def resident() -> float:
    """Return the memory of this process that is in use now [MB]."""
    return int(Path("/proc/self/statm").read_text(encoding="ascii").split()[1]) * PAGE / 1e6


def exponent(sizes: list[float], costs: list[float]) -> float:
    """Return the slope of log cost over log size: 1 where the cost is proportional to the size."""
    slope, _ = np.polyfit(np.log(sizes), np.log(costs), 1)
    return float(slope)


def as_text(name: str, found: dict[str, Any]) -> str:
    """Return one part's figures as a table."""
    lines = [name]
    rows = found.get("rows", [])
    if rows:
        lines.append("".join(f"{heading:>24}" for heading in rows[0]))
        lines += ["".join(f"{value:24.5g}" for value in row.values()) for row in rows]
    lines += [f"  {key}: {value:.4g}" for key, value in found.items() if key != "rows"]
    return "\n".join(lines)


if __name__ == "__main__":
    sys.exit(main())
