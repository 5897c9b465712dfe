"""The state of a run, as the process that keeps it sees it."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cached_property

from charflow.campaign.graph import Node
from charflow.campaign.journal import Follower
from charflow.campaign.store import Store
from charflow.campaign.timing import Timing
from charflow.plan.circuit import Circuit
from charflow.probe.rest import Rest
from charflow.sheet import Sheet
from charflow.simulate.proof import Proof
from charflow.simulate.session import Clock
from charflow.solve.accuracy import Accuracy
from charflow.solve.row import Group, RowResult, groups_of


@dataclass
class Progress:
    """How far a run is; times in seconds. ``left`` is None until there is something to judge by."""

    points: int = 0
    points_total: int = 0
    transients: int = 0
    elapsed: float = 0.0
    left: float | None = None
    doing: str = ""


@dataclass
class Campaign:
    """The state of a run: what it works on, and what it has so far.

    ``whole`` are the circuits before pruning, of corners where the two are compared. ``first()`` gives the
    nodes to begin with, ``more(rows)`` those to go on with once all is solved.
    """

    sheet: Sheet
    corners: tuple[str, ...]
    circuits: dict[str, Circuit]
    store: Store
    follower: Follower
    version: int
    tell: Callable[[Progress], None]
    began: float = field(default_factory=time.monotonic)
    progress: Progress = field(default_factory=Progress)
    clock: Clock = field(default_factory=Clock)
    rests: dict[str, Rest] = field(default_factory=dict)
    accuracy: dict[str, Accuracy] = field(default_factory=dict)
    rows: dict[str, RowResult] = field(default_factory=dict)
    deaths: dict[str, int] = field(default_factory=dict)
    row_keys: dict[str, str] = field(default_factory=dict)
    whole: dict[str, Circuit] = field(default_factory=dict)
    proofs: dict[str, Proof] = field(default_factory=dict)
    timing: Timing = field(default_factory=lambda: Timing(time.monotonic()))
    first: Callable[[], list[Node]] = list
    more: Callable[[Mapping[str, RowResult]], list[Node]] = lambda rows: []

    @cached_property
    def groups(self) -> tuple[Group, ...]:
        """The arcs of the cell, grouped by what they share."""
        return groups_of(self.sheet)


class ModelsDifferError(Exception):
    """The pruned models of a corner do not do what the whole library does."""

    def __init__(self, corner: str) -> None:
        super().__init__(corner)
        self.corner = corner
