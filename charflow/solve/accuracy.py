"""Numerical settings chosen by evidence: the tolerance halved until the answers stop moving.

With the trapezoidal rule and error-controlled steps the error of a crossing falls with about the power
2/3 of the tolerance (the local error is of third order in the step, the global one of second). So if
halving the tolerance moves an answer by m, about m / (2^(2/3) - 1) is still wrong after it; that is reported
as what the answer is converged to.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

from charflow.errors import TrialError
from charflow.plan.arcs import PARTNER, Arc
from charflow.plan.deck import Settings
from charflow.plan.stimulus import Condition, at_offset, pin_time
from charflow.plan.trial import Outcome, Trial
from charflow.sheet import Sheet
from charflow.solve.constraint import Constraint, solve_constraint, window
from charflow.solve.crossing import Ending, Guess, shape_of
from charflow.solve.reference import reference
from charflow.solve.row import Group, Hint, Question, RowResult, question
from charflow.solve.verdict import Reference, pushout

Evaluate = Callable[[Trial], Outcome]

LOOSEST = 4e-6  # first tolerance tried
TIGHTEST = 1e-8
ORDER = 2.0 / 3.0
DELAY_SHARE = 5e-4  # of a delay, or DELAY_FLOOR, whichever is larger: what a delay must be converged to
DELAY_FLOOR = 0.015e-12  # s
ROUGH = 2e-12  # s: how closely the crossings are found first
CONSTRAINT_ERROR = 0.06e-12  # s: what setup and hold must be converged to


@dataclass(frozen=True)
class Accuracy:
    """The settings in use and what they leave uncertain: delays as a fraction, constraints in seconds.

    ``taught`` holds the crossings found on the way.
    """

    settings: Settings
    delay_share: float
    constraint: float
    halvings: int
    taught: RowResult


@dataclass(frozen=True)
class _Probe:
    """One constraint solved at loose settings; again and again measured where its crossing lies."""

    condition: Condition
    arc: Arc
    solved: Constraint
    delay: float


def choose_settings(
    make: Callable[[Settings], Evaluate], sheet: Sheet, groups: Sequence[Group], corner: str
) -> Accuracy:
    """Return the loosest settings of a halving ladder at which delays and constraints have converged.

    Tried on every constraint arc at the slowest clock and fastest data slew, where steps are long and
    crossings shallow. ``make`` turns settings into a function from trial to outcome. Raises
    :class:`TrialError` where nothing can be measured there.
    """
    settings = Settings(reltol=LOOSEST)
    probes = list(_probes(make(settings), sheet, groups, corner))
    if not probes:
        return Accuracy(
            Settings(), DELAY_SHARE, CONSTRAINT_ERROR, 0, RowResult(sheet.axes.clock_slew[-1], (), {})
        )
    gain = 2**ORDER
    before = [_places(make(settings), sheet, probe) for probe in probes]
    halvings = 0
    while True:
        settings = replace(settings, reltol=settings.reltol / 2)
        halvings += 1
        now = [_places(make(settings), sheet, probe) for probe in probes]
        delay = max(_relative(a, b) for (a, _), (b, _) in zip(before, now, strict=True)) / (gain - 1)
        place = max(abs(a - b) for (_, a), (_, b) in zip(before, now, strict=True)) / (gain - 1)
        if (delay <= DELAY_SHARE and place <= CONSTRAINT_ERROR) or settings.reltol < TIGHTEST:
            return Accuracy(settings, delay, place, halvings, _taught(sheet, probes))
        before = now


def _probes(evaluate: Evaluate, sheet: Sheet, groups: Sequence[Group], corner: str) -> Iterator[_Probe]:
    axes = sheet.axes
    condition = Condition(corner, axes.clock_slew[-1], axes.data_slew[0], axes.constraint_load)
    rough = sheet.model_copy(update={"measure": sheet.measure.model_copy(update={"resolution": ROUGH})})
    solved: dict[Question, Constraint] = {}
    for group in groups:
        for arc in group.constraints:
            if not arc.observed:
                continue
            try:
                base = reference(evaluate, sheet, arc, condition)
                setup = solved.get(question(arc, PARTNER[arc.kind])) if arc.kind in PARTNER else None
                guess = None
                if setup is not None and setup.value is not None:  # the aperture of an edge is narrow
                    delay = base.slowest
                    guess = Guess(0.05 * delay - setup.value, 0.1 * delay, setup.crossing.slope)
                found = solve_constraint(evaluate, rough, arc, condition, base, guess, lookout=False)
            except TrialError:
                continue
            solved[question(arc)] = found
            if found.crossing.ending is Ending.PUSHOUT:
                yield _Probe(condition, arc, found, base.slowest)


def _places(evaluate: Evaluate, sheet: Sheet, probe: _Probe) -> tuple[Reference, float]:
    """Return the reference and where [s] the crossing lies, from one trial beside it and the slope there."""
    arc = probe.arc
    base = reference(evaluate, sheet, arc, probe.condition)
    crossing = probe.solved.crossing
    until = window(sheet, arc, probe.condition, base, crossing.passes)
    trial = at_offset(sheet, arc, probe.condition, crossing.passes, until)
    since = pin_time(arc, crossing.passes) if arc.since_pin else 0.0
    push = pushout(arc, evaluate(trial), base, sheet.measure.glitch, sheet.measure.pushout, since)
    if push is None or push <= 0:
        return base, crossing.passes
    return base, crossing.passes + crossing.slope * math.log(push / sheet.measure.pushout)


def _taught(sheet: Sheet, probes: Sequence[_Probe]) -> RowResult:
    """Return the crossings found on the way as first guesses for the tables."""
    hints = {}
    for probe in probes:
        assert probe.solved.value is not None
        assert probe.condition.data_slew is not None
        crossing = probe.solved.crossing
        shape = shape_of(crossing, sheet.measure.pushout)
        hint = Hint(probe.solved.value, crossing.slope, probe.delay, probe.condition.corner, shape)
        hints[question(probe.arc), probe.condition.data_slew] = hint
    return RowResult(sheet.axes.clock_slew[-1], (), hints)


def _relative(a: Reference, b: Reference) -> float:
    """Return how far delays and transitions of two references differ, relative, small ones to a floor."""
    return max(
        abs(before[pin] - now[pin]) / max(abs(now[pin]), DELAY_FLOOR / DELAY_SHARE)
        for before, now in ((a.delays, b.delays), (a.transitions, b.transitions))
        for pin in now
    )
