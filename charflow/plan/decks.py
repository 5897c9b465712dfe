"""Transient decks as files that anyone can run with ``ngspice -b``, without charflow."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from charflow.errors import FolderError, SheetError
from charflow.plan.arcs import DELAYS, WIDTHS, Arc, Kind, edge_name
from charflow.plan.circuit import Circuit, circuit_of, read_sources
from charflow.plan.deck import Settings, deck, spiceinit
from charflow.plan.derive import arcs_of
from charflow.plan.stimulus import Condition, at_offset, ramp_time, relaxed
from charflow.plan.trial import Trial
from charflow.sheet import Sheet

OFFSETS = (8.0, 4.0, 2.0, 1.0, 0.5, 0.0, -0.5, -1.0)  # of the slower of the two rail-to-rail ramps
AFTER = 2e-9  # s the window goes on after the last edge


def write_decks(sheet: Sheet, folder: Path) -> dict[str, Any]:
    """Write decks that vary offset, input slews and load, at every corner, and return how many.

    Each brings the cell to rest by itself and prints its clock-to-output delay through ``.measure``.
    Raises :class:`FolderError` where the folder cannot be written or holds something else.
    """
    sources = read_sources(sheet)
    try:
        folder.mkdir(parents=True, exist_ok=True)
        strangers = [p.name for p in folder.iterdir() if p.suffix != ".cir" and p.name != ".spiceinit"]
        if strangers:
            raise FolderError(
                f"the folder holds something that is not a deck ({min(strangers)!r})",
                where=(str(folder),),
                todo="Name a new or empty folder; nothing was changed.",
            )
        modes = {corner.compatibility for corner in sheet.corners.values()}
        if len(modes) > 1:
            raise SheetError(
                "the corners ask for different compatibility modes, and one folder has one .spiceinit",
                where=(str(sheet.path),),
            )
        mode = modes.pop()
        (folder / ".spiceinit").write_text(spiceinit(mode), encoding="utf-8")
        count = 0
        for corner in sheet.corners:
            circuit = circuit_of(sheet, sources, corner)
            for name, trial in _trials(sheet, circuit):
                text = deck(circuit, trial, Settings(), measures=True)
                (folder / f"{name}.cir").write_text(text, encoding="utf-8")
                count += 1
    except OSError as error:
        raise FolderError(f"the folder cannot be written: {error.strerror}", where=(str(folder),)) from None
    return {"count": count, "folder": str(folder)}


def _trials(sheet: Sheet, circuit: Circuit) -> Iterator[tuple[str, Trial]]:
    for arc in arcs_of(sheet):
        if arc.kind in DELAYS:
            by_data = arc.kind is Kind.DATA_TO_Q
            for slew in sheet.axes.data_slew if by_data else sheet.axes.clock_slew:
                for load in sheet.axes.load:
                    clock, data = (None, slew) if by_data else (slew, None)
                    condition = Condition(circuit.corner, clock, data, load)
                    end = ramp_time(slew, circuit.fractions) / 2 + AFTER
                    yield _name(arc, condition, None), relaxed(sheet, arc, condition, end)
        else:
            yield from _sweep(sheet, circuit, arc)


def _sweep(sheet: Sheet, circuit: Circuit, arc: Arc) -> Iterator[tuple[str, Trial]]:
    for clock_slew in sheet.axes.clock_slew:
        for data_slew in sheet.axes.data_slew:
            condition = Condition(circuit.corner, clock_slew, data_slew, sheet.axes.constraint_load)
            ramp = ramp_time(max(clock_slew, data_slew), circuit.fractions)
            for part in (p for p in OFFSETS if p > 1 or arc.kind not in WIDTHS):
                offset = part * ramp
                end = abs(offset) + ramp + AFTER
                yield _name(arc, condition, offset), at_offset(sheet, arc, condition, offset, end)


def _name(arc: Arc, condition: Condition, offset: float | None) -> str:
    parts = [condition.corner, arc.kind.value, arc.pin, edge_name(arc.rising)]
    parts += [f"{pin}_{edge_name(rising)}" for pin, rising in arc.observed if arc.kind in DELAYS | WIDTHS]
    parts += [f"{pin}{int(level)}" for pin, level in arc.when]
    parts += ["neighbours_switch"] if arc.neighbours else []
    if condition.clock_slew is not None:
        parts.append(f"clock{condition.clock_slew * 1e12:g}ps")
    if condition.data_slew is not None:
        parts.append(f"data{condition.data_slew * 1e12:g}ps")
    if offset is not None:
        parts.append(f"offset{offset * 1e12:+.0f}ps")
    parts.append(f"{condition.load * 1e15:g}fF")
    return re.sub(r"[^\w.+-]", "_", "_".join(parts))
