"""Capacitance, internal power and leakage groups from the rows of ``power.csv``. Units fF, fJ, pW.

An energy is that of one event; tools multiply it with how often the event happens.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from charflow.solve.power import NEW_DATA
from charflow.tables.liberty.lookup import Gaps, Lookup, Templates, table_block
from charflow.tables.liberty.syntax import Block, Simple
from charflow.tables.power import PowerRow

_SLEW, _LOAD = "input_transition_time", "total_output_net_capacitance"


@dataclass(frozen=True)
class PowerWriter:
    """What the power groups of a cell need: its name, its rows at one corner, templates, holes."""

    name: str
    rows: Sequence[PowerRow]
    templates: Templates
    gaps: Gaps


def capacitance_items(writer: PowerWriter, pin: str) -> Iterator[Simple]:
    """Yield ``capacitance``, the larger of both edges, and each edge with its range."""
    found = {row.pin_edge: row for row in writer.rows if (row.quantity, row.pin) == ("capacitance", pin)}
    for edge, row in found.items():
        if row.value is None:
            writer.gaps.note(f"{writer.name}: capacitance of {pin} {edge}: {row.status}")
    values = {edge: row.value for edge, row in found.items() if row.value is not None}
    if values:
        yield Simple("capacitance", max(values.values()))
    for edge in ("rise", "fall"):
        if edge in values:
            yield Simple(f"{edge}_capacitance", values[edge])


def input_power(writer: PowerWriter, pin: str) -> Iterator[Block]:
    """Yield the energy of edges of ``pin`` that move no output, for each level of the clock or gate."""
    ours = [r for r in writer.rows if (r.quantity, r.pin, r.output) == ("energy", pin, "")]
    for when in dict.fromkeys(row.when for row in ours if row.when != NEW_DATA):
        head = (Simple("when", when),) if when else ()
        yield from _group(writer, [row for row in ours if row.when == when], "pin_edge", head, pin)


def output_power(writer: PowerWriter, output: str) -> Iterator[Block]:
    """Yield the energy of each output edge over slew and load, from each pin that moves it.

    Where both edges of a pin lead to the same edge of the output, the mean of both stands.
    """
    ours = [r for r in writer.rows if r.quantity == "energy" and r.output == output]
    for related in dict.fromkeys(row.pin for row in ours):
        mine = [row for row in ours if row.pin == related]
        head = (Simple("related_pin", related),)
        yield from _group(writer, mine, "output_edge", head, f"{output} from {related}")


def _group(
    writer: PowerWriter, rows: Sequence[PowerRow], edge_column: str, head: tuple[Simple, ...], what: str
) -> Iterator[Block]:
    tables = []
    for edge in ("rise", "fall"):
        mine = [row for row in rows if getattr(row, edge_column) == edge]
        table = _table(writer, mine, f"{writer.name}: energy of {what} {edge}")
        if table is not None:
            tables.append(table_block(f"{edge}_power", table, writer.templates))
    if tables:
        yield Block("internal_power", (), (*head, *tables))


def _table(writer: PowerWriter, rows: Sequence[PowerRow], what: str) -> Lookup | None:
    points: dict[tuple[float, ...], list[float]] = {}
    for row in rows:
        place = tuple(v for v in (row.slew_ps, row.load_ff) if v is not None)
        if row.value is None:
            writer.gaps.note(f"{what}: no value at {row.slew_ps:g} ps: {row.status}")
            return None
        points.setdefault(place, []).append(row.value)
    if not points:
        return None
    size = len(next(iter(points)))
    axes = tuple(tuple(sorted({place[i] for place in points})) for i in range(size))
    values = tuple(sum(points[place]) / len(points[place]) for place in sorted(points))
    if len(values) != len(axes[0]) * (len(axes[1]) if size > 1 else 1):
        writer.gaps.note(f"{what}: the points do not fill a table")
        return None
    return Lookup((_SLEW, _LOAD)[:size], axes, values)


def leakage_items(writer: PowerWriter) -> Iterator[Simple | Block]:
    """Yield ``cell_leakage_power``, the mean over settled states, and the leakage of each state."""
    for row in writer.rows:
        if row.quantity == "leakage" and row.value is None:
            writer.gaps.note(f"{writer.name}: leakage when {row.when}: {row.status}")
    mean = next((r.value for r in writer.rows if r.quantity == "leakage_mean"), None)
    if mean is not None:
        yield Simple("cell_leakage_power", mean)
    for row in writer.rows:
        if row.quantity == "leakage" and row.value is not None:
            yield Block("leakage_power", (), (Simple("when", row.when), Simple("value", row.value)))
