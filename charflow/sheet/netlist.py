"""The subckts of a netlist, read without a simulator: their names, ports, defaults and bodies.

Names keep their case and are compared without it, as ngspice does.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path

from charflow.errors import NetlistError
from charflow.sheet.lines import Line, logical_lines, read_text, render

__all__ = [
    "Line",
    "Subckt",
    "assignments",
    "check_ports",
    "closes_subckt",
    "find_subckt",
    "logical_lines",
    "loose_elements",
    "opens_subckt",
    "positional",
    "read_subckts",
    "read_text",
    "render",
]

_ASSIGNMENT = re.compile(r"""(?<![^\s=,()'"{}])([^\s=,()'"{}]+)\s*=\s*('[^']*'|"[^"]*"|\{[^}]*\}|[^\s]+)""")


@dataclass(frozen=True, slots=True)
class Subckt:
    """One ``.subckt`` definition; ``body`` excludes its ``.subckt`` and ``.ends`` lines.

    ``ports`` and ``parameters`` keep order and case; a parameter's default is text, quotes included.
    """

    name: str
    ports: tuple[str, ...]
    parameters: tuple[tuple[str, str], ...]
    body: tuple[Line, ...]
    path: Path
    number: int

    @property
    def place(self) -> str:
        """``FILE:LINE`` of the ``.subckt`` line, for messages."""
        return f"{self.path}:{self.number}"


def assignments(text: str) -> tuple[tuple[str, str], ...]:
    """Return every ``name=value`` in ``text`` in order; a value keeps its quotes or braces."""
    return tuple((found.group(1), found.group(2)) for found in _ASSIGNMENT.finditer(text))


def positional(text: str) -> list[str]:
    """Return the words before the first ``name=value``, parentheses and ``params:`` left out."""
    head = text
    if "=" in text:
        found = _ASSIGNMENT.search(text)
        head = text[: found.start()] if found else text
    words = head.replace("(", " ").replace(")", " ").replace(",", " ").split()
    return [word for word in words if word.lower() != "params:"]


def opens_subckt(text: str) -> bool:
    """Whether a logical line starts a subckt."""
    return text[:1] == "." and text.split(maxsplit=1)[0].lower() in {".subckt", ".macro"}


def closes_subckt(text: str) -> bool:
    """Whether a logical line ends a subckt."""
    return text[:1] == "." and text.split(maxsplit=1)[0].lower() in {".ends", ".eom"}


def read_subckts(lines: Iterable[Line]) -> dict[str, Subckt]:
    """Return the outermost subckts by lower-case name; nested ones stay in the body of theirs.

    Raises :class:`NetlistError` for a subckt without name, defined twice, or without ``.ends``.
    """
    found: dict[str, Subckt] = {}
    head: Line | None = None
    body: list[Line] = []
    depth = 0
    for line in lines:
        if opens_subckt(line.text):
            depth += 1
            if depth == 1:
                head, body = line, []
                continue
        elif closes_subckt(line.text):
            depth -= 1
            if depth < 0 or head is None:
                raise NetlistError(
                    "an .ends without a .subckt before it",
                    where=(line.place,),
                    todo="Remove it, or restore the .subckt line it belongs to.",
                )
            if depth == 0:
                subckt = _subckt(head, tuple(body))
                before = found.setdefault(subckt.name.lower(), subckt)
                if before is not subckt:
                    raise NetlistError(
                        f"subckt {subckt.name!r} is defined twice; the first time at {before.place}",
                        where=(subckt.place,),
                        todo="Keep one of the two; ngspice would silently use one of them.",
                    )
                head = None
                continue
        if head is not None:
            body.append(line)
    if head is not None:
        raise NetlistError(
            f"the subckt that starts here has no .ends: {head.text[:60]}",
            where=(head.place,),
            todo="Add .ends after its last element.",
        )
    return found


def _subckt(head: Line, body: tuple[Line, ...]) -> Subckt:
    words = positional(head.text)
    if len(words) < 2:
        raise NetlistError(
            f"a subckt without a name: {head.text[:60]}",
            where=(head.place,),
            todo="Write .subckt NAME PORT PORT ...",
        )
    tail = head.text if "=" in head.text else ""
    return Subckt(words[1], tuple(words[2:]), assignments(tail), body, head.path, head.number)


def loose_elements(lines: Iterable[Line]) -> tuple[Line, ...]:
    """Return the elements outside every subckt: in a cell's netlist they would join the test circuit."""
    found: list[Line] = []
    depth = 0
    for line in lines:
        if opens_subckt(line.text):
            depth += 1
        elif closes_subckt(line.text):
            depth -= 1
        elif depth == 0 and line.text[0] != ".":
            found.append(line)
    return tuple(found)


def find_subckt(lines: Iterable[Line], name: str | None = None) -> Subckt:
    """Return the subckt called ``name`` (any case); with no name, the only one there is.

    Raises :class:`NetlistError` listing the nearest names, or all of them when none was asked for.
    """
    every = read_subckts(lines)
    names = [subckt.name for subckt in every.values()]
    if not names:
        raise NetlistError("no .subckt was found", todo="A cell is a .subckt NAME ... .ends in the netlist.")
    if name is None:
        if len(names) == 1:
            return next(iter(every.values()))
        shown = ", ".join(names[:12]) + (" ..." if len(names) > 12 else "")
        raise NetlistError(f"{len(names)} subckts were found: {shown}", todo="Say which one is the cell.")
    if name.lower() in every:
        return every[name.lower()]
    near = difflib.get_close_matches(name.lower(), list(every), n=3) or list(every)[:5]
    shown = ", ".join(every[key].name for key in near)
    raise NetlistError(
        f"no subckt is called {name!r}; nearest: {shown}", todo="Correct the name of the subckt."
    )


def check_ports(subckt: Subckt, pins: Sequence[str]) -> None:
    """Check that ``pins`` name every port of ``subckt`` once, in any order and case.

    Raises :class:`NetlistError` naming what is missing, what is too much, and the nearest names.
    """
    ports = {port.lower(): port for port in subckt.ports}
    given: set[str] = set()
    problems: list[str] = []
    for pin in pins:
        if pin.lower() in given:
            problems.append(f"pin {pin!r} is named twice")
        given.add(pin.lower())
    if len(ports) != len(subckt.ports):
        problems.append(f"the .subckt line itself names a port twice: {' '.join(subckt.ports)}")
    free = [key for key in ports if key not in given]
    for pin in dict.fromkeys(pins):
        if pin.lower() not in ports:
            near = difflib.get_close_matches(pin.lower(), free or list(ports), n=1)
            hint = f" (nearest: {ports[near[0]]})" if near else ""
            problems.append(f"pin {pin!r} is no port{hint}")
    if free:
        problems.append("no pin is given for port " + ", ".join(ports[key] for key in free))
    if problems:
        raise NetlistError(
            f"pins and ports of subckt {subckt.name!r} differ: " + "; ".join(problems),
            where=(subckt.place,),
            todo=f"The ports are: {' '.join(subckt.ports)}. Every one needs a pin of that name.",
        )
