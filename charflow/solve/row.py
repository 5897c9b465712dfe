"""A row of the tables: all arcs that share one relaxed state, at one corner and one clock slew.

They share their references, and each point gives the next its first guess.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from charflow.errors import TrialError
from charflow.plan.arcs import AFTER, BEFORE, DELAYS, PARTNER, WIDTHS, Arc, Kind
from charflow.plan.derive import arcs_of
from charflow.plan.stimulus import Condition, relaxed
from charflow.plan.trial import Outcome, Start, Trial
from charflow.sheet import Axes, Sheet
from charflow.solve.answer import Answer, answer
from charflow.solve.constraint import Constraint, solve_constraint
from charflow.solve.crossing import Ending, Guess, Shape, shape_of
from charflow.solve.order import between, ends_then_middles
from charflow.solve.reference import reference

Evaluate = Callable[[Trial], Outcome]

# Priors for the first step along an axis, before there are two points to draw a line through. A slower
# clock moves the capture later together with the output, a slower data edge takes effect later; measured
# on tarn_dffp_1 and sky130 dfxtp_1 the shares are 0.4 to 0.8 and 0.06 to 0.15. A wrong one costs a trial.
CLOCK_DELAY_SHARE = 0.6  # of the change in reference delay, by which setup shrinks
DATA_SLEW_SHARE = 0.17  # of the change in data slew, by which setup grows and hold shrinks


@dataclass(frozen=True)
class Group:
    """Arcs that begin from the same relaxed state and so share reference trials.

    ``by_data`` tells that its rows run over the data slew axis. ``needs`` are the groups (by number)
    whose answers at the same slew teach this one: hold follows setup.
    """

    start: Start
    arcs: tuple[Arc, ...]
    needs: tuple[int, ...] = ()
    by_data: bool = False

    @property
    def delays(self) -> tuple[Arc, ...]:
        """The delay arcs."""
        return tuple(arc for arc in self.arcs if arc.kind in DELAYS)

    @property
    def constraints(self) -> tuple[Arc, ...]:
        """The arcs that constrain two edges against each other."""
        return tuple(arc for arc in self.arcs if arc.kind not in DELAYS | WIDTHS)

    @property
    def widths(self) -> tuple[Arc, ...]:
        """The pulse widths and periods."""
        return tuple(arc for arc in self.arcs if arc.kind in WIDTHS)

    def slews(self, axes: Axes) -> tuple[float, ...]:
        """Return the slews [s] of the rows of this group."""
        return axes.data_slew if self.by_data else axes.clock_slew

    def points(self, axes: Axes) -> int:
        """Return how many values a row of this group has."""
        loads = len(axes.loads_of_constraints)
        constraints = len(self.constraints) * len(axes.data_slew) + len(self.widths)
        return 2 * len(self.delays) * len(axes.load) + loads * constraints


def groups_of(sheet: Sheet) -> tuple[Group, ...]:
    """Return the arcs of the cell, grouped by what they share; groups that others need come first."""
    together: dict[tuple[int, bool, Start], list[Arc]] = {}
    for arc in arcs_of(sheet):
        late = 2 if arc.kind in WIDTHS else 1 if arc.kind in AFTER else 0
        together.setdefault((late, arc.kind is Kind.DATA_TO_Q, arc.relaxed), []).append(arc)
    ordered = sorted(together.items(), key=lambda item: item[0][:2])
    first = tuple(n for n, ((late, by_data, _), _) in enumerate(ordered) if not late and not by_data)
    return tuple(
        Group(start, tuple(arcs), first if late == 1 else (), by_data)
        for (late, by_data, start), arcs in ordered
    )


Question = tuple[str, str, bool, tuple[tuple[str, bool], ...]]


def question(arc: Arc, kind: Kind | None = None) -> Question:
    """Return what identifies a constraint across rows and groups, of another ``kind`` if given."""
    side = (*arc.when, *(((arc.neighbours, True),) if arc.neighbours else ()))
    return ((kind or arc.kind).value, arc.pin, arc.rising, side)


@dataclass(frozen=True)
class Hint:
    """What a solved constraint teaches its neighbours: value, slope and reference delay [s], and where.

    ``shape`` is its curve of log pushout around the crossing.
    """

    value: float
    slope: float
    delay: float
    corner: str
    shape: Shape = ()


@dataclass(frozen=True)
class RowResult:
    """The answers of one row, and hints for others keyed by (question, data slew [s])."""

    clock_slew: float
    answers: tuple[Answer, ...]
    hints: dict[tuple[Question, float], Hint]


@dataclass
class Meter:
    """Counts the transients that a function from trial to outcome really ran, and the rungs it used."""

    evaluate: Evaluate
    ran: Callable[[], int]
    rungs: set[str] = field(default_factory=set)

    def __call__(self, trial: Trial) -> Outcome:
        """Return the outcome of ``trial`` and note the rung that gave it."""
        outcome = self.evaluate(trial)
        self.rungs.add(outcome.rung)
        return outcome


def solve_row(
    evaluate: Evaluate,
    ran: Callable[[], int],
    key_of: Callable[[Trial], str],
    sheet: Sheet,
    group: Group,
    corner: str,
    clock_slew: float,
    neighbours: Sequence[RowResult] = (),
    converged: tuple[float, float] = (0.0, 0.0),
    axes: Axes | None = None,
) -> RowResult:
    """Return every answer of one row, over the columns of ``axes`` (those of the sheet unless given).

    ``ran()`` counts transients run so far, ``key_of`` names a trial; ``neighbours`` are rows already
    solved that say something of this one. ``converged`` is what the settings leave uncertain: of delays as
    a fraction, of constraints in seconds; it widens the brackets. A point without an answer has no value and
    its reason as status.
    """
    asked = axes or sheet.axes
    solver = _Row(
        evaluate, ran, key_of, sheet, group, corner, clock_slew, tuple(neighbours), converged, asked
    )
    answers = [*solver.delays(), *solver.constraints(), *solver.widths()]
    return RowResult(clock_slew, tuple(answers), solver.hints)


def lost_row(
    sheet: Sheet, group: Group, corner: str, clock_slew: float, reason: str, axes: Axes | None = None
) -> RowResult:
    """Return the row in which no point has an answer, each for the same ``reason``."""

    def evaluate(trial: Trial) -> Outcome:
        raise TrialError(reason)

    return solve_row(evaluate, lambda: 0, lambda trial: "", sheet, group, corner, clock_slew, axes=axes)


@dataclass
class _Row:
    evaluate: Evaluate
    ran: Callable[[], int]
    key_of: Callable[[Trial], str]
    sheet: Sheet
    group: Group
    corner: str
    clock_slew: float
    neighbours: tuple[RowResult, ...]
    converged: tuple[float, float]
    axes: Axes
    hints: dict[tuple[Question, float], Hint] = field(default_factory=dict)

    def delays(self) -> list[Answer]:
        """Return delay and transition of each output over the load axis."""
        answers: list[Answer] = []
        for arc in self.group.delays:
            for load in self.axes.load:
                answers += self._delay(arc, self._condition(arc, load))
        return answers

    def _condition(self, arc: Arc, load: float, data_slew: float | None = None) -> Condition:
        if self.group.by_data:
            return Condition(self.corner, None, self.clock_slew, load)
        return Condition(self.corner, self.clock_slew, data_slew, load)

    def _delay(self, arc: Arc, condition: Condition) -> list[Answer]:
        before = self.ran()
        meter = Meter(self.evaluate, self.ran)
        pin = arc.observed[0][0]
        try:
            found = reference(meter, self.sheet, arc, condition)
        except TrialError as error:
            cost = self.ran() - before
            return [
                answer(arc, condition, kind, None, None, one_line(error), cost if kind is arc.kind else 0, "")
                for kind in (arc.kind, Kind.TRANSITION)
            ]
        key = self.key_of(relaxed(self.sheet, arc, condition, found.until))
        status, cost = _with_rungs("measured", meter), self.ran() - before
        delay, transition = found.delays[pin], found.transitions[pin]
        width = 2 * self.converged[0] * abs(delay)  # an absolute error of the waveform's time axis
        return [
            answer(arc, condition, arc.kind, delay, width, status, cost, key),
            answer(arc, condition, Kind.TRANSITION, transition, width, status, 0, key),
        ]

    def constraints(self) -> list[Answer]:
        """Return setup, hold, recovery and removal of each arc over the data slew axis."""
        slews = self.axes.data_slew
        order = [index for index, _ in ends_then_middles(len(slews), last_first=False)]
        found: dict[tuple[int, int, int], Answer] = {}
        for number, arc in enumerate(self.group.constraints):
            for row, load in enumerate(self.axes.loads_of_constraints):
                for index in order:
                    found[number, row, index] = self._constraint(
                        arc, self._condition(arc, load, slews[index])
                    )
        return [found[key] for key in sorted(found)]

    def widths(self) -> list[Answer]:
        """Return pulse widths and periods, one a load."""
        return [
            self._constraint(arc, self._condition(arc, load))
            for arc in self.group.widths
            for load in self.axes.loads_of_constraints
        ]

    def _constraint(self, arc: Arc, condition: Condition) -> Answer:
        before = self.ran()
        meter = Meter(self.evaluate, self.ran)
        axes = self.sheet.axes  # the first point solved is surveyed; the one furthest from it gets a lookout
        opposite = (condition.clock_slew, condition.data_slew) == (axes.clock_slew[0], axes.data_slew[-1])
        try:
            base = reference(meter, self.sheet, arc, condition)
            delay = base.slowest
            guess = None if arc.kind in WIDTHS else self._guess(arc, condition.data_slew or 0.0, delay)
            result = solve_constraint(meter, self.sheet, arc, condition, base, guess, lookout=opposite)
        except TrialError as error:
            return answer(arc, condition, arc.kind, None, None, one_line(error), self.ran() - before, "")
        cost = self.ran() - before
        if result.value is None:
            return answer(arc, condition, arc.kind, None, None, _why(result), cost, "")
        shape = shape_of(result.crossing, self.sheet.measure.pushout)
        hint = Hint(result.value, result.crossing.slope, delay, self.corner, shape)
        if condition.load == axes.constraint_load and condition.data_slew is not None:
            self.hints[question(arc), condition.data_slew] = hint
        status = _with_rungs(result.crossing.ending.value, meter)
        key = self.key_of(result.deciding) if result.deciding else ""
        width = result.crossing.bracket + 2 * self.converged[1]
        return answer(arc, condition, arc.kind, result.value, width, status, cost, key)

    def _guess(self, arc: Arc, data_slew: float, delay: float) -> Guess | None:
        """Return the expected crossing: what others say of this point, corrected by this row so far."""
        asked = question(arc)
        here = {slew: hint for (q, slew), hint in self.hints.items() if q == asked}
        like = self._likest(arc, data_slew, here)
        if like is None:
            return None
        slope = like.slope
        expected = self._expected(arc, data_slew, delay)
        if expected is not None:
            errors = {
                slew: hint.value - predicted
                for slew, hint in here.items()
                if (predicted := self._expected(arc, slew, delay)) is not None
            }
            taught = self._taught(arc, data_slew)
            sure = (
                0.5 * slope if len(taught) > 1 and errors else 2 * slope if taught or errors else 0.1 * delay
            )
            return Guess(expected + (between(data_slew, errors) if errors else 0.0), sure, slope, like.shape)
        if not here:
            return None
        values = {slew: hint.value for slew, hint in here.items()}
        if len(values) > 1:
            gap = abs(max(values.values()) - min(values.values()))
            return Guess(between(data_slew, values), max(2 * slope, 0.1 * gap), slope, like.shape)
        (slew, value), *_ = values.items()
        later = data_slew - slew if arc.kind in BEFORE else slew - data_slew
        return Guess(value + DATA_SLEW_SHARE * later, 2 * slope + 0.15 * abs(later), slope, like.shape)

    def _likest(self, arc: Arc, data_slew: float, here: dict[float, Hint]) -> Hint | None:
        """Return the solved point whose curve should be most like this one."""
        taught = self._taught(arc, data_slew)
        if taught:
            return taught[0]
        if here:
            return here[min(here, key=lambda slew: abs(slew - data_slew))]
        partners = self._partners(arc)
        if partners:
            return Hint(partners[0].value, partners[0].slope, partners[0].delay, partners[0].corner)
        return None

    def _partners(self, arc: Arc) -> list[Hint]:
        asked = question(arc, PARTNER.get(arc.kind))
        return [hint for row in self.neighbours for (q, _), hint in row.hints.items() if q == asked]

    def _expected(self, arc: Arc, data_slew: float, delay: float) -> float | None:
        """Return what other rows say of a point, or None.

        The aperture of one data edge (setup plus hold) is much the same at every slew, so hold follows
        setup with the sign turned; what is left is interpolated over the clock slew.
        """
        setup = self._setup(arc, self.clock_slew, data_slew)
        known: dict[float, float] = {}
        for row in self.neighbours:
            hint = row.hints.get((question(arc), data_slew))
            if hint is None:
                continue
            value = hint.value * (delay / hint.delay if hint.corner != self.corner else 1.0)
            theirs = self._setup(arc, row.clock_slew, data_slew)
            known[row.clock_slew] = value if setup is None or theirs is None else value + theirs
        if len(known) == 1 and arc.kind in BEFORE and self.clock_slew not in known:
            (value,) = known.values()
            moved = next(
                delay - hint.delay for hint in self._taught(arc, data_slew) if hint.corner == self.corner
            )
            return value - CLOCK_DELAY_SHARE * moved
        if known:
            return between(self.clock_slew, known) - (setup or 0.0)
        return None if setup is None else 0.05 * delay - setup

    def _taught(self, arc: Arc, data_slew: float) -> list[Hint]:
        asked = (question(arc), data_slew)
        return [row.hints[asked] for row in self.neighbours if asked in row.hints]

    def _setup(self, arc: Arc, clock_slew: float, data_slew: float) -> float | None:
        """Return the setup of the same data edge at another point, if ``arc`` is a hold or the like."""
        if arc.kind not in PARTNER:
            return None
        asked = (question(arc, PARTNER[arc.kind]), data_slew)
        rows = (row for row in self.neighbours if row.clock_slew == clock_slew and asked in row.hints)
        row = next(rows, None)
        return None if row is None else row.hints[asked].value


def one_line(error: Exception) -> str:
    """Return an error as one line for a status column."""
    return " ".join(str(error).split())


def _with_rungs(status: str, meter: Meter) -> str:
    extra = sorted(meter.rungs - {"standard"})
    return f"{status}; settings {', '.join(extra)}" if extra else status


def _why(result: Constraint) -> str:
    crossing = result.crossing
    low = min(s.offset for s in crossing.samples) * 1e12
    high = max(s.offset for s in crossing.samples) * 1e12
    if crossing.ending is Ending.NEVER_FAILS:
        return f"no offset fails: captured at every offset tried, down to {low:.1f} ps"
    return f"no offset passes: not captured in time at any offset tried, up to {high:.1f} ps"
