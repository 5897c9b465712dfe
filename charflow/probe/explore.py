"""Every state a cell can be brought to by changing one input at a time, at switch level."""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass

from charflow.errors import NetlistError
from charflow.probe.conduction import HIGH, LOW, UNKNOWN
from charflow.probe.pins import Ports
from charflow.probe.switch import State, Switches
from charflow.probe.transistors import Network

MAX_INPUTS = 10
MAX_PLACES = 10_000
SECONDS = 60.0  # of exploring
MAX_SEARCH = 20_000  # settlings spent on finding a first known state

Vector = tuple[int, ...]


@dataclass(frozen=True)
class Place:
    """The cell at rest: input levels, output levels, and where each single flip leads.

    ``next`` has one entry an input, the number of the place it leads to, or -1 where an output is not
    known afterwards.
    """

    vector: Vector
    outputs: Vector
    next: tuple[int, ...]


@dataclass(frozen=True)
class Map:
    """All places reached.

    ``charged`` are the nodes that hold a state on charge alone, with the inputs at that time; ``raced``
    counts the flips whose end depends on which of two nodes moves first.
    """

    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    places: tuple[Place, ...]
    charged: tuple[tuple[str, Vector], ...]
    raced: int

    def flips(self) -> Iterator[tuple[int, int, int]]:
        """Yield (place, input, place reached) for every flip whose end is known."""
        for number, place in enumerate(self.places):
            for pin, after in enumerate(place.next):
                if after >= 0:
                    yield number, pin, after


def explore(network: Network, ports: Ports) -> Map:
    """Return every place the cell can be brought to from power-up by single input flips.

    Raises :class:`NetlistError` for a cell with too many inputs or states, and for one whose outputs
    no sequence of inputs makes known.
    """
    if len(ports.inputs) > MAX_INPUTS:
        raise NetlistError(
            f"{network.name!r} has {len(ports.inputs)} inputs; at most {MAX_INPUTS} can be explored",
            todo="Write its sheet by hand; 'charflow run' proves the function by simulation.",
        )
    if not ports.inputs:
        raise NetlistError(f"{network.name!r} has no input: no port gates a transistor")
    return _Walk(network, ports).map()


class _Walk:
    def __init__(self, network: Network, ports: Ports) -> None:
        self.network, self.ports = network, ports
        self.switches = Switches(
            network,
            [p.lower() for p in ports.powers],
            [p.lower() for p in ports.grounds],
            [p.lower() for p in ports.inputs],
        )
        self.outputs = tuple(self.switches.index[pin.lower()] for pin in ports.outputs)
        self.seen_by = tuple(dict.fromkeys((*self.switches.inputs, *self.switches.controls, *self.outputs)))
        self.until = time.monotonic() + SECONDS

    def key(self, state: State) -> Vector:
        return tuple([state[node] for node in self.seen_by])

    def shown(self, state: State) -> Vector:
        return tuple([state[node] for node in self.outputs])

    def flipped(self, state: State, pin: int, *, paced: bool = True) -> State:
        node = self.switches.inputs[pin]
        return self.switches.settle(state, {node: HIGH if state[node] == LOW else LOW}, paced=paced)

    def map(self) -> Map:
        start = self._first_known()
        numbers = {self.key(start): 0}
        states = [start]
        following: list[tuple[int, ...]] = []
        charged: dict[str, Vector] = {}
        raced = 0
        while len(following) < len(states):
            state = states[len(following)]
            ways = []
            for pin in range(len(self.ports.inputs)):
                after = self.flipped(state, pin)
                raced += self.key(self.flipped(state, pin, paced=False)) != self.key(after)
                if UNKNOWN in self.shown(after):
                    ways.append(-1)
                    continue
                key = self.key(after)
                if key not in numbers:
                    numbers[key] = len(states)
                    states.append(after)
                    self._note_charge(after, charged)
                ways.append(numbers[key])
            following.append(tuple(ways))
            self._check_effort(len(states))
        places = tuple(
            Place(tuple(state[n] for n in self.switches.inputs), self.shown(state), ways)
            for state, ways in zip(states, following, strict=True)
        )
        return Map(self.ports.inputs, self.ports.outputs, places, tuple(charged.items()), raced)

    def _check_effort(self, count: int) -> None:
        if count > MAX_PLACES or time.monotonic() > self.until:
            raise NetlistError(
                f"{self.network.name!r} has too many states to explore: {count} found, more to come",
                todo="Write its sheet by hand, or draft one bit of the register by itself.",
            )

    def _first_known(self) -> State:
        """Return the first state found, from power-up, with known outputs and the fewest unknown gates."""
        begin = self.switches.settle(self.switches.blank([LOW] * len(self.ports.inputs)))
        queue, seen = deque([begin]), {self.key(begin)}
        best: tuple[int, State] | None = None
        tried = 0
        while queue and tried < MAX_SEARCH and time.monotonic() < self.until:
            state = queue.popleft()
            unknown = self.key(state).count(UNKNOWN)
            if UNKNOWN not in self.shown(state) and (best is None or unknown < best[0]):
                best = (unknown, state)
                if not unknown:
                    return state
            for pin in range(len(self.ports.inputs)):
                after = self.flipped(state, pin)
                tried += 1
                if self.key(after) not in seen:
                    seen.add(self.key(after))
                    queue.append(after)
        if best is None:
            raise NetlistError(
                f"no sequence of inputs makes the outputs of {self.network.name!r} known at switch level",
                todo="A contest of transistors may be undecided there, or a state cannot be written. "
                "Write the sheet by hand; 'charflow run' proves the function by simulation.",
            )
        return best[1]

    def _note_charge(self, state: State, charged: dict[str, Vector]) -> None:
        """Record floating gate nodes whose loss of charge would show at an output."""
        for node in self.switches.floating(state).intersection(self.switches.controls):
            name = self.switches.names[node]
            if name in charged or state[node] == UNKNOWN:
                continue
            lost = HIGH if state[node] == LOW else LOW
            after = self.switches.settle(state, {node: lost})
            if self.shown(after) != self.shown(state):
                charged[name] = tuple(state[n] for n in self.switches.inputs)
