"""The error of charflow's numbers against brute force: a fixed step of 0.25 ps and tight tolerances.

The transients run in the same library, from the same rest, but with none of what makes charflow fast: no
error-controlled step (the bound of 0.25 ps always holds), no bypass, no guess that is not checked. A crossing
is bracketed to 0.01 ps by trials on either side of it; where it is, charflow's value has no say beyond being
the place where the search begins.
"""

from __future__ import annotations

import math
import multiprocessing
import os
import tempfile
from collections.abc import Iterable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path

from cells import Cell, Grid

from charflow.campaign.run import run_campaign
from charflow.plan.arcs import Arc, Kind, edge_name
from charflow.plan.circuit import Circuit, circuit_of, read_sources
from charflow.plan.deck import Settings
from charflow.plan.stimulus import Condition, at_offset
from charflow.sheet import Sheet
from charflow.simulate.engine import Engine
from charflow.solve.answer import Answer
from charflow.solve.constraint import window
from charflow.solve.reference import reference
from charflow.solve.row import groups_of
from charflow.solve.verdict import NotSettled, Reference, pushout

FINE = Settings("fine", reltol=1e-6, trtol=1.0, max_step=0.25e-12, extra=(("bypass", 0.0),))
FINER = replace(FINE, name="finer", reltol=5e-7, max_step=0.125e-12)
BRACKET = 0.01e-12  # s
FIRST_REACH = 0.05e-12  # s; tripled until the bracket holds the crossing
FLOOR = 30e-12  # s; 0.1 % of it are the 0.03 ps allowed for a short delay


@dataclass(frozen=True)
class Task:
    """One value of charflow to be checked; ``halved`` asks how far half the step moves the truth."""

    sheet: Sheet
    circuit: Circuit
    answer: Answer
    transition: Answer | None = None
    halved: bool = False


@dataclass(frozen=True)
class Checked:
    """A value [s] of charflow and the brute-force value [s].

    ``moved`` [s] is how far the latter, or a delay it rests on, moves at half the step and tolerance.
    """

    what: str
    charflow: float
    brute: float
    moved: float | None = None

    @property
    def picoseconds(self) -> float:
        """The error in ps."""
        return (self.charflow - self.brute) * 1e12

    @property
    def percent(self) -> float:
        """The error in % of the value, or of 30 ps if that is larger: 0.1 % is then at least 0.03 ps."""
        return 100 * (self.charflow - self.brute) / max(abs(self.brute), FLOOR)


def tasks_of(cell: Cell, grid: Grid, turn: int) -> list[Task]:
    """Run charflow over ``grid`` and return the values to check.

    These are the delays and transitions at every clock slew, and at every pair of slews one setup or hold
    value: which one changes from pair to pair, and with ``turn`` from grid to grid. One of them, in the
    middle of the table, tells how far the brute force itself may be trusted.
    """
    with tempfile.TemporaryDirectory() as name:
        sheet = cell.sheet(grid, Path(name) / "sheet.toml")
        result = run_campaign(sheet, Path(name) / "run", min(2, os.cpu_count() or 1))
    (corner,) = sheet.corners
    circuit = circuit_of(sheet, read_sources(sheet), corner).rested(result.rests[corner].seconds)
    missing = [answer for answer in result.answers if answer.value is None]
    if missing:
        raise RuntimeError(f"{len(missing)} values are missing, the first: {missing[0].status}")
    transitions = {_place(a): a for a in result.answers if a.quantity is Kind.TRANSITION}
    load = sheet.axes.constraint_load
    delays = [a for a in result.answers if a.quantity is Kind.CLK_TO_Q and a.load == load]
    pairs: dict[tuple[float, float | None], list[Answer]] = {}
    for found in result.answers:
        if found.quantity in (Kind.SETUP, Kind.HOLD):
            pairs.setdefault((found.clock_slew, found.data_slew), []).append(found)
    chosen = [answers[(number + turn) % len(answers)] for number, answers in enumerate(pairs.values())]
    return [Task(sheet, circuit, a, transitions[_place(a)]) for a in delays] + [
        Task(sheet, circuit, a, halved=number == len(chosen) // 2) for number, a in enumerate(chosen)
    ]


def check(tasks: Iterable[Task], processes: int) -> list[Checked]:
    """Return every task's values beside the brute-force ones."""
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(processes, mp_context=context) as pool:
        return [item for items in pool.map(_check, tasks) for item in items]


def _check(task: Task) -> list[Checked]:
    answer = task.answer
    assert answer.value is not None
    condition = Condition(answer.corner, answer.clock_slew, answer.data_slew, answer.load)
    arc = _arc(task.sheet, answer)
    if task.transition is None:
        truth = Truth(task, arc, condition, FINE)
        value = truth.crossing(answer.value)
        if not task.halved:
            return [Checked(_words(answer), answer.value, value)]
        finer = Truth(task, arc, condition, FINER)
        moves = [finer.base.delays[pin] - delay for pin, delay in truth.base.delays.items()]
        moves.append(finer.near(value, truth.slope) - truth.near(value, truth.slope))
        return [Checked(_words(answer), answer.value, value, max(map(abs, moves)))]
    base = reference(Engine(task.circuit, FINE).run, task.sheet, arc, condition)
    transition = task.transition.value
    assert transition is not None
    return [
        Checked(_words(answer), answer.value, base.delays[answer.output]),
        Checked(_words(task.transition), transition, base.transitions[answer.output]),
    ]


class Truth:
    """The pushout of one arc at one condition as a function of the offset, at given settings."""

    def __init__(self, task: Task, arc: Arc, condition: Condition, settings: Settings) -> None:
        self.sheet, self.arc, self.condition = task.sheet, arc, condition
        self.limit = task.sheet.measure.pushout
        self.evaluate = Engine(task.circuit, settings).run
        self.base: Reference = reference(self.evaluate, self.sheet, arc, condition)
        self.slope = 5e-12

    def height(self, offset: float) -> float | None:
        """Return log(pushout / limit) at ``offset`` [s]; None where nothing is captured, -9 if nil."""
        until = window(self.sheet, self.arc, self.condition, self.base, offset)
        while True:
            outcome = self.evaluate(at_offset(self.sheet, self.arc, self.condition, offset, until))
            try:
                push = pushout(self.arc, outcome, self.base, self.sheet.measure.glitch, self.limit)
            except NotSettled:
                until *= 2
                continue
            return None if push is None else math.log(push / self.limit) if push > 1e-5 else -9.0

    def crossing(self, start: float) -> float:
        """Return the offset [s] of the crossing, bracketed to :data:`BRACKET` from ``start`` on."""
        low, high, below, above = self._bracketed(start)
        tries = 0
        while high - low > BRACKET:
            middle = (low + high) / 2
            tries += 1
            if tries < 6 and below is not None and above is not None and below > above:
                self.slope = (high - low) / (below - above)
                root = high + self.slope * above
                middle = root + BRACKET / 3 if high - root > root - low else root - BRACKET / 3
                middle = min(max(middle, low + BRACKET / 4), high - BRACKET / 4)
            height = self.height(middle)
            if height is not None and height <= 0:
                high, above = middle, height
            else:
                low, below = middle, height
        return (low + high) / 2

    def _bracketed(self, start: float) -> tuple[float, float, float | None, float | None]:
        reach = FIRST_REACH
        low, high = start - reach, start + reach
        below, above = self.height(low), self.height(high)
        while below is not None and below <= 0:
            reach *= 3
            high, above, low = low, below, start - reach
            below = self.height(low)
        while above is None or above > 0:
            reach *= 3
            low, below, high = high, above, start + reach
            above = self.height(high)
        return low, high, below, above

    def near(self, offset: float, slope: float) -> float:
        """Return where the crossing lies, judged from one trial beside it and the slope there [s per e]."""
        height = self.height(offset)
        return offset + slope * height if height is not None else math.nan


def _arc(sheet: Sheet, answer: Answer) -> Arc:
    """Return the arc that ``answer`` belongs to."""
    for arc in (arc for group in groups_of(sheet) for arc in group.arcs):
        if arc.kind is not answer.quantity or not arc.observed:
            continue
        output, rising = arc.observed[0]
        if answer.output and (answer.output, answer.output_edge) == (output, edge_name(rising)):
            return arc
        if answer.pin and (answer.pin, answer.pin_edge) == (arc.pin, edge_name(arc.rising)):
            return arc
    raise LookupError(answer)


def _place(answer: Answer) -> tuple[object, ...]:
    return answer.output, answer.output_edge, answer.clock_slew, answer.load


def _words(answer: Answer) -> str:
    slews = [f"{slew * 1e12:g}" for slew in (answer.clock_slew, answer.data_slew) if slew is not None]
    edge = f"{answer.pin or answer.output} {answer.pin_edge or answer.output_edge}"
    return f"{answer.quantity.value} {edge}, slews {' and '.join(slews)} ps, load {answer.load * 1e15:g} fF"
