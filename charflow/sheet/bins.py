"""Binned transistor models: which size bins the devices of a cell can fall into.

A bin is dropped only when every size its family can meet is known to be clearly outside it. Where
a size cannot be read plainly, every bin stays.
"""

from __future__ import annotations

import re
from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from itertools import product

from charflow.sheet.lines import Line
from charflow.sheet.netlist import assignments, positional

MARGIN = 0.1  # relative; beyond the offsets (xl, xw) some simulators add before they choose a bin

_BIN = re.compile(r"\.model (\S+)\.(\d+) ", re.IGNORECASE)
_LIMIT = re.compile(r"\b([lw])(min|max) ?= ?([^\s=]+)", re.IGNORECASE)
_NUMBER = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:e[+-]?\d+)?)(meg|mil|[tgkmunpfa])?[a-z]*", re.IGNORECASE)
_FACTORS = {
    "t": 1e12, "g": 1e9, "meg": 1e6, "k": 1e3, "": 1.0, "mil": 25.4e-6, "m": 1e-3,
    "u": 1e-6, "n": 1e-9, "p": 1e-12, "f": 1e-15, "a": 1e-18,
}  # fmt: skip
_NAME = re.compile(r"[a-z_]\w*")
_DEEPEST = 8

Values = frozenset[float] | None  # None: not known


@dataclass(frozen=True, slots=True)
class Block:
    """A subckt as its lines, ``.subckt`` and ``.ends`` included; ``name`` in lower case."""

    name: str
    lines: tuple[Line, ...]


def number(text: str) -> float | None:
    """Return the value of a SPICE number such as ``0.42``, ``420000u`` or ``'1e-6'``; None if it is none."""
    found = _NUMBER.fullmatch(text.strip("'\"{} "))
    if not found:
        return None
    return float(found.group(1)) * _FACTORS[(found.group(2) or "").lower()]


def scales(lines: Iterable[Line]) -> frozenset[float]:
    """Return every factor a length may be multiplied by: 1, 1e-6 and each ``.option scale``."""
    found = {1.0, 1e-6}
    for line in lines:
        if line.text[:4].lower() == ".opt":
            for name, value in assignments(line.text):
                factor = number(value)
                if name.lower() == "scale" and factor:
                    found.add(factor)
    return frozenset(found)


class Sizes:
    """What lengths and widths the devices of the reachable subckts can have.

    ``blocks`` are the subckts that may be instantiated, ``cell`` the one nothing calls.
    """

    def __init__(self, blocks: Sequence[Block], factors: frozenset[float]) -> None:
        self.factors = factors
        self.defaults: dict[str, dict[str, list[str]]] = {}
        self.calls: dict[str, list[tuple[str, dict[str, str]]]] = defaultdict(list)
        self.devices: dict[tuple[str, str], list[dict[str, str]]] = defaultdict(list)
        self.users: dict[str, set[str]] = defaultdict(set)
        for block in blocks:
            self._scan(block)

    def _scan(self, block: Block) -> None:
        defaults = self.defaults.setdefault(block.name, defaultdict(list))
        for line in block.lines:
            text = line.text.lower()
            if text.startswith((".subckt ", ".param ")):
                for name, value in assignments(text):
                    defaults[name].append(value)
            elif text[0] in "xm":
                words, given = positional(text), dict(assignments(text))
                if text[0] == "x":
                    self.calls[words[-1]].append((block.name, given))
                elif len(words) > 5:
                    for word in words[4:]:
                        self.devices[(block.name, word)].append(given)
                        self.users[word].add(block.name)

    def values(self, expression: str | None, block: str, depth: int = 0) -> Values:
        """Return the values an instance's parameter can have inside ``block``; None if not known."""
        if expression is None or depth > _DEEPEST:
            return None
        literal = number(expression)
        if literal is not None:
            return frozenset({literal})
        name = expression.strip("'\"{} ")
        written = self.defaults.get(block, {}).get(name)
        if not _NAME.fullmatch(name) or not written:
            return None
        found: set[float] = set()
        for default in written:
            value = number(default)
            if value is None:
                return None
            found.add(value)
        for caller, given in self.calls.get(block, ()):
            if name in given:
                passed = self.values(given[name], caller, depth + 1)
                if passed is None:
                    return None
                found |= passed
        return frozenset(found)

    def of(self, model: str) -> list[tuple[float, float]] | None:
        """Return every (length, width) in metres a device of ``model`` can have; None if not known."""
        pairs: set[tuple[float, float]] = set()
        users = self.users.get(model)
        if not users:
            return None
        for block in users:
            for given in self.devices[(block, model)]:
                lengths = self.values(given.get("l"), block)
                widths = self.values(given.get("w"), block)
                fingers = self.values(given.get("nf", "1"), block)
                if lengths is None or widths is None or fingers is None:
                    return None
                # width may be of the whole device or of one finger
                widths |= {width / count for width, count in product(widths, fingers) if count > 0}
                pairs |= {
                    (length * factor, width * factor)
                    for length, width, factor in product(lengths, widths, self.factors)
                }
        return sorted(pairs)


def needless(models: Iterable[Line], sizes: Sizes) -> set[Line]:
    """Return those ``.model`` lines that are bins no device can fall into."""
    families: dict[str, list[Line]] = defaultdict(list)
    for line in models:
        found = _BIN.match(line.text[:200])
        # a device may name one bin itself
        if found and f"{found.group(1)}.{found.group(2)}".lower() not in sizes.users:
            families[found.group(1).lower()].append(line)
    dropped: set[Line] = set()
    for name, bins in families.items():
        pairs = sizes.of(name)
        if pairs is None:
            continue
        limits = [_limits(line.text) for line in bins]
        outside = {
            line
            for line, box in zip(bins, limits, strict=True)
            if box and not any(_inside(pair, box, MARGIN) for pair in pairs)
        }
        # a family with no exact home for any size is not understood
        if any(box and _inside(pair, box, 0) for box in limits for pair in pairs):
            dropped |= outside
    return dropped


def _limits(text: str) -> dict[str, float] | None:
    box: dict[str, float] = {}
    for axis, end, value in _LIMIT.findall(text):
        limit = number(value)
        if limit is None:
            return None
        box[(axis + end).lower()] = limit
    return box if len(box) == 4 else None


def _inside(pair: tuple[float, float], box: dict[str, float], margin: float) -> bool:
    length, width = pair
    return box["lmin"] * (1 - margin) <= length <= box["lmax"] * (1 + margin) and box["wmin"] * (
        1 - margin
    ) <= width <= box["wmax"] * (1 + margin)
