"""The accuracy certificate of a table: how wrong is what a timing tool reads between its points.

At points between the grid the same solver measures what the table should say; the difference to the
table, interpolated as timing tools do, is the error. It holds at those points: a sample, not a bound.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from statistics import median

from charflow.plan.arcs import DELAYS, Kind
from charflow.solve.answer import Answer
from charflow.solve.interpolate import Point, Surface, surface
from charflow.solve.row import RowResult

Table = tuple[str, ...]  # corner, quantity, pin, edge, related pin, edge, output, edge, when
_NAMES = ("corner", "quantity", "pin", "pin_edge", "related_pin", "related_edge")
_NAMES_OUT = ("output", "output_edge", "when")
COORDINATES = ("clock_slew", "data_slew", "load")


def table_of(answer: Answer) -> Table:
    """Return what names the table that ``answer`` belongs to."""
    return tuple(str(getattr(answer, name)) for name in (*_NAMES, *_NAMES_OUT))


def coordinates(answer: Answer) -> tuple[str, ...]:
    """Return the names of the axes of the answer's table."""
    return tuple(name for name in COORDINATES if getattr(answer, name) is not None)


def point_of(answer: Answer) -> Point:
    """Return where in its table ``answer`` stands: slews [s] and load [F]."""
    return tuple(getattr(answer, name) for name in coordinates(answer))


def surfaces(answers: Iterable[Answer]) -> dict[Table, Surface]:
    """Return every table of ``answers``, values in seconds."""
    values: dict[Table, dict[Point, float | None]] = {}
    for answer in answers:
        values.setdefault(table_of(answer), {})[point_of(answer)] = answer.value
    return {table: surface(points) for table, points in values.items()}


@dataclass(frozen=True)
class Check:
    """One point between the grid: the ``answer`` measured there and what the table says [s].

    ``read`` is None where the table leans on a hole. Errors are counted as shares of ``scale`` [s]: of a
    delay or transition its own value, of a constraint the reference delay at that point (its own value
    may be zero), of a width its own value.
    """

    answer: Answer
    read: float | None
    scale: float | None

    @property
    def error(self) -> float | None:
        """Table less measurement [s]."""
        if self.read is None or self.answer.value is None:
            return None
        return self.read - self.answer.value

    @property
    def share(self) -> float | None:
        """The error as a fraction of the scale, without sign."""
        return None if self.error is None or not self.scale else abs(self.error) / self.scale


@dataclass(frozen=True)
class Certificate:
    """What the checks of one table showed. ``along`` names the axes with more than one point."""

    table: Table
    along: tuple[str, ...]
    checks: tuple[Check, ...]

    @property
    def compared(self) -> tuple[Check, ...]:
        """The checks that gave a number."""
        return tuple(check for check in self.checks if check.error is not None)

    @property
    def worst(self) -> Check | None:
        """The check with the largest error [s]."""
        return max(self.compared, key=lambda check: abs(check.error or 0.0), default=None)

    @property
    def typical(self) -> float | None:
        """The median of the errors' sizes [s]."""
        errors = [abs(check.error) for check in self.compared if check.error is not None]
        return median(errors) if errors else None

    @property
    def largest_share(self) -> float | None:
        """The largest error as a fraction of its scale; it need not be the worst in seconds."""
        return max((check.share for check in self.checks if check.share is not None), default=None)

    @property
    def typical_share(self) -> float | None:
        """The median of the errors as fractions."""
        shares = [check.share for check in self.checks if check.share is not None]
        return median(shares) if shares else None


def checks_of(row: RowResult, tables: dict[Table, Surface]) -> list[Check]:
    """Return the checks that ``row``, measured between the grid, gives; points of the grid give none."""
    found = []
    for answer in row.answers:
        table = tables.get(table_of(answer))
        if table is not None and point_of(answer) in table:
            continue
        read = None if table is None else table.at(point_of(answer))
        found.append(Check(answer, read, _scale(answer, row)))
    return found


def _scale(answer: Answer, row: RowResult) -> float | None:
    if answer.value is None:
        return None
    if answer.quantity not in DELAYS | {Kind.TRANSITION}:
        delays = [
            hint.delay
            for (asked, slew), hint in row.hints.items()
            if asked[:2] == (answer.quantity.value, answer.pin)
            and asked[2] == (answer.pin_edge == "rise")
            and slew == answer.data_slew
        ]
        if delays:
            return min(delays)
    return abs(answer.value)


def certify(answers: Sequence[Answer], rows: Iterable[RowResult]) -> tuple[Certificate, ...]:
    """Return the certificate of every table of ``answers`` from the ``rows`` measured between its points.

    Tables stand in the order of ``answers``, the checks of one in the order of their points.
    """
    tables = surfaces(answers)
    checks: dict[Table, list[Check]] = {}
    for row in rows:
        for check in checks_of(row, tables):
            checks.setdefault(table_of(check.answer), []).append(check)
    found = []
    for table, names in {table_of(answer): coordinates(answer) for answer in answers}.items():
        along = tuple(name for name, axis in zip(names, tables[table].axes, strict=True) if len(axis) > 1)
        ordered = sorted(checks.get(table, ()), key=lambda check: point_of(check.answer))
        found.append(Certificate(table, along, tuple(ordered)))
    return tuple(found)
