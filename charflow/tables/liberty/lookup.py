"""Rows as look-up tables over slews [ps] and load [fF], and the templates they share.

Where several rows answer one question of Liberty (a pulse seen at two outputs, the other bits of a
register quiet or switching) the largest counts: every entry is a measured one, and the worst.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from itertools import product

from charflow.errors import InputError
from charflow.tables.flat import Row
from charflow.tables.liberty.syntax import Block, Complex, Simple, number

Axis = tuple[str, str]  # Liberty's variable, column of the row

INPUT_SLEW = ("input_net_transition", "clock_slew_ps")
DATA_INPUT_SLEW = ("input_net_transition", "data_slew_ps")
LOAD = ("total_output_net_capacitance", "load_ff")
RELATED_SLEW = ("related_pin_transition", "clock_slew_ps")
CONSTRAINED_SLEW = ("constrained_pin_transition", "data_slew_ps")
OWN_SLEW = ("constrained_pin_transition", "clock_slew_ps")


@dataclass(frozen=True)
class Lookup:
    """A table without holes: ``values`` in the order of the axes, the last one running fastest."""

    variables: tuple[str, ...]
    axes: tuple[tuple[float, ...], ...]
    values: tuple[float, ...]

    @property
    def worst(self) -> float:
        """The largest value."""
        return max(self.values)


@dataclass
class Gaps:
    """Tables that cannot be written, in words; with ``allowed`` they are left out, else they are errors."""

    allowed: bool = False
    found: list[str] = field(default_factory=list)

    def note(self, text: str) -> None:
        """Remember a table with a hole."""
        if text not in self.found:
            self.found.append(text)

    def finish(self) -> None:
        """Raise :class:`InputError` naming the holes, unless they are allowed."""
        if not self.found or self.allowed:
            return
        more = [f"... and {len(self.found) - 8} more"] if len(self.found) > 8 else []
        raise InputError(
            "tables with holes cannot be written as Liberty:\n    " + "\n    ".join([*self.found[:8], *more]),
            todo="Measure the missing points, or leave these tables out with --allow-gaps.",
        )


def lookup(rows: Sequence[Row], axes: Sequence[Axis], what: str, gaps: Gaps) -> Lookup | None:
    """Return the table of ``rows`` over ``axes``; None, and a note in ``gaps``, where a point is missing.

    Values are in ps, rounded as in the rows. ``what`` names the table in messages.
    """
    points: dict[tuple[float, ...], float | None] = {}
    missing: dict[tuple[float, ...], str] = {}
    for row in rows:
        place = tuple(float(getattr(row, column)) for _, column in axes)
        if row.value_ps is None:
            missing[place] = row.status
        before = points.get(place, row.value_ps)
        points[place] = None if before is None or row.value_ps is None else max(before, row.value_ps)
    if not points:
        return None
    scales = tuple(tuple(sorted({place[i] for place in points})) for i in range(len(axes)))
    everywhere = list(product(*scales))
    for place in everywhere:
        if points.get(place) is None:
            gaps.note(f"{what}: no value at {_place(place, axes)}: {missing.get(place, 'not measured')}")
            return None
    values = tuple(float(points[place] or 0.0) for place in everywhere)
    return Lookup(tuple(variable for variable, _ in axes), scales, values)


def _place(place: Iterable[float], axes: Sequence[Axis]) -> str:
    words = {"clock_slew_ps": "clock slew {:g} ps", "data_slew_ps": "data slew {:g} ps", "load_ff": "{:g} fF"}
    return ", ".join(words[column].format(value) for value, (_, column) in zip(place, axes, strict=True))


@dataclass
class Templates:
    """The templates of one library: each combination of variables and axes has one name."""

    kind: str = "lu_table_template"
    stem: str = "over"
    names: dict[tuple[tuple[str, ...], tuple[tuple[float, ...], ...]], str] = field(default_factory=dict)

    def name(self, table: Lookup) -> str:
        """Return the name of the template of ``table``, made on first use."""
        key = (table.variables, table.axes)
        if key not in self.names:
            sizes = "x".join(str(len(axis)) for axis in table.axes)
            self.names[key] = f"{self.stem}_{sizes}_{len(self.names) + 1}"
        return self.names[key]

    def blocks(self) -> tuple[Block, ...]:
        """Return the template groups, in the order of first use."""
        return tuple(
            Block(
                self.kind,
                (name,),
                (
                    *(Simple(f"variable_{i}", variable) for i, variable in enumerate(variables, start=1)),
                    *indices(axes),
                ),
            )
            for (variables, axes), name in self.names.items()
        )


def indices(axes: Sequence[Sequence[float]]) -> tuple[Complex, ...]:
    """Return ``index_1``, ``index_2`` of a table or template."""
    return tuple(Complex(f"index_{i}", (_series(axis),)) for i, axis in enumerate(axes, start=1))


def table_block(name: str, table: Lookup, templates: Templates) -> Block:
    """Return ``table`` as the group ``name``, such as ``cell_rise``."""
    width = len(table.axes[-1])
    lines = tuple(_series(table.values[i : i + width]) for i in range(0, len(table.values), width))
    values = Complex("values", lines, lines=len(lines) > 1)
    return Block(name, (templates.name(table),), (*indices(table.axes), values))


def _series(values: Sequence[float]) -> str:
    return ", ".join(map(number, values))
