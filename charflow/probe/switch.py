"""Switch-level evaluation: which level every node of a transistor network takes, three-valued.

The model is the classic one of R. E. Bryant, "A Switch-Level Model and Simulator for MOS Digital
Systems" (IEEE Trans. Computers, 1984), in a plainer form: transistors are switches with a conductance,
nodes joined by closed switches form a group. A group that reaches one rail takes its level; one that
reaches both is a resistive divider; one that reaches none keeps its charge. A switch whose gate is
unknown is tried both ways. Changes follow in the order of resistance times capacitance.
"""

from __future__ import annotations

import heapq
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from itertools import product

from charflow.probe.conduction import CLEAR, HIGH, LOW, UNKNOWN, Links, divider, group, resistances
from charflow.probe.transistors import Network, Transistor

MAX_UNKNOWN_GATES = 7  # of one component; more are not tried one by one
_MEMO_LIMIT = 200_000

State = tuple[int, ...]
_Result = tuple[State, int, tuple[float, ...]]  # levels, floating nodes as bits, relative delays


@dataclass(frozen=True)
class _Switch:
    gate: int
    a: int
    b: int
    n: bool
    conductance: float


@dataclass(frozen=True)
class _Component:
    """Nodes joined by channels, apart from rails and driven pins; ``reads`` decides their next levels."""

    nodes: tuple[int, ...]
    switches: tuple[_Switch, ...]
    gates: tuple[int, ...]
    edge: tuple[int, ...]
    reads: tuple[int, ...]
    memo: dict[State, _Result]


class Switches:
    """The evaluator of one network. ``inputs`` are driven; ``powers`` and ``grounds`` never change."""

    def __init__(
        self, network: Network, powers: Iterable[str], grounds: Iterable[str], inputs: Sequence[str]
    ) -> None:
        names: dict[str, int] = {}
        for name in (
            *network.port_nodes,
            *(node for device in network.transistors for node in (device.gate, *device.ends)),
        ):
            names.setdefault(name, len(names))
        names.setdefault("0", len(names))
        self.index = names
        self.names = tuple(names)
        self.inputs = tuple(names[name] for name in inputs)
        self.rails = {names[name]: HIGH for name in powers} | {names[name]: LOW for name in (*grounds, "0")}
        self._fixed = {*self.rails, *self.inputs}
        self._farads = [network.capacitance.get(name, 0.0) + 1e-18 for name in names]
        self._components = self._split(network.transistors)
        self._patience = 40 * len(names) + 200
        self._readers: dict[int, list[int]] = {}
        self._home: dict[int, int] = {}
        for number, component in enumerate(self._components):
            self._home |= dict.fromkeys(component.nodes, number)
            for node in {*component.gates, *component.edge}:
                self._readers.setdefault(node, []).append(number)
        self.controls = tuple(sorted({gate for c in self._components for gate in c.gates} - self._fixed))

    def _split(self, transistors: Sequence[Transistor]) -> list[_Component]:
        parent = list(range(len(self.names)))

        def root(node: int) -> int:
            while parent[node] != node:
                parent[node] = parent[parent[node]]
                node = parent[node]
            return node

        switches = [
            _Switch(
                self.index[d.gate], self.index[d.ends[0]], self.index[d.ends[1]], d.n, max(d.strength, 1e-9)
            )
            for d in transistors
            if d.ends[0] != d.ends[1]
        ]
        for switch in switches:
            if switch.a not in self._fixed and switch.b not in self._fixed:
                parent[root(switch.a)] = root(switch.b)
        groups: dict[int, list[_Switch]] = {}
        for switch in switches:
            inner = next((end for end in (switch.a, switch.b) if end not in self._fixed), None)
            if inner is not None:
                groups.setdefault(root(inner), []).append(switch)
        return [self._component(group) for group in groups.values()]

    def _component(self, switches: list[_Switch]) -> _Component:
        ends = {end for switch in switches for end in (switch.a, switch.b)}
        nodes, edge = tuple(sorted(ends - self._fixed)), tuple(sorted(ends & self._fixed))
        gates = tuple(sorted({switch.gate for switch in switches}))
        return _Component(nodes, tuple(switches), gates, edge, (*gates, *edge, *nodes), {})

    def blank(self, levels: Sequence[int]) -> State:
        """Return the state in which only rails and inputs are known."""
        values = [UNKNOWN] * len(self.names)
        for node, level in (*self.rails.items(), *zip(self.inputs, levels, strict=True)):
            values[node] = level
        return tuple(values)

    def settle(self, state: State, changes: Mapping[int, int] | None = None, *, paced: bool = True) -> State:
        """Return the state the network comes to rest in after ``changes`` (node: level) to one at rest.

        Without ``changes`` every node is evaluated. A node follows after its resistance times its
        capacitance, or with ``paced`` false after one step, like every other. Nodes that never come to
        rest end unknown.
        """
        values = list(state)
        waiting: set[int] = set() if changes else set(range(len(self._components)))
        for node, level in (changes or {}).items():
            values[node] = level
            waiting.update(self._readers.get(node, ()))
            if node in self._home:
                waiting.add(self._home[node])
        events: list[tuple[float, int, int, int]] = []
        planned: dict[int, tuple[int, int]] = {}  # node: (serial, level) of the change to come
        stuck: set[int] = set()
        fired = 0
        serial = 0
        now = 0.0
        while True:
            for number in waiting:
                component = self._components[number]
                new, _, delays = self._evaluate(component, values)
                for node, level, delay in zip(component.nodes, new, delays, strict=True):
                    if level == values[node] or node in stuck:
                        planned.pop(node, None)
                    elif node not in planned or planned[node][1] != level:
                        serial += 1
                        planned[node] = (serial, level)
                        heapq.heappush(events, (now + (delay if paced else 1.0), serial, node, level))
            changed = self._fire(events, planned)
            if not changed:
                break
            now = changed[0][0]
            fired += len(changed)
            touched: set[int] = set()
            for _, _, node, level in changed:
                if fired > self._patience:  # it rings: what still moves is unknown, for good
                    stuck.add(node)
                values[node] = UNKNOWN if node in stuck else level
                touched.update(self._readers.get(node, ()))
                touched.add(self._home[node])
            waiting = touched
        return tuple(values)

    def floating(self, state: State) -> frozenset[int]:
        """Return the nodes that no closed switch joins to a rail or a driven pin."""
        loose: set[int] = set()
        for component in self._components:
            _, bits, _ = self._evaluate(component, list(state))
            loose |= {node for at, node in enumerate(component.nodes) if bits >> at & 1}
        return frozenset(loose)

    @staticmethod
    def _fire(
        events: list[tuple[float, int, int, int]], planned: dict[int, tuple[int, int]]
    ) -> list[tuple[float, int, int, int]]:
        """Take the next change that still holds, and all of the same time, off the queue."""
        fired: list[tuple[float, int, int, int]] = []
        while events and (not fired or events[0][0] <= fired[0][0]):
            event = heapq.heappop(events)
            if planned.get(event[2]) == (event[1], event[3]):
                del planned[event[2]]
                fired.append(event)
        return fired

    def _evaluate(self, component: _Component, values: list[int]) -> _Result:
        key = tuple([values[node] for node in component.reads])
        known = component.memo.get(key)
        if known is None:
            if len(component.memo) > _MEMO_LIMIT:
                component.memo.clear()
            known = component.memo[key] = self._both_ways(component, values)
        return known

    def _both_ways(self, component: _Component, values: list[int]) -> _Result:
        """Evaluate with every unknown gate low and high; where the results differ, unknown."""
        unknown = [gate for gate in component.gates if values[gate] == UNKNOWN]
        if len(unknown) > MAX_UNKNOWN_GATES:
            size = len(component.nodes)
            return (UNKNOWN,) * size, 0, (0.0,) * size
        results = []
        for choice in product((LOW, HIGH), repeat=len(unknown)):
            tried = dict(zip(unknown, choice, strict=True))
            on = [s for s in component.switches if (tried.get(s.gate, values[s.gate]) == HIGH) is s.n]
            results.append(self._solve(component, on, values))
        levels = tuple(
            column[0] if len(set(column)) == 1 else UNKNOWN
            for column in zip(*(new for new, _, _ in results), strict=True)
        )
        loose = 0
        for _, floats, _ in results:
            loose |= floats
        return levels, loose, tuple(map(max, zip(*(delays for _, _, delays in results), strict=True)))

    def _solve(self, component: _Component, on: list[_Switch], values: list[int]) -> _Result:
        links: Links = {node: [] for node in component.nodes}
        for switch in on:
            if switch.a in links:
                links[switch.a].append((switch.b, switch.conductance))
            if switch.b in links:
                links[switch.b].append((switch.a, switch.conductance))
        result: dict[int, int] = {}
        delays: dict[int, float] = {}
        loose = 0
        for first in component.nodes:
            if first in result:
                continue
            joined, rails = group(first, links)
            levels = {values[rail] for rail in rails}
            if not rails:
                result.update(dict.fromkeys(joined, self._shared(joined, values)))
                for node in joined:
                    loose |= 1 << component.nodes.index(node)
            elif len(levels) == 1:
                result.update(dict.fromkeys(joined, levels.pop()))
            else:
                result.update(divider(joined, links, values))
            charge = sum(self._farads[node] for node in joined)
            delays |= {node: charge * ohms for node, ohms in resistances(joined, rails, links).items()}
        return (
            tuple(result[node] for node in component.nodes),
            loose,
            tuple(delays.get(node, 0.0) for node in component.nodes),
        )

    def _shared(self, group: list[int], values: list[int]) -> int:
        """Return the level of joined floating nodes: that of most of the charge."""
        if len(group) == 1:
            return values[group[0]]
        total = sum(self._farads[node] for node in group)
        share = [0.0, 0.0, 0.0]
        for node in group:
            share[values[node]] += self._farads[node] / total
        return HIGH if share[HIGH] >= CLEAR else LOW if share[LOW] >= CLEAR else UNKNOWN
