"""The jobs of a run and what each must wait for: the sheet alone decides, so every run solves the same rows.

Rows of one corner teach each other where to look; corners do not, so that new models at one corner leave
the answers of the others as they are.
"""

from __future__ import annotations

import hashlib
from collections.abc import Collection
from dataclasses import dataclass

from charflow.plan.circuit import Circuit
from charflow.sheet import Axes, Sheet
from charflow.solve.order import ends_then_middles
from charflow.solve.row import Group, groups_of


@dataclass
class Node:
    """One job: its label, the labels of what must be done before it, and how often it was lost.

    Without a ``group`` it prepares its corner, or proves its pruned models. ``points`` counts the values
    it gives. With ``axes`` it solves columns of its own, not those of the sheet.
    """

    label: str
    corner: str
    group: Group | None
    clock_slew: float
    after: tuple[str, ...]
    points: int
    losses: int = 0
    trials: int = 0
    axes: Axes | None = None
    proves: bool = False


def nodes_of(sheet: Sheet, corners: tuple[str, ...], unproved: Collection[str] = ()) -> list[Node]:
    """Return the jobs of a run: one preparation a corner, then its rows, teachers before pupils.

    At ``unproved`` corners the pruned models are compared with the whole library, beside all else.
    """
    nodes = []
    for corner in corners:
        prepare = f"{corner}: preparing"
        nodes.append(Node(prepare, corner, None, 0.0, (), 0))
        if corner in unproved:
            nodes.append(Node(f"{corner}: proving models", corner, None, 0.0, (), 0, proves=True))
        for number, group in enumerate(groups_of(sheet)):
            slews, points = group.slews(sheet.axes), group.points(sheet.axes)
            for index, near in ends_then_middles(len(slews), last_first=True):
                teachers = [row_label(corner, number, slews[i]) for i in near]
                teachers += [
                    row_label(corner, other, slews[i]) for other in group.needs for i in (index, *near)
                ]
                label = row_label(corner, number, slews[index])
                nodes.append(Node(label, corner, group, slews[index], (prepare, *teachers), points))
    return nodes


def row_label(corner: str, group: int, clock_slew: float) -> str:
    """Return what people call a row."""
    return f"{corner}: group {group + 1}, slew {clock_slew * 1e12:g} ps"


def trial_label(circuit: Circuit, group: Group | None = None, clock_slew: float = 0.0) -> str:
    """Return the label trials are kept under: what stays the same when axes or pushout change.

    Without a group, it is that of the trials which prepare a corner.
    """
    facts = (circuit.digest, repr(group and group.start), repr(clock_slew))
    return hashlib.sha256("\n".join(facts).encode()).hexdigest()[:24]
