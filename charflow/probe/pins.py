"""Which ports are supplies, inputs and outputs, from how transistors are connected to them."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field

from charflow.errors import NetlistError
from charflow.probe.transistors import Network, Transistor

_POWER_NAME = re.compile(r"v?(?:dd|cc|pwr|pb|nw)[a-z]?\d*|vpwr|vpb|pwr|power|nwell|vnw|vdd\w*", re.IGNORECASE)
_GROUND_NAME = re.compile(r"v?(?:ss|gnd|nb|pw)[a-z]?\d*|vgnd|vnb|ground|pwell|vpw|vss\w*", re.IGNORECASE)


@dataclass(frozen=True)
class Ports:
    """Ports by what they are, in the netlist's case and order; ``notes`` says by port what is not certain."""

    powers: tuple[str, ...]
    grounds: tuple[str, ...]
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    notes: Mapping[str, str] = field(default_factory=dict)


@dataclass
class _Touch:
    """How many transistors of each kind touch a node, and how."""

    gates: int = 0
    n_ends: int = 0
    p_ends: int = 0
    n_bulks: int = 0
    p_bulks: int = 0


def find_ports(network: Network) -> Ports:
    """Return what each port of ``network`` is.

    The bulks of n-channel devices lie on ground, those of p-channel devices on power. A rail ends
    channels of one kind only and gates nothing; an input only gates, or meets nothing but pass
    transistors; an output is pulled both ways. Raises :class:`NetlistError` where no supply or output
    is found, or a port touches no transistor.
    """
    touches = _touches(network)
    notes: dict[str, str] = {}
    sorted_out: dict[str, list[str]] = {kind: [] for kind in ("power", "ground", "input", "output")}
    rails = {node for node, kind in ((n, _well(touches.get(n))) for n in network.port_nodes) if kind}
    for port in network.ports:
        touch = touches.get(port.lower(), _Touch())
        kind = _well(touch) or _kind(network, port, touch, rails, notes)
        sorted_out[kind].append(port)
    found = Ports(
        powers=tuple(sorted_out["power"]),
        grounds=tuple(sorted_out["ground"]),
        inputs=tuple(sorted_out["input"]),
        outputs=tuple(sorted_out["output"]),
        notes=notes,
    )
    for what, ports in (("power", found.powers), ("ground", found.grounds), ("output", found.outputs)):
        if not ports:
            raise NetlistError(
                f"no port of {network.name!r} is connected like {what}",
                todo=f"Its ports are {' '.join(network.ports)}; supplies must be ports of the subckt.",
            )
    return found


def _touches(network: Network) -> dict[str, _Touch]:
    touches: dict[str, _Touch] = {}

    def at(node: str) -> _Touch:
        return touches.setdefault(node, _Touch())

    for device in network.transistors:
        at(device.gate).gates += 1
        for end in device.ends:
            if device.n:
                at(end).n_ends += 1
            else:
                at(end).p_ends += 1
        if device.n:
            at(device.bulk).n_bulks += 1
        else:
            at(device.bulk).p_bulks += 1
    return touches


def _well(touch: _Touch | None) -> str | None:
    """Return which supply bulks say a node is."""
    if touch is None or touch.n_bulks == touch.p_bulks:
        return None
    if touch.n_bulks and touch.p_bulks:
        return None
    return "ground" if touch.n_bulks else "power"


def _kind(network: Network, port: str, touch: _Touch, wells: set[str], notes: dict[str, str]) -> str:
    node = port.lower()
    if not any((touch.gates, touch.n_ends, touch.p_ends)):
        if _POWER_NAME.fullmatch(port) or _GROUND_NAME.fullmatch(port):
            notes[port] = "touches no transistor; taken as a supply by its name alone"
            return "power" if _POWER_NAME.fullmatch(port) else "ground"
        raise NetlistError(
            f"the port {port!r} touches no transistor, so its role cannot be told",
            todo="Remove it from the subckt, or write the sheet by hand.",
        )
    if not touch.n_ends and not touch.p_ends:
        return "input"
    one_kind = bool(touch.n_ends) != bool(touch.p_ends)
    if one_kind and not touch.gates:
        n = bool(touch.n_ends)
        named = (_GROUND_NAME if n else _POWER_NAME).fullmatch(port) is not None
        if named or _is_rail(network, node, n, wells):
            return "ground" if n else "power"
        notes[port] = "ends channels of one kind only; taken as an input through pass transistors"
        return "input"
    if _pulled(network, node, n=True, wells=wells) and _pulled(network, node, n=False, wells=wells):
        return "output"
    notes[port] = "meets pass transistors and is not pulled both ways; taken as an input"
    return "input"


def _is_rail(network: Network, node: str, n: bool, wells: set[str]) -> bool:
    """Tell whether a port that ends channels of one kind is their source rail.

    Where a well of that kind also ends channels, that well is the rail. Otherwise the rail is the port
    that ends the most of them.
    """
    counts: dict[str, int] = {}
    for device in network.transistors:
        if device.n is n:
            for end in device.ends:
                counts[end] = counts.get(end, 0) + 1
    bulks = {device.bulk for device in network.transistors if device.n is n}
    if any(bulk in wells and counts.get(bulk) for bulk in bulks):
        return False
    ports = [counts.get(name, 0) for name in network.port_nodes if _one_kind(network, name, n)]
    return counts.get(node, 0) == max(ports, default=0)


def _one_kind(network: Network, node: str, n: bool) -> bool:
    return not any(node in d.ends and d.n is not n for d in network.transistors)


def _pairs(network: Network) -> set[tuple[str, str]]:
    """Return the node pairs that a pass gate joins: channels of both kinds side by side."""
    kinds: dict[tuple[str, str], set[bool]] = {}
    for device in network.transistors:
        kinds.setdefault(device.ends, set()).add(device.n)
    return {pair for pair, both in kinds.items() if len(both) == 2}


def _pulled(network: Network, node: str, *, n: bool, wells: set[str]) -> bool:
    """Tell whether devices of one kind, pass gates apart, lead from ``node`` to a rail of theirs."""
    passes = _pairs(network)
    devices: list[Transistor] = [d for d in network.transistors if d.n is n and d.ends not in passes]
    seen, waiting = {node}, [node]
    ports = set(network.port_nodes)
    while waiting:
        at = waiting.pop()
        if at != node and (at == "0" or at in ports):
            if at == "0" or at in wells or _one_kind(network, at, n):
                return True
            continue
        for device in devices:
            if at in device.ends:
                other = device.ends[1] if device.ends[0] == at else device.ends[0]
                if other not in seen:
                    seen.add(other)
                    waiting.append(other)
    return False
