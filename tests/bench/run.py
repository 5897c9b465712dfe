"""What a number costs and how wrong it is: charflow beside the usual private loop and beside brute force.

    python tests/bench/run.py [--json] [--cell tarn|sky130] [--quick]

``README.md`` in this folder says what each figure means.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

from brute import Checked, check, tasks_of
from campaigns import CONSTRAINTS, Run, measure
from cells import CHECKED, CHECKED_QUICK, FF, POINT, PS, QUICK, WHOLE, Cell, cell_named
from textbook import Loop, Value

CELLS = ("tarn", "sky130")
SAMPLES = (  # what the textbook loop measures: kind, data edge, clock slew and data slew [ps]
    ("setup", "rise", POINT, POINT),
    ("hold", "fall", POINT, POINT),
    ("setup", "fall", 5, 580),
    ("hold", "rise", 580, 5),
    ("setup", "rise", 580, 580),
    ("hold", "fall", 5, 5),
)
TARGETS: dict[str, Callable[[str, float], bool]] = {
    "ratio": lambda cell, value: value >= (50 if cell == "tarn" else 200),
    "transients_mean": lambda cell, value: value <= 4.5,
    "transients_max": lambda cell, value: value <= 12,
    "error_delay_pct_max": lambda cell, value: value <= 0.1,
    "error_constraint_ps_max": lambda cell, value: value <= 0.15,
    "overhead_fraction": lambda cell, value: value <= 0.15,
    "two_worker_speedup": lambda cell, value: value >= 1.8,
}


def main() -> int:
    """Measure the cells asked for and print what was found."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("--json", action="store_true", help="print JSON instead of tables")
    parser.add_argument("--cell", choices=CELLS, help="only this cell")
    parser.add_argument("--quick", action="store_true", help="smaller tables and fewer checks")
    asked = parser.parse_args()
    found = {
        "cores": os.cpu_count(),
        "load_average_before": round(os.getloadavg()[0], 2),
        "quick": asked.quick,
        "cells": {name: bench(cell_named(name), asked.quick) for name in CELLS if asked.cell in (None, name)},
    }
    found["load_average_after"] = round(os.getloadavg()[0], 2)
    print(json.dumps(found, indent=2) if asked.json else as_text(found))
    return 0


def bench(cell: Cell, quick: bool) -> dict[str, Any]:
    """Return every figure of one cell. Both methods and both numbers of workers take turns."""
    grid = QUICK if quick else WHOLE
    samples = SAMPLES[:2] if quick else SAMPLES
    values: list[Value] = []
    with tempfile.TemporaryDirectory() as name:
        one_corner = cell.sheet(grid, Path(name) / "one.toml")
        two_corners = cell.sheet(grid, Path(name) / "two.toml", ("typical", "slow"))

        def loop(first: int, last: int) -> None:
            for kind, edge, clock, data in samples[first:last]:
                say(f"{cell.name}: textbook {kind} of {edge}, slews {clock:g} and {data:g} ps")
                script = Loop(one_corner, "typical", clock * PS, data * PS, grid.constraint_load * FF)
                values.append(script.value(kind, edge))

        third = len(samples) // 3 or 1
        say(f"{cell.name}: a table at one corner, one worker")
        single = measure(one_corner, 1)
        loop(0, third)
        say(f"{cell.name}: the same with two workers")
        double = measure(one_corner, 2)
        loop(third, 2 * third)
        pair: tuple[Run, Run] | None = None
        if not quick:
            say(f"{cell.name}: tables at two corners, one worker, then two")
            pair = measure(two_corners, 1), measure(two_corners, 2)
        loop(2 * third, len(samples))
    say(f"{cell.name}: brute force")
    grids = CHECKED_QUICK if quick else CHECKED
    tasks = [task for turn, grid in enumerate(grids) for task in tasks_of(cell, grid, turn)]
    checked = check(tasks, min(2, os.cpu_count() or 1))
    return {
        **cost(single, values),
        **speedup(single, double, pair),
        **breakdown(single, values),
        **errors(checked),
    }


def cost(run: Run, values: list[Value]) -> dict[str, Any]:
    """Return the cost of a setup or hold value either way [s], and the transients it took."""
    textbook = sum(value.seconds for value in values) / len(values)
    textbook_processor = sum(value.processor for value in values) / len(values)
    return {
        "textbook_s_per_value": textbook,
        "charflow_s_per_value": run.seconds_per_value,
        "ratio": textbook / run.seconds_per_value,
        "ratio_of_processor_time": textbook_processor / run.processor_per_value,
        "transients_mean": run.transients_mean,
        "transients_max": run.transients_max,
        "transients_mean_with_preparation": run.transients_mean_all_in,
        "overhead_fraction": run.overhead,
    }


def speedup(single: Run, double: Run, pair: tuple[Run, Run] | None) -> dict[str, Any]:
    """Return one worker's wall time over two workers': of the whole command's work, and of the rows alone."""
    one, two = pair or (single, double)
    return {
        "two_worker_speedup": one.wall / two.wall,
        "two_worker_speedup_corners": len(one.result.accuracy),
        "two_worker_speedup_one_corner": single.wall / double.wall,
        "two_worker_speedup_rows_only": one.rows / two.rows,
        "two_worker_processor_time_grew": two.processor / one.processor,
    }


def breakdown(run: Run, values: list[Value]) -> dict[str, Any]:
    """Return what explains the cost: where transients and time of the one-worker run went."""
    clock, accuracy = run.result.clock, run.result.accuracy["typical"]
    known = {place(a.quantity.value, a.pin_edge, a.clock_slew, a.data_slew): a.value for a in run.constraints}
    beside = [known.get(place(v.kind, v.edge, v.clock_slew, v.data_slew)) for v in values]
    apart = [abs(v.value - own) / PS for v, own in zip(values, beside, strict=True) if own is not None]
    return {
        "values": len(run.result.answers),
        "setup_hold_values": len(run.constraints),
        "values_missing": run.result.failed,
        "transients": clock.transients,
        "transients_by_purpose": run.by_purpose,
        "wall_s": run.wall,
        "wall_s_per_value_of_any_kind": run.wall / len(run.result.answers),
        "transient_s": clock.transient,
        "load_s": clock.load,
        "loads": clock.loads,
        "starting_s": run.starting,
        "time_parts_s": run.parts,
        "reltol": accuracy.settings.reltol,
        "rest_s": run.result.rests["typical"].seconds,
        "textbook_values": len(values),
        "textbook_processes_per_value": sum(value.processes for value in values) / len(values),
        "textbook_differs_ps_max": max(apart, default=None),
    }


def place(kind: str, edge: str, clock_slew: float | None, data_slew: float | None) -> tuple[object, ...]:
    """Return what identifies a value; slews [s] are rounded, as one side read them from text."""
    return kind, edge, *(round((slew or 0.0) / PS, 3) for slew in (clock_slew, data_slew))


def errors(checked: list[Checked]) -> dict[str, Any]:
    """Return the largest errors against brute force, and where."""
    constraints = [
        item for item in checked if item.what.startswith(tuple(kind.value for kind in CONSTRAINTS))
    ]
    delays = [item for item in checked if item not in constraints]
    worst_delay = max(delays, key=lambda item: abs(item.percent))
    worst_constraint = max(constraints, key=lambda item: abs(item.picoseconds))
    return {
        "error_delay_pct_max": abs(worst_delay.percent),
        "error_delay_worst": worst_delay.what,
        "error_constraint_ps_max": abs(worst_constraint.picoseconds),
        "error_constraint_worst": worst_constraint.what,
        "delays_and_transitions_checked": len(delays),
        "constraints_checked": len(constraints),
        "brute_force_moves_ps": max(item.moved for item in constraints if item.moved is not None) / PS,
    }


def as_text(found: dict[str, Any]) -> str:
    """Return the figures as a table, with a word on each that has a target."""
    cells: dict[str, dict[str, Any]] = found["cells"]
    average = f"{found['load_average_before']} before, {found['load_average_after']} after"
    lines = [f"cores {found['cores']}, load average {average}{', quick' if found['quick'] else ''}", ""]
    lines.append(f"{'':36}" + "".join(f"{name:>20}" for name in cells))
    for figure in next(iter(cells.values())):
        row = f"{figure:36}"
        for name, figures in cells.items():
            value = figures[figure]
            if isinstance(value, int | float):
                met = figure not in TARGETS or TARGETS[figure](name, value)
                row += f"{'' if met else 'MISSED ':>10}{value:10.4g}"
            elif isinstance(value, dict):
                row += "".join(f"\n    {part:32}{number:>20.5g}" for part, number in value.items())
            else:
                row += f"  {value}"
        lines.append(row)
    return "\n".join(lines)


def say(text: str) -> None:
    """Tell on standard error what is being done."""
    print(text, file=sys.stderr, flush=True)


if __name__ == "__main__":
    sys.exit(main())
