"""The usual private loop: one simulator process a trial, a fixed step of 1 ps, ``.measure``, bisection.

Written as such a script is written: the original model library by ``.lib``, the netlist by ``.include``,
default tolerances, a clock pulse that stores the old value first, two printed numbers parsed. Nothing of
charflow is used but the paths of its sheet.
"""

from __future__ import annotations

import os
import re
import resource
import subprocess
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

from charflow.sheet import Role, Sheet

STEP = 1e-12  # s
RESOLUTION = 0.1e-12  # s; the same as charflow's
REACH = 250e-12  # s; the bracket it starts from lies this far, and half of both ramps, to either side
GAP = 0.8e-9  # s between the ramps of the stimulus, and once more at its end


@dataclass(frozen=True)
class Value:
    """One setup or hold value [s], its slews [s], its wall and processor time [s], how many processes."""

    kind: str
    edge: str
    clock_slew: float
    data_slew: float
    value: float
    seconds: float
    processor: float
    processes: int


@dataclass(frozen=True)
class Loop:
    """The script for one cell at one corner, with its slews [s] and load [F].

    The clock rises, falls, the data may change, and the clock rises again: ramps with gaps between them.
    """

    sheet: Sheet
    corner: str
    clock_slew: float
    data_slew: float
    load: float

    def value(self, kind: str, edge: str) -> Value:
        """Return the ``setup`` or ``hold`` of a data ``edge`` (``rise`` or ``fall``)."""
        began, used = time.perf_counter(), _processor()
        rising = edge == "rise"
        captured = rising if kind == "setup" else not rising
        late = {pin: self._limit(delay) for pin, delay in self._trial(captured, None).items()}
        if not late:
            raise RuntimeError("the textbook deck does not capture with data relaxed")
        reach = REACH + (self._ramp(self.clock_slew) + self._ramp(self.data_slew)) / 2
        low, high, processes = -reach, reach, 1
        while high - low > RESOLUTION:
            middle = (low + high) / 2
            delays = self._trial(captured, -middle if kind == "setup" else middle, kind)
            processes += 1
            if delays.keys() == late.keys() and all(delays[pin] <= late[pin] for pin in late):
                high = middle
            else:
                low = middle
        seconds, processor = time.perf_counter() - began, _processor() - used
        return Value(kind, edge, self.clock_slew, self.data_slew, high, seconds, processor, processes)

    def _ramp(self, slew: float) -> float:
        low, high = self.sheet.measure.slew_fractions
        return slew / (high - low)

    @property
    def _times(self) -> tuple[float, float, float, float, float]:
        """The 50 % points [s] of first edge, its return, data change and measured edge; the end of it all."""
        clock, data = self._ramp(self.clock_slew), self._ramp(self.data_slew)
        first = GAP / 2 + clock / 2
        fall = first + clock + GAP
        change = fall + (clock + data) / 2 + GAP / 2
        edge = change + (clock + data) / 2 + GAP
        return first, fall, change, edge, edge + clock / 2 + data + GAP

    def _limit(self, delay: float) -> float:
        return delay * (1 + self.sheet.measure.pushout)

    def _trial(self, captured: bool, at: float | None, kind: str = "setup") -> dict[str, float]:
        """Return the delays [s] of the outputs that captured; data ``at`` [s] after the edge, or relaxed."""
        _, _, change, edge, _ = self._times
        changes = [(change, captured)] if at is None or kind == "hold" else []
        if at is not None:
            changes.append((edge + at, captured if kind == "setup" else not captured))
        with tempfile.TemporaryDirectory() as name:
            folder = Path(name)
            (folder / "trial.cir").write_text(self._deck(captured, changes), encoding="utf-8")
            mode = self.sheet.corners[self.corner].compatibility
            behaviour = f"set ngbehavior={mode}\n" if mode else ""
            (folder / ".spiceinit").write_text(f"{behaviour}set ng_nomodcheck\n", encoding="utf-8")
            done = subprocess.run(
                [os.environ.get("NGSPICE_EXECUTABLE") or "ngspice", "-b", "trial.cir"],
                cwd=folder,
                capture_output=True,
                text=True,
                errors="replace",
                check=False,
                stdin=subprocess.DEVNULL,
                env={**os.environ, "OMP_NUM_THREADS": "1"},
            )
        found = dict(re.findall(r"^(delay_\w+|final_\w+)\s*=\s*([-+.\deE]+)", done.stdout, re.MULTILINE))
        supply = self.sheet.corners[self.corner].supply
        delays = {}
        for number, (pin, up) in enumerate(self._outputs(captured).items()):
            delay, final = found.get(f"delay_{number}"), found.get(f"final_{number}")
            if delay is not None and final is not None and (float(final) > supply / 2) is up:
                delays[pin] = float(delay)
        return delays

    def _outputs(self, captured: bool) -> dict[str, bool]:
        shown = {pin: self.sheet.pins[pin].shows for pin in self.sheet.outputs}
        return {pin: captured is (text == "state") for pin, text in shown.items()}

    def _deck(self, captured: bool, changes: list[tuple[float, bool]]) -> str:
        sheet, corner = self.sheet, self.sheet.corners[self.corner]
        (clock,), (data,) = sheet.with_role(Role.CLOCK), sheet.with_role(Role.DATA)
        lines = ["* setup and hold by bisection"]
        lines += [f".option {name}={value:g}" for name, value in corner.options.items()]
        for spec in corner.models:
            file, _, section = spec.rpartition(":")
            lines.append(f".lib '{file}' {section}")
        lines += [f".include '{sheet.cell.netlist}'", f".temp {corner.temperature:g}"]
        lines += [f"v{pin} {pin} 0 {corner.supply:g}" for pin in sheet.with_role(Role.POWER)]
        lines += [f"v{pin} {pin} 0 0" for pin in sheet.with_role(Role.GROUND)]
        first, fall, _, edge, stop = self._times
        pulse = [(first, True), (fall, False), (edge, True)]
        lines.append(self._source(clock, False, pulse, self._ramp(self.clock_slew)))
        lines.append(self._source(data, not captured, changes, self._ramp(self.data_slew)))
        lines.append(f"xcell {' '.join(_ports(sheet))} {sheet.cell.subckt}")
        lines += [f"cload_{pin} {pin} 0 {self.load:g}" for pin in sheet.outputs]
        lines.append(f".tran {STEP:g} {stop:.9g} 0 {STEP:g}")
        half = f"{corner.supply / 2:g}"
        for number, (pin, up) in enumerate(self._outputs(captured).items()):
            lines.append(
                f".measure tran delay_{number} trig v({clock}) val={half} rise=2 "
                f"targ v({pin}) val={half} {'rise' if up else 'fall'}=last td={fall:.9g}"
            )
            lines.append(f".measure tran final_{number} find v({pin}) at={stop - 2 * STEP:.9g}")
        return "\n".join([*lines, ".end"]) + "\n"

    def _source(self, pin: str, level: bool, changes: list[tuple[float, bool]], ramp: float) -> str:
        half = ramp / 2
        supply = self.sheet.corners[self.corner].supply
        points = [f"0 {supply * level:g}"]
        for at, up in changes:
            points += [f"{at - half:.9g} {supply * level:g}", f"{at + half:.9g} {supply * up:g}"]
            level = up
        return f"v{pin} {pin} 0 pwl({' '.join(points)})"


def _processor() -> float:
    """Return the processor time [s] of the processes waited for so far."""
    usage = resource.getrusage(resource.RUSAGE_CHILDREN)
    return usage.ru_utime + usage.ru_stime


def _ports(sheet: Sheet) -> list[str]:
    """Return the ports of the cell in the order of its netlist."""
    for line in sheet.cell.netlist.read_text(encoding="utf-8").splitlines():
        words = line.split()
        if len(words) > 2 and words[0].lower() == ".subckt" and words[1] == sheet.cell.subckt:
            return words[2:]
    raise RuntimeError(f"{sheet.cell.netlist} has no {sheet.cell.subckt}")
