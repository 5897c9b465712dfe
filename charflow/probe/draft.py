"""A first sheet for a bare netlist: pins and function worked out, proved if models are given, axes chosen."""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from math import isfinite
from pathlib import Path

from charflow.errors import CharflowError, InputError, NetlistError
from charflow.plan.behaviour import behaviour_of
from charflow.plan.circuit import circuit_of, read_sources
from charflow.probe.axes import DraftAxes, axes_by_simulation, axes_from_sizes
from charflow.probe.draft_text import DOUBT, MISSING, Findings, ModelChoice, Proof, sheet_text
from charflow.probe.explore import explore
from charflow.probe.function import Mismatch, check_function
from charflow.probe.infer import infer
from charflow.probe.pins import find_ports
from charflow.probe.rest import shortest_working
from charflow.probe.transistors import read_network
from charflow.sheet import Sheet
from charflow.sheet.bins import number
from charflow.sheet.netlist import Line
from charflow.sheet.read import expand, sheet_from
from charflow.sheet.sources import Rules, gather
from charflow.sheet.units import Unit, parse
from charflow.simulate.engine import Engine

CORNER = "typical"

Say = Callable[[str], None]


@dataclass(frozen=True)
class Wanted:
    """What the user says beside the netlist. ``supply`` is text with its unit, ``temperature`` likewise.

    ``models`` are FILE or FILE:SECTION, relative to the current folder.
    """

    subckt: str | None = None
    models: tuple[str, ...] = ()
    supply: str | None = None
    temperature: str = "25 C"
    compatibility: str | None = None
    options: Mapping[str, float] = field(default_factory=dict)
    include_folders: tuple[Path, ...] = ()


def draft(netlist: Path, out: Path, wanted: Wanted | None = None, say: Say = lambda _: None) -> str:
    """Return the text of a sheet for the cell in ``netlist``, to be written to ``out``.

    The function is worked out at switch level. With models it is then proved by simulation in this
    process, and the axes are chosen from measured transitions and input capacitances; without, the
    sheet says so. Paths in the sheet are relative to the folder of ``out``. Raises
    :class:`CharflowError` where a pin or the function cannot be told, or simulation contradicts it.
    """
    wanted = wanted or Wanted()
    if wanted.models and wanted.supply is None:
        raise InputError("models are given, but no supply", todo='Add for example --supply "1.8 V".')
    if wanted.supply is not None:
        parse(wanted.supply, Unit.VOLT)
    parse(wanted.temperature, Unit.CELSIUS)
    try:
        findings = _findings(netlist, wanted)
    except NetlistError as error:
        raise error.at(str(netlist)) if not error.where else error from None
    choice = _choice(netlist, out, wanted)
    axes = axes_from_sizes(findings.network, findings.ports)
    text = sheet_text(findings, choice, axes, None)
    sheet = _read(text, out)
    behaviour_of(sheet)
    if not wanted.models:
        return text
    axes, proof = _proved(sheet, say)
    text = sheet_text(findings, choice, axes, proof)
    _read(text, out)
    return text


def draft_to(netlist: Path, out: Path, wanted: Wanted | None = None, say: Say = lambda _: None) -> int:
    """Write the drafted sheet to the new file ``out``; return how many lines are marked as doubt or gap.

    Raises :class:`InputError` where ``out`` is there already or cannot be written, and what
    :func:`draft` raises.
    """
    if out.exists():
        raise InputError("there is a file already", where=(str(out),), todo="Name a new one, or remove it.")
    text = draft(netlist, out, wanted, say)
    try:
        with out.open("x", encoding="utf-8") as file:
            file.write(text)
    except OSError as error:
        raise InputError(f"the sheet cannot be written: {error.strerror}", where=(str(out),)) from None
    marks = (DOUBT, MISSING)
    return sum(any(mark in line for mark in marks) for line in text.splitlines())


def option_values(words: Iterable[str]) -> dict[str, float]:
    """Return ``NAME=VALUE`` words as SPICE options. Raises :class:`InputError` for any other form."""
    found: dict[str, float] = {}
    for word in words:
        name, equals, text = word.partition("=")
        value = number(text)
        if not equals or not re.fullmatch(r"[A-Za-z_]\w*", name) or value is None or not isfinite(value):
            raise InputError(f"{word!r} is no SPICE option", todo="Write NAME=VALUE, such as scale=1e-6.")
        found[name] = value
    return found


def _findings(netlist: Path, wanted: Wanted) -> Findings:
    folders = (netlist.parent, *wanted.include_folders)
    lines = gather(netlist, Rules(folders=folders)).lines
    try:
        network = read_network(lines, wanted.subckt)
    except NetlistError:
        if not wanted.models:
            raise
        # the models may tell a polarity that names do not
        network = read_network(lines, wanted.subckt, _model_lines(wanted))
    ports = find_ports(network)
    reached = explore(network, ports)
    return Findings(network, ports, reached, infer(reached))


def _model_lines(wanted: Wanted) -> list[Line]:
    lines: list[Line] = []
    for spec in wanted.models:
        file, section = _split(expand(spec))
        path = Path(file)
        lines += gather(path, Rules(folders=(path.parent, *wanted.include_folders)), section).lines
    return lines


def _split(spec: str) -> tuple[str, str | None]:
    file, colon, section = spec.rpartition(":")
    return (file, section) if colon and re.fullmatch(r"[\w.+-]+", section) else (spec, None)


def _choice(netlist: Path, out: Path, wanted: Wanted) -> ModelChoice:
    folder = out.absolute().parent
    models = []
    for spec in wanted.models:
        file, section = _split(spec)
        models.append(_relative(file, folder) + (f":{section}" if section else ""))
    return ModelChoice(
        corner=CORNER,
        netlist=_relative(str(netlist), folder),
        models=tuple(models),
        supply=wanted.supply,
        temperature=wanted.temperature,
        compatibility=wanted.compatibility,
        options=wanted.options,
        include_folders=tuple(_relative(str(path), folder) for path in wanted.include_folders),
    )


def _relative(path: str, folder: Path) -> str:
    """Return ``path`` as seen from ``folder``; as it is where it uses a variable or lies far away."""
    if "${" in path:
        return path
    absolute = os.path.abspath(path)  # noqa: PTH100  # without following links, as the user wrote it
    try:
        relative = os.path.relpath(absolute, folder)
    except ValueError:
        return absolute
    return absolute if relative.count("..") > 3 else relative


def _read(text: str, out: Path) -> Sheet:
    """Return the sheet in ``text``; its mistakes are the user's arguments, so they name no line."""
    try:
        text.encode()
    except UnicodeEncodeError:
        raise InputError(
            "a path is not UTF-8 text, so no sheet can name it", where=(repr(str(out)),)
        ) from None
    return sheet_from(tomllib.loads(text), out, "")


def _proved(sheet: Sheet, say: Say) -> tuple[DraftAxes, Proof]:
    """Simulate every flip of the drafted function, then choose axes on the cell as it behaves."""
    circuit = circuit_of(sheet, read_sources(sheet), CORNER)
    cell = behaviour_of(sheet)

    def works(rest: float) -> int:
        say(f"proving the function by simulation, each vector held for {rest * 1e9:g} ns")
        engine = Engine(circuit.rested(rest))
        try:
            return check_function(engine.run, cell, sheet, CORNER, until=rest)
        except Mismatch as mismatch:
            raise mismatch.error from None

    try:
        rest, count = shortest_working(works)
    except CharflowError as error:
        raise type(error)(
            error.message,
            where=(*error.where, "proving the drafted function"),
            todo=error.todo
            if error.exit_status != 2
            else "At switch level the cell does this; check the models, the supply and --option scale. "
            "Without --models the draft is written unproved.",
        ) from None
    say("choosing the axes")
    return axes_by_simulation(Engine(circuit.rested(rest)), cell, sheet), Proof(count, rest)
