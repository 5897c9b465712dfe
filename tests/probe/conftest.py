"""Cells made of gates for the tests of the probe: each method adds transistors to one subckt."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from charflow.probe.explore import Map, explore
from charflow.probe.infer import infer
from charflow.probe.pins import Ports, find_ports
from charflow.probe.transistors import Network, read_network
from charflow.probe.truth import Function
from charflow.sheet.lines import logical_lines


@dataclass
class Gates:
    """One subckt under construction. Widths in micrometres; node names are the caller's."""

    ports: str
    lines: list[str] = field(default_factory=list)

    def n(self, drain: str, gate: str, source: str, width: float = 0.5) -> None:
        self.lines.append(f"M{len(self.lines)} {drain} {gate} {source} VSS my_nmos w={width}u l=0.13u")

    def p(self, drain: str, gate: str, source: str, width: float = 1.0) -> None:
        self.lines.append(f"M{len(self.lines)} {drain} {gate} {source} VDD my_pmos w={width}u l=0.13u")

    def inv(self, a: str, y: str, width: float = 1.0) -> None:
        self.p(y, a, "VDD", width)
        self.n(y, a, "VSS", width / 2)

    def nand(self, y: str, *inputs: str) -> None:
        below = y
        for at, a in enumerate(inputs):
            self.p(y, a, "VDD")
            lower = "VSS" if at == len(inputs) - 1 else f"{y}_s{at}"
            self.n(below, a, lower)
            below = lower

    def nor(self, y: str, *inputs: str) -> None:
        above = y
        for at, a in enumerate(inputs):
            self.n(y, a, "VSS")
            upper = "VDD" if at == len(inputs) - 1 else f"{y}_s{at}"
            self.p(above, a, upper)
            above = upper

    def gate(self, a: str, b: str, high: str, low: str) -> None:
        """Add a transmission gate that conducts while ``high`` is high and ``low`` low."""
        self.n(a, high, b)
        self.p(a, low, b)

    def driver(self, a: str, y: str, high: str, low: str, width: float = 0.3) -> None:
        """Add a clocked inverter, open while ``high`` is high and ``low`` low."""
        self.p(y, low, f"{y}_{a}_p", width)
        self.p(f"{y}_{a}_p", a, "VDD", width)
        self.n(y, high, f"{y}_{a}_n", width / 2)
        self.n(f"{y}_{a}_n", a, "VSS", width / 2)

    def choose(self, y: str, select: str, high: str, low: str) -> None:
        """Add y = select ? high : low."""
        self.inv(select, f"{y}_sn")
        self.gate(high, f"{y}_m", select, f"{y}_sn")
        self.gate(low, f"{y}_m", f"{y}_sn", select)
        self.inv(f"{y}_m", f"{y}_mn")
        self.inv(f"{y}_mn", y)

    def latch(self, d: str, q: str, high: str, low: str) -> None:
        """Add an inverting latch open while ``high`` is high; its local clocks exist already."""
        self.gate(d, f"{q}_i", high, low)
        self.inv(f"{q}_i", q)
        self.driver(q, f"{q}_i", low, high)

    def flop(self, d: str, ck: str, q: str) -> None:
        """Add a positive-edge flip-flop."""
        self.inv(ck, f"{q}_cn")
        self.inv(f"{q}_cn", f"{q}_ci")
        self.latch(d, f"{q}_m", f"{q}_cn", f"{q}_ci")
        self.latch(f"{q}_m", f"{q}_s", f"{q}_ci", f"{q}_cn")
        self.inv(f"{q}_s", f"{q}_b")
        self.inv(f"{q}_b", q)

    @property
    def text(self) -> str:
        return "\n".join([f".subckt cell {self.ports} VDD VSS", *self.lines, ".ends", ""])


@dataclass(frozen=True)
class Probed:
    """What the probe finds in a cell."""

    network: Network
    ports: Ports
    reached: Map
    function: Function


def probe(text: str, subckt: str | None = None) -> Probed:
    network = read_network(logical_lines(text, Path("cell.spice")), subckt)
    ports = find_ports(network)
    reached = explore(network, ports)
    return Probed(network, ports, reached, infer(reached))


@pytest.fixture
def gates() -> Callable[[str], Gates]:
    """Return a builder: ``gates("D CK Q")`` starts a subckt with these ports and the supplies."""
    return Gates


@pytest.fixture
def probed() -> Callable[..., Probed]:
    """Return the probe of a netlist's text, from transistors to function."""
    return probe
