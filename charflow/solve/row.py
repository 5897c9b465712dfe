"""A row of the tables: all arcs that share one relaxed state, at one corner and one clock slew.

They share their references, and each point gives the next its first guess.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from charflow.errors import TrialError
from charflow.plan.arcs import Arc, Kind, arcs_of
from charflow.plan.stimulus import Condition, relaxed
from charflow.plan.trial import Outcome, Start, Trial
from charflow.sheet import Sheet
from charflow.solve.answer import Answer, answer
from charflow.solve.constraint import Constraint, solve_constraint
from charflow.solve.crossing import Ending, Guess
from charflow.solve.reference import reference
from charflow.solve.verdict import Reference

Evaluate = Callable[[Trial], Outcome]


@dataclass(frozen=True)
class Group:
    """Arcs that begin from the same relaxed state and so share reference trials."""

    start: Start
    arcs: tuple[Arc, ...]

    @property
    def delays(self) -> tuple[Arc, ...]:
        """The delay arcs."""
        return tuple(arc for arc in self.arcs if arc.kind is Kind.CLK_TO_Q)

    @property
    def constraints(self) -> tuple[Arc, ...]:
        """The setup and hold arcs."""
        return tuple(arc for arc in self.arcs if arc.kind is not Kind.CLK_TO_Q)


def groups_of(sheet: Sheet) -> tuple[Group, ...]:
    """Return the arcs of the cell, grouped by what they share."""
    together: dict[Start, list[Arc]] = {}
    for arc in arcs_of(sheet):
        together.setdefault(arc.relaxed, []).append(arc)
    return tuple(Group(start, tuple(arcs)) for start, arcs in together.items())


@dataclass(frozen=True)
class Hint:
    """What a solved constraint teaches its neighbours: value and slope [s], and the reference delay [s]."""

    value: float
    slope: float
    delay: float


@dataclass(frozen=True)
class RowResult:
    """The answers of one row, and hints for others keyed by (constraint number, data slew)."""

    clock_slew: float
    answers: tuple[Answer, ...]
    hints: dict[tuple[int, float], Hint]


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
) -> RowResult:
    """Return every answer of one row.

    ``ran()`` counts transients run so far, ``key_of`` names a trial; ``neighbours`` are rows already
    solved, the nearest first. A point that cannot be measured has no value and its reason as status.
    """
    solver = _Row(evaluate, ran, key_of, sheet, group, corner, clock_slew, tuple(neighbours))
    answers = [*solver.delays(), *solver.constraints()]
    return RowResult(clock_slew, tuple(answers), solver.hints)


def lost_row(sheet: Sheet, group: Group, corner: str, clock_slew: float, reason: str) -> RowResult:
    """Return the row in which no point has an answer, each for the same ``reason``."""

    def evaluate(trial: Trial) -> Outcome:
        raise TrialError(reason)

    return solve_row(evaluate, lambda: 0, lambda trial: "", sheet, group, corner, clock_slew)


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
    hints: dict[tuple[int, float], Hint] = field(default_factory=dict)

    def delays(self) -> list[Answer]:
        """Return clock-to-output delay and transition of each output over the load axis."""
        answers: list[Answer] = []
        for arc in self.group.delays:
            for load in self.sheet.axes.load:
                condition = Condition(self.corner, self.clock_slew, None, load)
                answers += self._delay(arc, condition)
        return answers

    def _delay(self, arc: Arc, condition: Condition) -> list[Answer]:
        before = self.ran()
        meter = Meter(self.evaluate, self.ran)
        pin = arc.observed[0][0]
        try:
            found = reference(meter, self.sheet, arc, condition)
        except TrialError as error:
            cost = self.ran() - before
            return [
                answer(
                    arc,
                    condition,
                    kind,
                    None,
                    None,
                    one_line(error),
                    cost if kind is Kind.CLK_TO_Q else 0,
                    "",
                )
                for kind in (Kind.CLK_TO_Q, Kind.TRANSITION)
            ]
        key = self.key_of(relaxed(self.sheet, arc, condition, found.until))
        status, cost = _with_rungs("measured", meter), self.ran() - before
        return [
            answer(arc, condition, Kind.CLK_TO_Q, found.delays[pin], None, status, cost, key),
            answer(arc, condition, Kind.TRANSITION, found.transitions[pin], None, status, 0, key),
        ]

    def constraints(self) -> list[Answer]:
        """Return setup and hold of each arc over the data slew axis, solved from the middle outwards."""
        slews = self.sheet.axes.data_slew
        order = sorted(range(len(slews)), key=lambda i: abs(i - len(slews) // 2))
        found: dict[tuple[int, int], Answer] = {}
        for number, arc in enumerate(self.group.constraints):
            for index in order:
                condition = Condition(
                    self.corner, self.clock_slew, slews[index], self.sheet.axes.constraint_load
                )
                found[number, index] = self._constraint(number, arc, condition)
        return [found[key] for key in sorted(found)]

    def _constraint(self, number: int, arc: Arc, condition: Condition) -> Answer:
        assert condition.data_slew is not None
        before = self.ran()
        meter = Meter(self.evaluate, self.ran)
        try:
            base = reference(meter, self.sheet, arc, condition)
            guess = self._guess(number, condition.data_slew, base)
            result = solve_constraint(meter, self.sheet, arc, condition, base, guess)
        except TrialError as error:
            return answer(arc, condition, arc.kind, None, None, one_line(error), self.ran() - before, "")
        cost = self.ran() - before
        if result.value is None:
            return answer(arc, condition, arc.kind, None, None, _why(result), cost, "")
        delay = max(base.delays.values())
        self.hints[number, condition.data_slew] = Hint(result.value, result.crossing.slope, delay)
        status = _with_rungs(result.crossing.ending.value, meter)
        key = self.key_of(result.deciding) if result.deciding else ""
        return answer(arc, condition, arc.kind, result.value, result.crossing.bracket, status, cost, key)

    def _guess(self, number: int, data_slew: float, base: Reference) -> Guess | None:
        """Return the expected crossing from this row, neighbouring rows, or another corner's row."""
        delay = max(base.delays.values())
        here = {slew: hint for (n, slew), hint in self.hints.items() if n == number}
        there = [
            {slew: hint for (n, slew), hint in row.hints.items() if n == number} for row in self.neighbours
        ]
        near = sorted(here, key=lambda slew: abs(slew - data_slew))
        if there and data_slew in there[0]:
            return self._from_rows(
                data_slew, [row.get(data_slew) for row in there], here, there[0], near, delay
            )
        if not near:
            return None
        first = here[near[0]]
        if len(near) == 1:
            return Guess(first.value, 0.3 * abs(near[0] - data_slew) + first.slope, first.slope)
        second = here[near[1]]
        rate = (first.value - second.value) / (near[0] - near[1])
        return Guess(first.value + rate * (data_slew - near[0]), 2 * first.slope, first.slope)

    def _from_rows(
        self,
        data_slew: float,
        rows: list[Hint | None],
        here: dict[float, Hint],
        nearest: dict[float, Hint],
        near: list[float],
        delay: float,
    ) -> Guess:
        hint = rows[0]
        assert hint is not None
        value = hint.value
        shared = next((slew for slew in near if slew in nearest), None)
        if shared is not None:  # this row's shift from its neighbour is much the same at every data slew
            value += here[shared].value - nearest[shared].value
        elif len(rows) > 1 and (far := rows[1]) is not None:
            span = self.neighbours[0].clock_slew - self.neighbours[1].clock_slew
            if span:
                value += (hint.value - far.value) * (self.clock_slew - self.neighbours[0].clock_slew) / span
        elif self.neighbours[0].clock_slew == self.clock_slew:  # the same row at another corner
            value *= delay / hint.delay
        slope = here[near[0]].slope if near else hint.slope
        return Guess(value, 2 * slope, slope)


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
