"""Two tables of a cell held against each other: what moved and by how much, and what only one of them has.

A relative change is the change divided by max(|old value|, floor): a constraint may be zero or negative,
and a change of 0.2 ps in a setup of 0.1 ps is not "200 %" of anything. The floor of constraints is
:data:`FLOOR` unless told otherwise, that of all other quantities :data:`DELAY_FLOOR`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from statistics import median

from charflow.errors import InputError
from charflow.plan.arcs import AFTER, BEFORE
from charflow.tables.flat import Row

FLOOR = 10.0  # ps
DELAY_FLOOR = 1.0  # ps
CONSTRAINTS = frozenset(kind.value for kind in BEFORE | AFTER)  # they may be zero or negative
_POINT = (
    *("corner", "quantity", "pin", "pin_edge", "related_pin", "related_edge", "output", "output_edge"),
    *("when", "clock_slew_ps", "data_slew_ps", "load_ff"),
)
_AXES = ("corner", "quantity", "pin", "output", "when", "clock_slew_ps", "data_slew_ps", "load_ff")


@dataclass(frozen=True)
class Change:
    """A point with a value on both sides, ``before`` and ``after`` [ps]."""

    old: Row
    new: Row
    before: float
    after: float
    floor: float

    @property
    def ps(self) -> float:
        """The change in ps."""
        return self.after - self.before

    @property
    def fraction(self) -> float:
        """The change relative to max(|before|, floor)."""
        return self.ps / max(abs(self.before), self.floor)

    @property
    def moved(self) -> bool:
        """Whether the values differ by more than the brackets of both allow."""
        return abs(self.ps) > (self.old.bracket_ps or 0.0) + (self.new.bracket_ps or 0.0)

    @property
    def turned(self) -> bool:
        """Whether a constraint changed sign."""
        return self.old.quantity in CONSTRAINTS and (self.before < 0) != (self.after < 0)


@dataclass(frozen=True)
class Group:
    """The changes of one quantity, pin, edge and corner; never empty."""

    corner: str
    quantity: str
    pin: str
    edge: str
    changes: tuple[Change, ...]

    @property
    def moved(self) -> int:
        """How many values differ by more than their brackets."""
        return sum(change.moved for change in self.changes)

    @property
    def largest_ps(self) -> Change:
        """The change that is the largest in ps."""
        return max(self.changes, key=lambda change: abs(change.ps))

    @property
    def largest(self) -> Change:
        """The change that is the largest as a fraction."""
        return max(self.changes, key=lambda change: abs(change.fraction))

    @property
    def typical_ps(self) -> float:
        """The median change, with its sign, in ps."""
        return median(change.ps for change in self.changes)

    @property
    def typical(self) -> float:
        """The median change, with its sign, as a fraction."""
        return median(change.fraction for change in self.changes)


@dataclass(frozen=True)
class Comparison:
    """What two tables have in common and what not; rows keep the order they had.

    ``appeared`` and ``vanished`` are (old, new) pairs with a value on one side only, ``unanswered`` those
    with none on either; ``only_old`` and ``only_new`` are points the other side does not have. ``floor``
    [ps] is that of constraints.
    """

    changes: tuple[Change, ...]
    appeared: tuple[tuple[Row, Row], ...]
    vanished: tuple[tuple[Row, Row], ...]
    unanswered: tuple[tuple[Row, Row], ...]
    only_old: tuple[Row, ...]
    only_new: tuple[Row, ...]
    floor: float

    @property
    def turned(self) -> tuple[Change, ...]:
        """The constraints that changed sign."""
        return tuple(change for change in self.changes if change.turned)

    def groups(self) -> list[Group]:
        """Return the changes by corner, quantity, pin and edge, in the order of the new table."""
        found: dict[tuple[str, str, str, str], list[Change]] = {}
        for change in self.changes:
            found.setdefault((change.new.corner, change.new.quantity, *subject(change.new)), []).append(
                change
            )
        return [Group(*key, tuple(changes)) for key, changes in found.items()]

    def worst(self, count: int) -> list[Change]:
        """Return the ``count`` largest changes that are not zero, as a fraction, the largest first."""
        changed = [change for change in self.changes if change.ps]
        return sorted(changed, key=lambda change: (-abs(change.fraction), -abs(change.ps)))[:count]

    def beyond(self, limit: float) -> tuple[Change, ...]:
        """Return the changes larger than ``limit``, a fraction."""
        return tuple(change for change in self.changes if abs(change.fraction) > limit)

    def within(self, limit: float) -> bool:
        """Whether the new table has everything the old one has, no value moved beyond ``limit``."""
        return not (self.beyond(limit) or self.vanished or self.only_old)

    def axes(self) -> list[tuple[str, list[str | float], list[str | float]]]:
        """Return, by column, the entries that only the old or only the new table has, sorted."""
        pairs = [(change.old, change.new) for change in self.changes]
        both = [*pairs, *self.appeared, *self.vanished, *self.unanswered]
        olds = [old for old, _ in both] + list(self.only_old)
        news = [new for _, new in both] + list(self.only_new)
        found = []
        for name in _AXES:
            old, new = ({getattr(row, name) for row in rows} - {None} for rows in (olds, news))
            if old != new:
                found.append((name, sorted(old - new), sorted(new - old)))
        return found


def measure(floor: float) -> str:
    """Return how a relative change is defined; ``floor`` [ps] is that of constraints."""
    return (
        f"% is the change divided by the old value's size, or by {floor:g} ps for a smaller constraint "
        f"({DELAY_FLOOR:g} ps for anything else)"
    )


def subject(row: Row) -> tuple[str, str]:
    """Return pin and edge a value is about: the constrained input, or else the output."""
    return (row.pin, row.pin_edge) if row.pin else (row.output, row.output_edge)


def compare(old: Iterable[Row], new: Iterable[Row], floor: float = FLOOR) -> Comparison:
    """Return what differs between two tables; ``floor`` [ps] is that of constraints.

    Raises :class:`InputError` where a table holds a point twice, or the two have none in common.
    """
    before, after = _by_point(old, "old"), _by_point(new, "new")
    both = [(before[point], row) for point, row in after.items() if point in before]
    if not both:
        raise InputError(
            f"the two tables have no point in common: {_contents(list(before.values()))} in the old one, "
            f"{_contents(list(after.values()))} in the new one",
            todo="Compare tables of the same cell, with corners and axes that overlap.",
        )
    changes = tuple(
        Change(a, b, a.value_ps, b.value_ps, floor if a.quantity in CONSTRAINTS else DELAY_FLOOR)
        for a, b in both
        if a.value_ps is not None and b.value_ps is not None
    )

    def pairs(wanted: Callable[[Row, Row], bool]) -> tuple[tuple[Row, Row], ...]:
        return tuple((a, b) for a, b in both if wanted(a, b))

    return Comparison(
        changes=changes,
        appeared=pairs(lambda a, b: a.value_ps is None and b.value_ps is not None),
        vanished=pairs(lambda a, b: a.value_ps is not None and b.value_ps is None),
        unanswered=pairs(lambda a, b: a.value_ps is None and b.value_ps is None),
        only_old=tuple(row for point, row in before.items() if point not in after),
        only_new=tuple(row for point, row in after.items() if point not in before),
        floor=floor,
    )


def _by_point(rows: Iterable[Row], side: str) -> dict[tuple[object, ...], Row]:
    found: dict[tuple[object, ...], Row] = {}
    for row in rows:
        point = tuple(getattr(row, name) for name in _POINT)
        if point in found:
            raise InputError(
                f"the {side} table holds a point twice: {row.quantity} of {' '.join(subject(row))!r} "
                f"at corner {row.corner!r}, {place(row)}",
                todo="Keep one of the two rows.",
            )
        found[point] = row
    return found


def place(row: Row) -> str:
    """Return where in its table a value stands, in words."""
    slews = (("clock slew", row.clock_slew_ps), ("data slew", row.data_slew_ps))
    words = [f"{name} {value:g} ps" for name, value in slews if value is not None]
    return ", ".join([*words, f"{row.load_ff:g} fF"])


def _contents(rows: Sequence[Row]) -> str:
    if not rows:
        return "nothing"
    corners = list(dict.fromkeys(row.corner for row in rows))
    pins = list(dict.fromkeys(subject(row)[0] for row in rows))
    return f"{len(rows)} of corners {_few(corners)} and pins {_few(pins)}"


def _few(names: Sequence[str]) -> str:
    return ", ".join(map(repr, names[:4])) + (" ..." if len(names) > 4 else "")
