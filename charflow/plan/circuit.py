"""A cell at one corner, ready to be put in a deck: screened netlist, pruned models, pins and supplies.

Only text that passed the screening of :mod:`charflow.sheet.sources` is in here; a deck made from it
includes no other file.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterable
from dataclasses import dataclass, replace
from pathlib import Path

from charflow.errors import CharflowError, NetlistError
from charflow.sheet import Corner, Role, Sheet
from charflow.sheet.lines import render
from charflow.sheet.netlist import Line, check_ports, find_subckt, loose_elements
from charflow.sheet.prune import prune
from charflow.sheet.sources import Rules, fingerprint, gather

Parts = tuple[tuple[str, str], ...]


@dataclass(frozen=True)
class Circuit:
    """Everything about a cell at a corner that no trial changes.

    ``rest`` [s] is how long each vector of a start is held; ``models`` and ``netlist`` are SPICE text;
    ``digest`` identifies their content, comments and layout aside; ``parts`` are what it is made of, by name.
    """

    corner: str
    supply: float
    temperature: float
    compatibility: str | None
    options: tuple[tuple[str, float], ...]
    models: str
    netlist: str
    subckt: str
    ports: tuple[str, ...]
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    powers: tuple[str, ...]
    grounds: tuple[str, ...]
    fractions: tuple[float, float]
    digest: str
    parts: tuple[tuple[str, str], ...] = ()
    rest: float = 4e-9

    def rested(self, rest: float) -> Circuit:
        """Return the same circuit with another rest time [s]."""
        return replace(self, rest=rest)

    @property
    def nodes(self) -> dict[str, str]:
        """Node name in the deck of each pin, keyed by the sheet's pin name."""
        return node_names((*self.inputs, *self.outputs, *self.powers, *self.grounds))


def node_names(pins: Iterable[str]) -> dict[str, str]:
    """Return a node name for each pin that is plain to ngspice and to nothing else (buses, slashes)."""
    names: dict[str, str] = {}
    for pin in pins:
        plain = "p_" + re.sub(r"[^a-z0-9_]", "_", pin.lower())
        while plain in names.values():
            plain += "_"
        names[pin] = plain
    return names


@dataclass(frozen=True)
class Sources:
    """The files of a sheet, read once: the cell's netlist and, for each corner, its model lines."""

    netlist: tuple[Line, ...]
    models: dict[str, tuple[Line, ...]]
    files: tuple[Path, ...]


def rules_of(sheet: Sheet) -> Rules:
    """Return what the sheet allows its files to include: their own folders and those it names."""
    named = [
        sheet.cell.netlist,
        *(Path(_split(spec)[0]) for c in sheet.corners.values() for spec in c.models),
    ]
    folders = (*(path.parent for path in named), *sheet.cell.include_folders)
    modes = {corner.compatibility or "" for corner in sheet.corners.values()}
    dollar = not any("ps" in mode for mode in modes)  # in PSPICE mode a dollar sign is no comment
    return Rules(folders=tuple(dict.fromkeys(folders)), allow=sheet.cell.allow, dollar_comments=dollar)


def _split(spec: str) -> tuple[str, str | None]:
    file, colon, section = spec.rpartition(":")
    if colon and re.fullmatch(r"[\w.+-]+", section):
        return file, section
    return spec, None


def read_sources(sheet: Sheet, corners: Iterable[str] | None = None) -> Sources:
    """Read and screen every file the sheet names. Raises NetlistError or RefusedError with the place."""
    rules = rules_of(sheet)
    files: list[Path] = []
    gathered = gather(sheet.cell.netlist, rules)
    files.extend(gathered.files)
    models: dict[str, tuple[Line, ...]] = {}
    for name in corners if corners is not None else sheet.corners:
        parts: list[Line] = []
        for spec in sheet.corners[name].models:
            path, section = _split(spec)
            try:
                part = gather(Path(path), rules, section)
            except CharflowError as error:
                raise error.at(f"corner {name!r}").at(str(sheet.path)) from None
            parts.extend(part.lines)
            files.extend(part.files)
        models[name] = tuple(parts)
    return Sources(gathered.lines, models, tuple(dict.fromkeys(files)))


def circuit_of(sheet: Sheet, sources: Sources, corner: str, *, pruned: bool = True) -> Circuit:
    """Return the circuit of ``sheet`` at ``corner``.

    With ``pruned`` the models are reduced to what the cell uses. Raises NetlistError where the subckt
    is missing or its ports and the sheet's pins differ.
    """
    condition: Corner = sheet.corners[corner]
    try:
        subckt = find_subckt(sources.netlist, sheet.cell.subckt)
    except NetlistError as error:
        raise error.at(str(sheet.cell.netlist)).at(str(sheet.path)) from None
    try:
        check_ports(subckt, tuple(sheet.pins))
    except NetlistError as error:
        raise error.at(str(sheet.path)) from None
    loose = loose_elements(sources.netlist)
    if loose:
        raise NetlistError(
            f"{loose[0].text.split()[0]!r} stands outside every subckt",
            where=(loose[0].place,),
            todo="A cell's netlist holds subckts only; put the elements into one, or remove them.",
        )
    by_name = {pin.lower(): pin for pin in sheet.pins}
    models = sources.models[corner]
    if pruned:
        models = prune(models, sources.netlist, subckt.name, scale=condition.options.get("scale"))
    circuit = Circuit(
        corner=corner,
        supply=condition.supply,
        temperature=condition.temperature,
        compatibility=condition.compatibility,
        options=tuple(sorted(condition.options.items())),
        models=render(models),
        netlist=render(sources.netlist),
        subckt=subckt.name,
        ports=tuple(by_name[port.lower()] for port in subckt.ports),
        inputs=sheet.inputs,
        outputs=sheet.outputs,
        powers=sheet.with_role(Role.POWER),
        grounds=sheet.with_role(Role.GROUND),
        fractions=sheet.measure.slew_fractions,
        digest="",
    )
    parts = parts_of(circuit, models, sources.netlist)
    return replace(circuit, digest=digest_of(parts), parts=parts)


def parts_of(circuit: Circuit, models: Iterable[Line], netlist: Iterable[Line]) -> Parts:
    """Return by name what decides the outcomes of ``circuit``, with these lines as models and netlist."""
    return (
        ("models", fingerprint(models)),
        ("netlist", fingerprint(netlist)),
        *((name, repr(getattr(circuit, name))) for name in _DECIDING),
    )


def digest_of(parts: Parts) -> str:
    """Return the digest of a circuit with these parts."""
    return hashlib.sha256("\n".join(part for _, part in parts).encode()).hexdigest()


_DECIDING = (
    "supply",
    "temperature",
    "compatibility",
    "options",
    "subckt",
    "ports",
    "inputs",
    "outputs",
    "powers",
    "grounds",
    "fractions",
)
