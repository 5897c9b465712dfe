"""A long run: memory stays level and no process stays behind.

    python tests/bench/endurance.py [--points 2000] [--workers 2] [--out DIR]

Runs the demo cell on axes long enough for that many values, watches the memory of every process of the run
twice a second, and ends with a summary. Exit status 1 where memory grew, a value is missing, or a process was
left. Not part of the test suite: 2,000 values take some minutes on two cores.
"""

from __future__ import annotations

import argparse
import json
import os
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass, field
from pathlib import Path
from statistics import median

ROOT = Path(__file__).parent.parent.parent
MARK = "CHARFLOW_ENDURANCE"
GROWTH = (
    0.05  # of its own memory after a quarter of its life, that a process may have grown by at its end ...
)
SLACK = 16.0  # ... and MB on top: tables and hints that are kept on purpose
PAGE = os.sysconf("SC_PAGE_SIZE")

SHEET = """
[cell]
netlist = "{decks}/tarn_dffp_1.spice"

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
clock_slew = [{slews}]
data_slew = [{slews}]
load = [{loads}]
constraint_load = "5 fF"
"""


@dataclass
class Life:
    """The resident memory [MB] of one process over time [s since the run began]."""

    samples: list[tuple[float, float]] = field(default_factory=list)

    def at(self, begin: float, end: float) -> float:
        """Return the median memory [MB] between two shares of its life."""
        first, last = self.samples[0][0], self.samples[-1][0]
        inside = [mb for t, mb in self.samples if begin <= (t - first) / max(last - first, 1e-9) <= end]
        return median(inside or [self.samples[-1][1]])


def axes_for(points: int) -> tuple[list[float], list[float]]:
    """Return slews [ps] and loads [fF] that make at least ``points`` values of the demo cell."""
    n = 2
    while 8 * n * (n // 2 + 1) + 4 * n * n < points:
        n += 1
    slews = [round(10 * 20 ** (i / (n - 1)), 2) for i in range(n)]
    loads = [round(1 + 24 * i / (n // 2), 3) for i in range(n // 2 + 1)]
    return slews, loads


def processes(mark: str) -> dict[int, float]:
    """Return the memory [MB] of every process whose environment carries ``mark``."""
    found = {}
    for folder in Path("/proc").glob("[0-9]*"):
        try:
            if mark.encode() in (folder / "environ").read_bytes():
                found[int(folder.name)] = int((folder / "statm").read_text().split()[1]) * PAGE / 1e6
        except OSError:
            continue
    return found


def watch(process: subprocess.Popen[str], mark: str) -> dict[int, Life]:
    """Return the life of every process of the run, until it ends."""
    lives: dict[int, Life] = {}
    began = time.monotonic()
    while process.poll() is None:
        for number, megabytes in processes(mark).items():
            lives.setdefault(number, Life()).samples.append((time.monotonic() - began, megabytes))
        time.sleep(0.5)
    return lives


def main() -> int:
    """Run, watch, judge."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").partition("\n")[0])
    parser.add_argument("--points", type=int, default=2000)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--out", type=Path)
    arguments = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        folder = arguments.out or Path(name) / "run"
        slews, loads = axes_for(arguments.points)
        text = SHEET.format(
            decks=ROOT / "decks",
            slews=", ".join(f'"{slew} ps"' for slew in slews),
            loads=", ".join(f'"{load} fF"' for load in loads),
        )
        sheet = Path(name) / "endurance.toml"
        sheet.write_text(text, encoding="utf-8")
        mark = f"{os.getpid()}-{time.monotonic_ns()}"
        words = ["run", str(sheet), "--out", str(folder), "--workers", str(arguments.workers)]
        began = time.monotonic()
        process = subprocess.Popen(
            [sys.executable, "-m", "charflow.cli", *words],
            stdout=subprocess.DEVNULL,
            text=True,
            env={**os.environ, "PYTHONPATH": str(ROOT), MARK: mark},
        )
        lives = watch(process, f"{MARK}={mark}")
        seconds = time.monotonic() - began
        time.sleep(1.0)
        left = sorted(processes(f"{MARK}={mark}"))
        rows = json.loads((folder / "tables.json").read_text(encoding="utf-8"))["rows"]
    grown = {
        number: (round(life.at(0.2, 0.3), 1), round(life.at(0.9, 1.0), 1))
        for number, life in lives.items()
        if life.at(0.9, 1.0) > life.at(0.2, 0.3) * (1 + GROWTH) + SLACK
    }
    missing = sum(row["value_ps"] is None for row in rows)
    summary = {
        "values": len(rows),
        "without_a_value": missing,
        "transients": sum(row["transients"] for row in rows),
        "seconds": round(seconds, 1),
        "exit_status": process.returncode,
        "processes": len(lives),
        "largest_mb": round(max(mb for life in lives.values() for _, mb in life.samples), 1),
        "memory_mb_at_a_quarter_and_at_the_end": {
            number: (round(life.at(0.2, 0.3), 1), round(life.at(0.9, 1.0), 1))
            for number, life in lives.items()
        },
        "grown": grown,
        "left_behind": left,
    }
    print(json.dumps(summary, indent=1))
    return int(bool(process.returncode or missing or grown or left))


if __name__ == "__main__":
    sys.exit(main())
