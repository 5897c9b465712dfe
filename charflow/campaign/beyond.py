"""What a run measures beyond the grid of its sheet: points between it, and axis points that refine it.

Everything follows from the sheet and from answers, so an interrupted run takes the same steps again, and
finds what it had measured in the store.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

from charflow.campaign.graph import Node, row_label
from charflow.plan.arcs import WIDTHS
from charflow.sheet import Axes, Sheet
from charflow.solve.answer import Answer
from charflow.solve.between import columns, places
from charflow.solve.certificate import Certificate, certify, point_of, surfaces, table_of
from charflow.solve.refine import Insertion, insertion
from charflow.solve.row import Group, RowResult, groups_of

MOST = 8  # axis points inserted at most, unless the user says otherwise


@dataclass(frozen=True)
class Wish:
    """What to measure beyond the grid.

    ``checks`` points between it a table; ``limit`` is the error (a fraction) below which the tables are
    refined, None to leave them; ``most`` is how many axis points may be inserted for that. Pulse widths
    and periods are checked, but nothing is inserted for them: they have a kink where they stop being
    limited by their ramps, and a straight line across it is slow to become right.
    """

    checks: int = 0
    limit: float | None = None
    most: int = MOST


@dataclass(frozen=True)
class Refinement:
    """How refining ended: points inserted, the largest error ``left`` (a fraction), and whether that will do.

    ``reached`` is claimed only of points that took no part in choosing where to insert.
    """

    limit: float
    inserted: tuple[Insertion, ...]
    left: float | None
    reached: bool


@dataclass
class Beyond:
    """The nodes of a run: ``grid`` ends up in the tables, ``between`` judges them.

    ``axes`` are those of the tables so far.
    """

    sheet: Sheet
    corners: tuple[str, ...]
    wish: Wish
    grid: list[Node]
    between: list[Node] = field(default_factory=list)
    inserted: list[Insertion] = field(default_factory=list)
    refinement: Refinement | None = None

    def __post_init__(self) -> None:
        self.axes = self.sheet.axes
        self.groups = groups_of(self.sheet)
        self._drawn = 0
        self._fresh = False

    def first(self) -> list[Node]:
        """Return all that can be planned before anything is measured."""
        return [*self.grid, *self._draw()]

    def more(self, rows: Mapping[str, RowResult]) -> list[Node]:
        """Return what to measure next, given everything asked for so far; nothing once it is done."""
        limit = self.wish.limit
        if limit is None or not self.between or self.refinement is not None:
            return []
        answers = self.answers(rows)
        checks = [
            check
            for proved in self.certificates(rows)
            for check in proved.checks
            if check.answer.quantity not in WIDTHS
        ]
        left = max((check.share for check in checks if check.share is not None), default=None)
        if left is None or left <= limit:
            if left is not None and not self._fresh:
                return self._draw()
            self.refinement = Refinement(limit, tuple(self.inserted), left, left is not None)
            return []
        new = insertion(self.axes, surfaces(answers), checks, limit)
        if new is None or len(self.inserted) >= self.wish.most:
            self.refinement = Refinement(limit, tuple(self.inserted), left, False)
            return []
        return self._insert(new)

    def answers(self, rows: Mapping[str, RowResult]) -> list[Answer]:
        """Return the answers of the tables among ``rows``; of a point solved twice, the first."""
        found: dict[object, Answer] = {}
        for node in self.grid:
            for answer in rows[node.label].answers if node.label in rows else ():
                found.setdefault((table_of(answer), point_of(answer)), answer)
        return list(found.values())

    def certificates(self, rows: Mapping[str, RowResult]) -> tuple[Certificate, ...]:
        """Return what the points between say of every table."""
        if not self.wish.checks:
            return ()
        between = [rows[node.label] for node in self.between if node.label in rows]
        return certify(self.answers(rows), between)

    def _draw(self) -> list[Node]:
        """Return the next few points between, for every table that has room for some."""
        count, self._fresh = self.wish.checks, True
        found = []
        for index, place in enumerate(places(self.sheet.axes, count, self._drawn + 1), start=self._drawn + 1):
            asked = columns(self.sheet.axes, (place.data_slew,), (place.load,))
            for corner, number, group in self._places():
                if self._flat(group):
                    continue
                slew = place.data_slew if group.by_data else place.clock_slew
                label = f"{corner}: group {number + 1}, point {index} between"
                found.append(self._node(label, corner, number, slew, asked))
        self._drawn += count
        self.between += found
        return found

    def _flat(self, group: Group) -> bool:
        """Tell whether the tables of ``group`` have one point each."""
        axes = self.sheet.axes
        across = [axes.load if group.delays else (), axes.data_slew if group.constraints else ()]
        return len(group.slews(axes)) == 1 and all(len(axis) < 2 for axis in across)

    def _insert(self, new: Insertion) -> list[Node]:
        """Return the nodes that fill the tables at a new axis point."""
        found = []
        for corner, number, group in self._places():
            if new.axis == ("data_slew" if group.by_data else "clock_slew"):
                label = row_label(corner, number, new.value)
                found.append(self._node(label, corner, number, new.value, self.axes))
                continue
            data = (new.value,) if new.axis == "data_slew" and group.constraints else ()
            load = (new.value,) if new.axis == "load" and group.delays else ()
            if data or load:
                asked = columns(self.axes, data, load)
                for slew in group.slews(self.axes):
                    label = f"{row_label(corner, number, slew)}, {new.axis} {new.value:g} inserted"
                    found.append(self._node(label, corner, number, slew, asked))
        self.axes = new.into(self.axes)
        self.inserted.append(new)
        self._fresh = False
        self.grid += found
        return found

    def _places(self) -> Iterator[tuple[str, int, Group]]:
        for corner in self.corners:
            for number, group in enumerate(self.groups):
                yield corner, number, group

    def _node(self, label: str, corner: str, number: int, slew: float, asked: Axes) -> Node:
        """Return a node that is taught by all of its group, and of the groups that this one needs."""
        group = self.groups[number]
        teaching = [group, *(self.groups[other] for other in group.needs)]
        after = [node.label for node in self.grid if node.corner == corner and node.group in teaching]
        return Node(label, corner, group, slew, tuple(after), group.points(asked), axes=asked)
