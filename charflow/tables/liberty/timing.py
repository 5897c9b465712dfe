"""Timing groups from rows: delays of an output, constraints and pulse widths of an input.

``rise_constraint`` and ``fall_constraint`` name the edge of the constrained pin, for a pulse width the
edge it begins with.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

from charflow.plan.arcs import AFTER, BEFORE, DELAYS, Kind
from charflow.plan.behaviour import Behaviour
from charflow.solve.crossing import Ending
from charflow.tables.flat import Row
from charflow.tables.liberty.expression import literal, sdf_condition, side_levels
from charflow.tables.liberty.lookup import (
    CONSTRAINED_SLEW,
    DATA_INPUT_SLEW,
    INPUT_SLEW,
    LOAD,
    OWN_SLEW,
    RELATED_SLEW,
    Gaps,
    Lookup,
    Templates,
    lookup,
    table_block,
)
from charflow.tables.liberty.syntax import Block, Simple

Edges = tuple[str, str]  # of the related pin, of the output
_ING = {"rise": "rising", "fall": "falling"}


@dataclass(frozen=True)
class Writer:
    """What every timing group of a cell needs: its function, its name in messages, templates, holes.

    ``constraint_load`` [fF] is the load whose setup and hold are written.
    """

    cell: Behaviour
    name: str
    constraint_load: float
    templates: Templates
    gaps: Gaps


def delay_groups(writer: Writer, rows: Sequence[Row], output: str) -> Iterator[Block]:
    """Yield the timing groups of output pin ``output``: delay and transition from each pin that moves it."""
    ours = [row for row in rows if row.output == output and row.pin == ""]
    for related in dict.fromkeys(row.related_pin for row in ours):
        arcs: dict[Edges, tuple[Lookup, Lookup]] = {}
        kinds: dict[Edges, Kind] = {}
        mine = [row for row in ours if row.related_pin == related]
        for edges in dict.fromkeys((row.related_edge, row.output_edge) for row in mine):
            found = [row for row in mine if (row.related_edge, row.output_edge) == edges]
            kinds[edges] = next((Kind(r.quantity) for r in found if r.quantity in DELAYS), Kind.CLK_TO_Q)
            pair = _delay_and_transition(writer, found, related, edges, output)
            if pair is not None:
                arcs[edges] = pair
        for kind, sense, members in _bundles(writer.cell, related, arcs, kinds):
            yield _delay_group(writer, related, kind, sense, {e: arcs[e] for e in members})


def _delay_and_transition(
    writer: Writer, rows: Sequence[Row], related: str, edges: Edges, output: str
) -> tuple[Lookup, Lookup] | None:
    axes = (DATA_INPUT_SLEW if rows[0].clock_slew_ps is None else INPUT_SLEW, LOAD)
    tables = []
    for word, wanted in (("delay", False), ("transition", True)):
        what = f"{writer.name}: {word} of {output} {edges[1]} from {related} {edges[0]}"
        some = [row for row in rows if (row.quantity == Kind.TRANSITION) is wanted]
        table = lookup(some, axes, what, writer.gaps)
        if not some:
            writer.gaps.note(f"{what}: not measured")
        tables.append(table)
    delay, transition = tables
    return None if delay is None or transition is None else (delay, transition)


def _bundles(
    cell: Behaviour, related: str, arcs: dict[Edges, tuple[Lookup, Lookup]], kinds: dict[Edges, Kind]
) -> Iterator[tuple[str, str, tuple[Edges, ...]]]:
    """Yield (timing_type, timing_sense, edges) of the groups that tell of these arcs."""
    left = list(arcs)
    active = dict((*cell.clears, *cell.presets)).get(related)
    if active is not None:
        onset = "rise" if active else "fall"
        for edge, kind in (("rise", "preset"), ("fall", "clear")):
            if (onset, edge) in left:
                left.remove((onset, edge))
                yield kind, _sense((onset, edge)), ((onset, edge),)
    clocked = related == cell.control and len({edges[0] for edges in kinds}) == 1
    if clocked and left:
        yield f"{_ING[left[0][0]]}_edge", "non_unate", tuple(left)
        return
    for sense in ("positive_unate", "negative_unate"):
        members = tuple(edges for edges in left if _sense(edges) == sense)
        if members:
            yield "combinational" if len(members) == 2 else f"combinational_{members[0][1]}", sense, members


def _sense(edges: Edges) -> str:
    return "positive_unate" if edges[0] == edges[1] else "negative_unate"


def _delay_group(
    writer: Writer, related: str, kind: str, sense: str, arcs: dict[Edges, tuple[Lookup, Lookup]]
) -> Block:
    head = (Simple("related_pin", related), Simple("timing_sense", sense), Simple("timing_type", kind))
    tables = []
    for (_, edge), (delay, transition) in sorted(arcs.items(), key=lambda item: item[0][1], reverse=True):
        tables.append(table_block(f"cell_{edge}", delay, writer.templates))
        tables.append(table_block(f"{edge}_transition", transition, writer.templates))
    return Block("timing", (), (*head, *tables))


@dataclass(frozen=True)
class _Constraint:
    """One timing group of a constraint before it is written."""

    kind: str
    related: str
    when: dict[str, bool]
    tables: dict[str, Lookup]
    default: bool = False

    @property
    def weight(self) -> tuple[int, float]:
        """How much the group says, and how late: the default is the heaviest."""
        return len(self.tables), sum(sum(table.values) for table in self.tables.values())


def constraint_groups(writer: Writer, rows: Sequence[Row], pin: str) -> Iterator[Block]:
    """Yield setup, hold, recovery and removal of input ``pin``; of several conditions one is the default."""
    together: dict[tuple[str, str, str], list[_Constraint]] = {}
    ours = [
        row
        for row in rows
        if row.pin == pin and row.quantity in BEFORE | AFTER and row.load_ff == writer.constraint_load
    ]
    for key in dict.fromkeys((r.quantity, r.related_pin, r.related_edge, pins_of(r.when)) for r in ours):
        quantity, related, edge, when = key
        some = [r for r in ours if (r.quantity, r.related_pin, r.related_edge, pins_of(r.when)) == key]
        levels = side_levels(when)
        if levels is None:
            writer.gaps.note(f"{writer.name}: {quantity} of {pin}: {when!r} is no condition of pin levels")
            continue
        tables = {}
        for pin_edge in ("rise", "fall"):
            mine = [row for row in some if row.pin_edge == pin_edge]
            side = f" when {when}" if when else ""
            what = f"{writer.name}: {quantity} of {pin} {pin_edge} against {related} {edge}{side}"
            table = lookup(mine, (RELATED_SLEW, CONSTRAINED_SLEW), what, writer.gaps)
            if table is not None:
                tables[pin_edge] = table
        if tables:
            found = _Constraint(f"{quantity}_{_ING[edge]}", related, levels, tables)
            together.setdefault((quantity, related, edge), []).append(found)
    for group in together.values():
        heaviest = max(group, key=lambda item: item.weight)
        for item in group:
            marked = replace(item, default=item is heaviest and bool(item.when))
            yield _constraint_group(writer, marked)


def pins_of(when: str) -> str:
    """Return the pin levels of a side condition, without what the neighbours of a bit do."""
    return when.partition(";")[0].strip() if _names_pins(when) else ""


def _names_pins(when: str) -> bool:
    return not when.startswith("other bits")


def _constraint_group(writer: Writer, item: _Constraint) -> Block:
    head = [Simple("related_pin", item.related), Simple("timing_type", item.kind)]
    if item.when:
        head.append(Simple("when", " & ".join(literal(*pair) for pair in item.when.items())))
        head.append(Simple("sdf_cond", sdf_condition(item.when)))
    if item.default:
        head.append(Simple("default_timing", True))
    tables = [table_block(f"{e}_constraint", table, writer.templates) for e, table in item.tables.items()]
    return Block("timing", (), (*head, *tables))


def width_items(writer: Writer, rows: Sequence[Row], pin: str) -> Iterator[Simple | Block]:
    """Yield least pulse widths and period of input ``pin``: attributes (one number each), then tables."""
    groups = []
    for kind, timing_type in ((Kind.PULSE_WIDTH, "min_pulse_width"), (Kind.MIN_PERIOD, "minimum_period")):
        tables, largest = {}, {}
        for edge in ("rise", "fall"):
            mine = [
                row
                for row in rows
                if row.pin == pin
                and row.quantity == kind
                and row.pin_edge == edge
                and row.load_ff == writer.constraint_load
            ]
            level = f" {'high' if edge == 'rise' else 'low'}" if kind is Kind.PULSE_WIDTH else ""
            what = f"{writer.name}: least{level} {'pulse' if level else 'period'} of {pin}"
            table = lookup(mine, (OWN_SLEW,), what, writer.gaps)
            if table is not None:
                tables[edge], largest[edge] = table, _largest(mine)
        if not tables:
            continue
        if kind is Kind.PULSE_WIDTH:
            for edge, value in largest.items():
                yield Simple(f"min_pulse_width_{'high' if edge == 'rise' else 'low'}", value)
        else:
            yield Simple("min_period", max(largest.values()))
        head = (Simple("related_pin", pin), Simple("timing_type", timing_type))
        blocks = [table_block(f"{e}_constraint", t, writer.templates) for e, t in tables.items()]
        groups.append(Block("timing", (), (*head, *blocks)))
    yield from groups


def _largest(rows: Sequence[Row]) -> float:
    """Return the largest width [ps] that the cell decided, not the ramps of the pulse itself.

    A reader holds this one number against pulses of every slew. Where the ramps decided everywhere, the
    least of them is the tightest statement there is.
    """
    by_cell = [r.value_ps for r in rows if r.value_ps is not None and not _by_ramps(r)]
    by_ramps = [r.value_ps for r in rows if r.value_ps is not None and _by_ramps(r)]
    return max(by_cell) if by_cell else min(by_ramps)


def _by_ramps(row: Row) -> bool:
    return row.status.startswith(Ending.RAMPS)
