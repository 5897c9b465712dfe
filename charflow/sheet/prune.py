"""A model library cut down to what one cell needs.

An open PDK's library has thousands of models, and ngspice reads them all: seconds a load. What a
cell cannot reach through any name it mentions changes no number, so it is left out. Where the
structure is not plainly understood, the library is returned as it came.
"""

from __future__ import annotations

import re
from collections import defaultdict
from collections.abc import Collection, Sequence
from dataclasses import dataclass

from charflow.sheet.bins import Block, Sizes, needless, scales
from charflow.sheet.lines import Line
from charflow.sheet.netlist import closes_subckt, opens_subckt, positional

_WORD = re.compile(r"[\w.$#!]+")
_DEFINED = re.compile(r"\b([a-z_]\w*) ?(?:\([^()]*\) ?)?=(?!=)")
_NAMED = re.compile(r"\.(?:func|model|subckt|macro) ?([^\s(=]+)")
_NUMBERED = re.compile(r"(.+)\.\d+")
_ALWAYS = frozenset({".option", ".options", ".global", ".temp", ".ic", ".nodeset"})


@dataclass(frozen=True, slots=True)
class _Part:
    """What is kept or dropped as a whole: a subckt, or one line outside subckts.

    ``names`` are those it defines, in lower case; with none it is always kept.
    """

    lines: tuple[Line, ...]
    names: frozenset[str]
    block: str = ""


class _UnclearError(Exception):
    """The text has a structure this module does not judge."""


def prune(
    models: Sequence[Line], netlist: Sequence[Line], subckt: str, *, scale: float | None = None
) -> tuple[Line, ...]:
    """Return the lines of ``models`` that subckt ``subckt`` of ``netlist`` can reach, in their order.

    Both must be flat (see :func:`charflow.sheet.sources.gather`). Kept are every subckt, model,
    parameter and function whose name occurs in what is kept, every ``.option`` and the like, and every
    element outside subckts; of binned models, the bins that the sizes in the cell can fall into. All
    definitions of a kept name stay: which of them counts is left to ngspice. Only the cell's own
    devices are considered, so nothing else may be simulated with the result.

    Lengths are taken as metres and as micrometres, and by every ``.option scale`` found; ``scale`` is
    one more such factor, from outside the files.
    """
    try:
        library, cells = _parts(models), _parts(netlist)
    except _UnclearError:
        return tuple(models)
    if all(part.block != subckt.lower() for part in cells):
        return tuple(models)
    cell = _reached(cells, {subckt.lower()}, all_loose=True)
    mentioned = {subckt.lower()}.union(*(_mentions(part) for part in cell))

    # first without looking into models, which are most of the text and call no subckt
    reached = _reached(library, mentioned, skip_models=True)
    outside = tuple(line for part in (*cell, *reached) if not part.block for line in part.lines)
    blocks = [Block(part.block, part.lines) for part in (*cell, *reached) if part.block]
    factors = scales([*models, *netlist]) | ({scale} if scale else set())
    sizes = Sizes([*blocks, Block("", outside)], factors)
    dropped = needless(outside, sizes).union(*(needless(part.lines, sizes) for part in reached if part.block))
    slim = [_without(part, dropped) for part in library]
    return tuple(line for part in _reached(slim, mentioned) for line in part.lines)


def _word(text: str) -> str:
    return text.split(maxsplit=1)[0].lower() if text[0] == "." else ""


def _parts(lines: Sequence[Line]) -> list[_Part]:
    """Split flat text into parts; raise :class:`_UnclearError` if that is not plainly possible."""
    parts: list[_Part] = []
    held: list[Line] = []
    depth = 0
    for line in lines:
        text = line.text
        if text[0] != ".":
            if text[0] in "xX" and not positional(text):  # it does not say plainly what it calls
                raise _UnclearError
            if depth:
                held.append(line)
            else:
                parts.append(_Part((line,), frozenset()))
            continue
        if opens_subckt(text):
            depth += 1
            held.append(line)
        elif closes_subckt(text):
            depth -= 1
            if depth < 0:
                raise _UnclearError
            held.append(line)
            if depth == 0:
                name = _NAMED.match(held[0].text.lower())
                if not name:
                    raise _UnclearError
                parts.append(_Part(tuple(held), _plain(name.group(1)), name.group(1)))
                held = []
        elif depth:
            held.append(line)
        else:
            parts.append(_Part((line,), _defined(text.lower())))
    if depth:
        raise _UnclearError
    return parts


def _defined(text: str) -> frozenset[str]:
    """Return the names a directive outside subckts defines; none if it must stay."""
    word = _word(text)
    if word == ".param":
        return frozenset(_DEFINED.findall(text))
    if word in {".model", ".func"}:
        found = _NAMED.match(text)
        if not found:
            raise _UnclearError
        names = {found.group(1)}
        family = _NUMBERED.fullmatch(found.group(1))
        if family and word == ".model":
            names.add(family.group(1))
        return _plain(*names)
    if word in _ALWAYS:
        return frozenset()
    # conditions, includes and the unknown
    raise _UnclearError


def _plain(*names: str) -> frozenset[str]:
    """Return ``names``, or none if one of them could not be found again among words."""
    return frozenset(names) if all(_WORD.fullmatch(name) for name in names) else frozenset()


def _mentions(part: _Part, skip_models: bool = False) -> set[str]:
    texts = (line.text for line in part.lines)
    if skip_models:
        texts = (text for text in texts if text[:6].lower() != ".model")
    return set(_WORD.findall(" ".join(texts).lower()))


def _reached(
    parts: Sequence[_Part], mentioned: Collection[str], *, skip_models: bool = False, all_loose: bool = False
) -> list[_Part]:
    """Return the parts whose names are mentioned, directly or by another kept part, in their order."""
    by_name: dict[str, list[int]] = defaultdict(list)
    kept: set[int] = set()
    for index, part in enumerate(parts):
        for name in part.names:
            by_name[name].append(index)
        if not part.names or (all_loose and not part.block):
            kept.add(index)
    waiting = list(kept)
    words: set[str] = set(mentioned)
    while words:
        for word in words:
            for index in by_name.pop(word, ()):
                if index not in kept:
                    kept.add(index)
                    waiting.append(index)
        words = set()
        while waiting:
            words |= _mentions(parts[waiting.pop()], skip_models)
    return [parts[index] for index in sorted(kept)]


def _without(part: _Part, dropped: Collection[Line]) -> _Part:
    if not dropped or not any(line in dropped for line in part.lines):
        return part
    left = tuple(line for line in part.lines if line not in dropped)
    # a family's name must not keep an empty part alive
    return _Part(left, part.names if left else frozenset(), part.block)
