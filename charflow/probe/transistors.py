"""A cell's netlist as one flat list of transistors: who gates whom, how strongly, on what capacitance.

Subckts are expanded, resistors taken as wire, parallel fingers merged. Nothing here needs a simulator
or a transistor model: polarity comes from ``.model`` lines where they are given, else from the name of
the model, and relative strength from width and length.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace

from charflow.errors import NetlistError
from charflow.sheet.bins import number
from charflow.sheet.netlist import Line, Subckt, assignments, find_subckt, loose_elements, positional
from charflow.sheet.netlist import read_subckts as subckts_of

MAX_TRANSISTORS = 2000
MAX_DEPTH = 20
MOBILITY = 0.4  # hole over electron mobility in silicon, as textbooks round it
OXIDE = 1e-2  # F/m2 of gate, about 10 fF/um2: typical from 180 nm to 65 nm
EDGE = 0.6e-9  # F/m of width, a source or drain junction with its overlap
GROUND_NODES = frozenset({"0", "gnd"})

_N_NAME = re.compile(r"nfet|nmos|nch|nsvt|nlvt|nhvt|^n(?!p)|_n(?:_|\d|$)")
_P_NAME = re.compile(r"pfet|pmos|pch|psvt|plvt|phvt|^p(?!n)|_p(?:_|\d|$)")


@dataclass(frozen=True)
class Transistor:
    """One switch: conducts between ``ends`` while ``gate`` is high (``n``) or low.

    ``width`` and ``length`` in metres, None where the netlist does not say a plain number; ``strength``
    is a relative conductance.
    """

    name: str
    gate: str
    ends: tuple[str, str]
    bulk: str
    n: bool
    width: float | None
    length: float | None

    @property
    def strength(self) -> float:
        """Conductance relative to a square n-channel device."""
        shape = self.width / self.length if self.width and self.length else 2.0
        return shape * (1.0 if self.n else MOBILITY)


@dataclass(frozen=True)
class Network:
    """A flat cell. Names are lower case; ``ports`` keep the netlist's case and order.

    ``capacitance`` [F] is each node's own, from sizes and capacitors; ``unsized`` counts the devices
    whose size is not a plain number.
    """

    name: str
    ports: tuple[str, ...]
    transistors: tuple[Transistor, ...]
    capacitance: Mapping[str, float]
    unsized: int

    @property
    def port_nodes(self) -> tuple[str, ...]:
        """The ports as node names."""
        return tuple(port.lower() for port in self.ports)


@dataclass
class _Found:
    devices: list[Transistor] = field(default_factory=list)
    capacitors: list[tuple[str, str, float]] = field(default_factory=list)
    wires: list[tuple[str, str]] = field(default_factory=list)


def read_network(lines: Sequence[Line], subckt: str | None = None, models: Iterable[Line] = ()) -> Network:
    """Return the flat network of ``subckt`` (the only one, if None) in the flat, screened ``lines``.

    ``models`` are further lines that may say a model's polarity. Raises :class:`NetlistError` for an
    element that is no transistor, resistor, capacitor or diode, a device of unknown polarity, and a
    netlist too large for a cell.
    """
    cell = find_subckt(lines, subckt)
    outer = subckts_of(lines)
    kinds = _model_kinds([*lines, *models])
    found = _Found()
    _expand(cell, outer, kinds, {port.lower(): port.lower() for port in cell.ports}, {}, "", found, 0)
    if not found.devices:
        raise NetlistError("the subckt holds no transistor", where=(cell.place,))
    if len({port.lower() for port in cell.ports}) != len(cell.ports):
        raise NetlistError("the .subckt line names a port twice", where=(cell.place,))
    return _network(cell, found)


def _model_kinds(lines: Iterable[Line]) -> dict[str, bool]:
    """Return True for n-channel, False for p-channel, by lower-case model name."""
    kinds: dict[str, bool] = {}
    for line in lines:
        if line.text[:6].lower() == ".model":
            words = line.text.lower().replace("(", " ").split()
            if len(words) > 2 and words[2] in ("nmos", "pmos"):
                kinds[words[1]] = words[2] == "nmos"
                kinds.setdefault(words[1].rpartition(".")[0], words[2] == "nmos")
    return kinds


def _expand(
    cell: Subckt,
    outer: Mapping[str, Subckt],
    kinds: Mapping[str, bool],
    nodes: Mapping[str, str],
    given: Mapping[str, str],
    prefix: str,
    found: _Found,
    depth: int,
) -> None:
    if depth > MAX_DEPTH:
        raise NetlistError(f"subckts are nested deeper than {MAX_DEPTH}", where=(cell.place,))
    inner = {**outer, **subckts_of(cell.body)}
    values = {**{k.lower(): v for k, v in cell.parameters}, **given}

    def node(name: str) -> str:
        name = name.lower()
        return nodes.get(name, "0" if name in GROUND_NODES else prefix + name)

    for line in loose_elements(cell.body):
        kind, words = line.text[0].lower(), positional(line.text)
        settings = {
            key.lower(): values.get(value.strip("'{} ").lower(), value)
            for key, value in assignments(line.text)
        }
        if kind == "x" and len(words) > 1 and words[-1].lower() in inner:
            called = inner[words[-1].lower()]
            if len(words) - 2 != len(called.ports):
                raise NetlistError(
                    f"{words[0]!r} gives {len(words) - 2} nodes to {called.name!r}, which has "
                    f"{len(called.ports)} ports",
                    where=(line.place,),
                )
            ports = {port.lower(): node(word) for port, word in zip(called.ports, words[1:-1], strict=True)}
            _expand(called, inner, kinds, ports, settings, f"{prefix}{words[0].lower()}.", found, depth + 1)
        elif kind in "mx":
            found.devices.append(_transistor(line, words, settings, kinds, node, prefix))
            if len(found.devices) > MAX_TRANSISTORS:
                raise NetlistError(
                    f"more than {MAX_TRANSISTORS} transistors; this is no register cell", where=(cell.place,)
                )
        elif kind == "c" and len(words) > 2:
            farads = number(words[3]) if len(words) > 3 else number(settings.get("c", ""))
            found.capacitors.append((node(words[1]), node(words[2]), farads or 0.0))
        elif kind == "r" and len(words) > 2:
            found.wires.append((node(words[1]), node(words[2])))
        elif kind != "d":
            raise NetlistError(
                f"{words[0]!r} is not a transistor, resistor, capacitor or diode",
                where=(line.place,),
                todo="A sheet can be drafted for transistor netlists only.",
            )


def _transistor(
    line: Line,
    words: list[str],
    settings: Mapping[str, str],
    kinds: Mapping[str, bool],
    node: Callable[[str], str],
    prefix: str,
) -> Transistor:
    if len(words) != 6:
        raise NetlistError(
            f"{words[0]!r} has {len(words) - 2} nodes before {words[-1]!r}; a transistor has 4",
            where=(line.place,),
            todo="Write drain, gate, source, bulk and the model; a subckt it names must be in this file.",
        )
    drain, gate, source, bulk = (node(word) for word in words[1:5])
    model = words[5].lower()
    copies = _size(settings, "m", "mult") or 1.0
    width, length = _metres(_size(settings, "w")), _metres(_size(settings, "l"))
    return Transistor(
        name=prefix + words[0],
        gate=gate,
        ends=(drain, source),
        bulk=bulk,
        n=_polarity(model, kinds, line),
        width=width * copies if width else None,
        length=length,
    )


def _polarity(model: str, kinds: Mapping[str, bool], line: Line) -> bool:
    if model in kinds:
        return kinds[model]
    n, p = bool(_N_NAME.search(model)), bool(_P_NAME.search(model))
    if n == p:
        raise NetlistError(
            f"the name {model!r} does not tell whether this is an n-channel or a p-channel transistor",
            where=(line.place,),
            todo="Give its model file, with a '.model NAME nmos' or 'pmos' line.",
        )
    return n


def _size(settings: Mapping[str, str], *names: str) -> float | None:
    for name in names:
        value = number(settings[name]) if name in settings else None
        if value is not None and 0 < value < 1e12:
            return value
    return None


def _metres(size: float | None) -> float | None:
    """Return a length in metres: numbers above a millimetre are micrometres (``.option scale=1e-6``)."""
    if size is None:
        return None
    return size * 1e-6 if size > 1e-3 else size


def _network(cell: Subckt, found: _Found) -> Network:
    name_of = _joined(found.wires, [port.lower() for port in cell.ports])
    merged: dict[tuple[object, ...], Transistor] = {}
    for device in found.devices:
        a, b = (name_of(end) for end in device.ends)
        gate, bulk = name_of(device.gate), name_of(device.bulk)
        moved = replace(device, gate=gate, ends=(min(a, b), max(a, b)), bulk=bulk)
        key = (gate, moved.ends, bulk, moved.n, moved.length)
        before = merged.get(key)
        if before is not None and before.width and moved.width:
            moved = replace(before, width=before.width + moved.width)
        merged[key] = moved
    devices = tuple(merged.values())
    capacitance: dict[str, float] = {}

    def add(node: str, farads: float) -> None:
        capacitance[node] = capacitance.get(node, 0.0) + farads

    for device in devices:
        width, length = device.width or 0.5e-6, device.length or 0.13e-6
        add(device.gate, OXIDE * width * length)
        for end in device.ends:
            add(end, EDGE * width)
    for a, b, farads in found.capacitors:
        for node in {name_of(a), name_of(b)}:
            add(node, abs(farads))
    unsized = sum(device.width is None or device.length is None for device in devices)
    return Network(cell.name, cell.ports, devices, capacitance, unsized)


def _joined(wires: Iterable[tuple[str, str]], ports: Sequence[str]) -> Callable[[str], str]:
    """Return what a node is called when resistors are wire; a port keeps its own name."""
    parent: dict[str, str] = {}

    def root(node: str) -> str:
        while node in parent:
            node = parent[node]
        return node

    kept = {*ports, "0"}
    for a, b in wires:
        first, second = root(a), root(b)
        if first in kept and second in kept:
            continue  # a resistor between two ports joins nothing
        if first != second:
            if first in kept:
                first, second = second, first
            parent[first] = second
    return root
